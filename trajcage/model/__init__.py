"""Validated, immutable data that cross the floors of the package."""

from trajcage.model.box import Box
from trajcage.model.field import Field
from trajcage.model.frame import Frame

__all__ = ["Box", "Field", "Frame"]
