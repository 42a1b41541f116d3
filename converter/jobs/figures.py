"""Profiles of two drawings made comparable: each one curve, in the coordinates and units of one of the drawings."""

from dataclasses import dataclass, replace

import numpy as np

from converter.drawing import AnyCurve, Drawing, Profile
from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["Figure", "figures_of", "in_space", "scaled"]

_FLATTENING = 1e-7  # of the drawing's size: what chains of several curves and tilted ones are flattened to


@dataclass(frozen=True, slots=True, eq=False)
class Figure:
    """A profile as it is compared.

    Attributes:
        id, layer, closed, types: as `Profile`.
        curve: the whole of it: in plan (2-D) where its plane is level, in space (3-D) elsewhere.
        elevation: height of the plane of a 2-D curve, drawing units.
        slack: bound on the distance between the curve and what is drawn, drawing units.
    """

    id: str
    layer: str
    closed: bool
    types: tuple[str, ...]
    curve: AnyCurve
    elevation: float
    slack: float

    @property
    def size(self) -> float:
        """Diagonal of its bounding box, drawing units."""
        low, high = self.curve.bounds()
        return float(np.linalg.norm(high - low))


def figures_of(drawing: Drawing, factor: float = 1.0) -> list[Figure]:
    """Return every profile of a drawing as one curve, all lengths multiplied by a factor."""
    if drawing.extents is None:
        return []
    low, high = drawing.extents
    size = float(np.linalg.norm(high - low))
    delta = max(_FLATTENING * size, 1e-300)
    return [scaled(_figure(profile, delta), factor) for profile in drawing.profiles]


def _figure(profile: Profile, delta: float) -> Figure:
    curve: AnyCurve
    slack = profile.approximation
    if profile.dimension == 2 and not profile.frame.level:
        curve = Polyline(profile.frame.to_world(profile.flatten(delta).points), profile.closed)
        slack += delta
    elif len(profile.parts) == 1:
        curve = profile.parts[0]
    else:
        curve = profile.flatten(delta)
        slack += delta
    return Figure(profile.id, profile.layer, profile.closed, profile.types, curve, profile.elevation, slack)


def scaled(figure: Figure, factor: float) -> Figure:
    """Return a figure with all lengths multiplied by a factor."""
    if factor == 1.0:
        return figure
    curve = figure.curve
    new: AnyCurve
    if isinstance(curve, Spline):
        new = replace(curve, control=curve.control * factor)
    elif isinstance(curve, ArcChain):
        new = ArcChain(curve.points * factor, curve.bulges, curve.closed)
    else:
        new = Polyline(curve.points * factor, curve.closed)
    return replace(figure, curve=new, elevation=figure.elevation * factor, slack=figure.slack * factor)


def in_space(figure: Figure, delta: float) -> Figure:
    """Return a figure with a curve in space; arcs are flattened.

    Args:
        figure: any.
        delta: largest distance that flattening may cost, drawing units, above 0.
    """
    curve = figure.curve
    if curve.dimension == 3:
        return figure
    if isinstance(curve, Spline):
        return replace(figure, curve=replace(curve, control=_lifted(curve.control, figure.elevation)))
    flat = curve.flatten(delta)
    slack = figure.slack + (delta if isinstance(curve, ArcChain) else 0.0)
    return replace(figure, curve=Polyline(_lifted(flat.points, figure.elevation), curve.closed), slack=slack)


def _lifted(points: FloatArray, height: float) -> FloatArray:
    return np.column_stack([points, np.full(len(points), height)])
