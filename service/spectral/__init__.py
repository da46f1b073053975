"""What a pixel's numbers mean: band roles, sensors, scaling, quality rules, indices."""
