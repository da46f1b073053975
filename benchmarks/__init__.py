"""Benchmarks of the service."""
