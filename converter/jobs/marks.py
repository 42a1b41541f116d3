"""Corners that the user has marked by POINT entities on a layer."""

from dataclasses import dataclass

import numpy as np

from converter.drawing import Drawing, Profile
from converter.errors import NoProfileError
from geometry.arrays import BoolArray, FloatArray

__all__ = ["Marks", "read_marks"]


@dataclass(slots=True, eq=False)
class Marks:
    """Marked corners.

    Attributes:
        points: world coordinates, shape (n, 3), drawing units.
        handles: of the POINT entities.
        used: which of them a profile has taken, shape (n,).
    """

    points: FloatArray
    handles: tuple[str, ...]
    used: BoolArray

    def in_frame(self, profile: Profile) -> FloatArray:
        """Return the marks in the coordinates of a profile, shape (n, 2 or 3)."""
        if profile.dimension == 3:
            return self.points
        return np.ascontiguousarray((self.points @ profile.frame.axes().T)[:, :2])

    def unused(self) -> list[str]:
        """Return a warning for every mark that lies on no faired profile."""
        return [
            f"POINT {handle} marks no corner: no faired profile passes within its tolerance"
            for handle, used in zip(self.handles, self.used, strict=True)
            if not used
        ]


def read_marks(drawing: Drawing, layer: str | None) -> Marks:
    """Return the POINT entities of a layer.

    Raises:
        NoProfileError: the layer holds no POINT.
    """
    if layer is None:
        return Marks(np.zeros((0, 3)), (), np.zeros(0, dtype=np.bool_))
    found = [
        entity
        for entity in drawing.document.modelspace().query("POINT")
        if str(entity.dxf.layer).lower() == layer.lower()
    ]
    if not found:
        raise NoProfileError(f"{drawing.path}: no POINT on layer {layer} to mark corners; check the layer's name")
    points = np.array([tuple(entity.dxf.location) for entity in found], dtype=np.float64)
    return Marks(points, tuple(str(entity.dxf.handle) for entity in found), np.zeros(len(found), dtype=np.bool_))
