"""Furrowlight: vegetation and water index monitoring for field parcels."""

__version__ = "0.1.0"
