"""Curves as SVG paths, thinned to what can be seen; coordinates of a picture are whole numbers."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from geometry.arrays import FloatArray, IntArray

if TYPE_CHECKING:
    from converter.drawing import AnyCurve

__all__ = ["Picture", "Thinned", "extremes", "segments", "thinned"]

_ACROSS = 400_000.0  # picture units over the larger side of the drawing
_FINEST = 1.0 / 128_000.0  # of the larger side: what thinning may move a line by, doubled until few vertices are left
_VISIBLE = 1.0 / 4000.0
_FEW, _MOST = 24_000, 60_000  # vertices: enough to look closely, and to look at all


@dataclass(frozen=True, slots=True)
class Picture:
    """The frame of a picture: x to the right and y downwards from the top left corner of the drawing.

    Attributes:
        x, y: that corner, drawing units.
        scale: picture units in a drawing unit.
        width, height: of the drawing, picture units.
    """

    x: float
    y: float
    scale: float
    width: float
    height: float

    @classmethod
    def around(cls, low: FloatArray, high: FloatArray) -> "Picture":
        """Return the frame around a box, shape (2,) each corner, drawing units."""
        side = float((high - low).max())
        scale = _ACROSS / side if side > 0.0 else 1.0
        width, height = (max(float(extent) * scale, 0.01 * _ACROSS) for extent in high - low)
        return cls(float(low[0]), float(high[1]), scale, width, height)

    def units(self, points: FloatArray) -> IntArray:
        """Return points in picture units, rounded, shape (n, 2), of points in plan or space, shape (n, d)."""
        local = (points[:, :2] - np.array([self.x, self.y])) * np.array([self.scale, -self.scale])
        return np.rint(np.clip(local, -1e9, 1e9)).astype(np.int64)

    def view(self, points: FloatArray, margin: float = 0.04) -> tuple[float, float, float, float]:
        """Return the box (x, y, width, height) that shows the drawing and points, shape (n, d), picture units."""
        units = self.units(points)
        low, high = np.zeros(2), np.array([self.width, self.height])
        if len(units):
            low, high = np.minimum(low, units.min(axis=0)), np.maximum(high, units.max(axis=0))
        edge = margin * float((high - low).max())
        low, high = low - edge, high + edge
        return float(low[0]), float(low[1]), float(high[0] - low[0]), float(high[1] - low[1])


@dataclass(frozen=True, slots=True, eq=False)
class Thinned:
    """Path data of curves.

    Attributes:
        paths: one a curve, in its order.
        distance: how far they may lie from the curves, drawing units.
        vertices, drawn: vertices before and after thinning; the former those of curves made straight to half the
            distance.
    """

    paths: list[str]
    distance: float
    vertices: int
    drawn: int


def thinned(curves: "Sequence[AnyCurve]", picture: Picture) -> Thinned:
    """Return curves as path data.

    Curves are made straight within a quarter of a distance, and vertices left out by the Douglas-Peucker rule within
    three quarters of it (which keeps every vertex left out within that of the line that stands for it); rounding adds
    0.71 picture units. The distance is 1/128,000 of the picture's larger side, doubled until 24,000 vertices remain or
    it is 1/4000, which is less than can be seen of the whole; and further where even then more than 60,000 remain.
    """
    import shapely

    side = _ACROSS / picture.scale
    delta = _FINEST * side
    middle = np.array([picture.x, picture.y])
    while True:
        flat = [curve.flatten(0.25 * delta).path()[:, :2] for curve in curves]
        lines = [shapely.LineString(path - middle) for path in flat]
        kept = [
            shapely.get_coordinates(line) + middle
            for line in shapely.simplify(np.array(lines, dtype=object), 0.75 * delta, preserve_topology=False)
        ]
        drawn = sum(len(path) for path in kept)
        if drawn <= max(_FEW if delta < _VISIBLE * side else _MOST, 4 * len(curves)):
            break
        delta *= 2.0
    return Thinned(
        [_path(picture.units(path)) for path in kept],
        delta + 0.5**0.5 / picture.scale,
        sum(len(path) for path in flat),
        drawn,
    )


def _path(units: IntArray) -> str:
    """Return path data of vertices, shape (n, 2), n >= 1: steps from each to the next."""
    steps = np.diff(units, axis=0, prepend=np.zeros((1, 2), dtype=np.int64))
    return ("M%d %d" + "l%d %d" * (len(units) - 1)) % tuple(steps.ravel().tolist())


def segments(start: FloatArray, end: FloatArray, picture: Picture) -> str:
    """Return path data of separate lines, shape (n, d) each end."""
    if not len(start):
        return ""
    a, b = picture.units(start), picture.units(end)
    return ("M%d %dl%d %d" * len(a)) % tuple(np.column_stack([a, b - a]).ravel().tolist())


def extremes(along: FloatArray, values: FloatArray, bins: int, wanted: FloatArray) -> IntArray:
    """Return which samples to keep so that a chart shows every peak: the ends, the least and largest of every bin.

    Args:
        along: rising, shape (n,). values: shape (n,). bins: how many of equal length.
        wanted: places along whose nearest samples are kept besides, shape (m,).

    Returns:
        Indices, rising.
    """
    count = len(along)
    if count <= 2 * bins:
        return np.arange(count)
    length = along[-1] - along[0]
    cell = np.minimum(((along - along[0]) / (length or 1.0) * bins).astype(np.intp), bins - 1)
    order = np.lexsort((values, cell))
    first = np.flatnonzero(np.diff(cell[order], prepend=-1))
    last = np.append(first[1:], count) - 1
    near = np.clip(np.searchsorted(along, wanted), 1, count - 1)
    near -= wanted - along[near - 1] < along[near] - wanted
    return np.unique(np.concatenate([[0, count - 1], order[first], order[last], near]))
