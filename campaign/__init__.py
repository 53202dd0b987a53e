"""Turns a campaign folder of stretchable strain sensor recordings into an offline site of evidence."""

__version__ = "0.2.0"
