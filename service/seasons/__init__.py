"""What is normal at which time of the season; for now, where a season begins and ends."""
