"""True corners of a jagged outline."""

from geometry.corners.find import Corners, corners_by_angle, find_corners, jaggedness_scale
from geometry.corners.pinned import pin_corners

__all__ = ["Corners", "corners_by_angle", "find_corners", "jaggedness_scale", "pin_corners"]
