"""Bytes to values and back."""
