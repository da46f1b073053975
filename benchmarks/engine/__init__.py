"""Benchmarks of measuring: how near it comes to the cost of decoding the bands."""
