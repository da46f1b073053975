"""Benchmarks: invented inputs, strict scoring and rival methods, none of it part of the service."""
