"""Choosing sites; sees arrays, never panels or models."""
