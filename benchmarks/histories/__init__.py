"""Invented multi-year histories of parcels: the one place that makes them, `making.make`."""
