"""What every curve offers: polyline, arc chain and spline are measured and drawn through these few methods."""

from typing import Protocol

from geometry.arrays import FloatArray
from geometry.polyline import Polyline

__all__ = ["Curve"]


class Curve(Protocol):
    """A curve of one profile: smooth pieces joined at corners, open or closed."""

    @property
    def closed(self) -> bool:
        """Whether the end meets the start."""

    @property
    def dimension(self) -> int:
        """Number of coordinates of a point."""

    def length(self) -> float:
        """Return the arc length, drawing units."""

    def area(self) -> float:
        """Return the signed area, anticlockwise positive; 0 when open or not planar in x, y."""

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """Return the least and the greatest coordinates of the curve."""

    def flatten(self, delta: float) -> Polyline:
        """Return a polyline within `delta` of the curve in order of travel; its vertices lie on the curve."""
