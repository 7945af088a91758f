"""Exact cages, free volumes and cage breaking of hard spheres and colloids."""

__version__ = "0.1.0"
