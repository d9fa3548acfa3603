"""Chooses the fewest marks of a panel to measure so that its distortion corrections are certain enough."""

__version__ = "0.1.0"
