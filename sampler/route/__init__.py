"""Visiting order and seconds."""
