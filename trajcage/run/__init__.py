"""Placeholder, filled by its own module."""
