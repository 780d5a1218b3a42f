"""Describing a network of critical-care units and running it."""

__version__ = "0.1.0"
