"""From an outline to the curve that is written: fair, economise, certify, and try again more carefully."""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from geometry.arcs import ArcChain, full_circle
from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline
from geometry.corners import Corners, corners_by_angle, find_corners, pin_corners
from geometry.deviation import TwoSided, hausdorff
from geometry.errors import GeometryError
from geometry.fairing import Faired, fair_outline
from geometry.polyline import Polyline
from geometry.simple import is_simple

__all__ = ["Form", "Result", "best_curve", "corner_turns", "outline_corners"]

Form = Literal["spline", "arcs", "lines"]

_SIMPLE = 1e-3  # of the tolerance: flattening for the search for crossings
_WIDTH = 1.0 / 200.0  # of the tolerance: how far certified and measured may lie apart
_CAREFUL = (1.0, 0.9, 0.75, 0.5)  # shares of the tolerance given to the fairing, one after the other
_ECONOMY = (1.0, 0.3, 0.1)  # shares of the chord error given to the economy


@dataclass(frozen=True, slots=True)
class Result:
    """The curve to write.

    Attributes:
        curve: in the plane of the outline.
        faired: the fair curve that it stands for.
        deviation: certified distance between outline and curve, slack included.
        within: whether the certified distance keeps the tolerance.
        crosses: whether the curve crosses or touches itself though the outline does not.
    """

    curve: Spline | ArcChain | Polyline
    faired: Faired
    deviation: TwoSided
    within: bool
    crosses: bool


def outline_corners(
    outline: Polyline, tolerance: float, angle: float | None, marks: FloatArray
) -> tuple[Corners, BoolArray]:
    """Return the corners of an outline, and which marks belong to it.

    Args:
        outline: cleaned, 2-D or 3-D.
        tolerance: drawing units; marks farther from the outline do not belong to it.
        angle: turn, radians, above which a vertex is a corner; None finds the true corners.
        marks: points that the user has marked as corners, shape (n, 2 or 3).
    """
    if angle is not None:
        found = corners_by_angle(outline, angle)
    elif outline.dimension == 2:
        found = find_corners(outline, tolerance)
    else:
        found = _spatial_corners(outline, tolerance)
    return pin_corners(found, outline, marks, tolerance)


def _spatial_corners(outline: Polyline, tolerance: float) -> Corners:
    """Find corners in the plane that a 3-D outline lies nearest to, and carry them back to the outline."""
    centre = outline.points.mean(axis=0)
    _, _, axes = np.linalg.svd(outline.points - centre, full_matrices=False)
    flat = Polyline((outline.points - centre) @ axes[:2].T, outline.closed)
    steps = flat.edge_lengths()
    if (steps <= 0.0).any():  # a stretch square to the plane has no direction in it
        return Corners(np.zeros(0), np.zeros((0, 3)), np.zeros(0))
    found = find_corners(flat, tolerance)
    own = np.interp(found.along, flat.alongs(), outline.alongs())
    return Corners(own, outline.at(own), found.turns)


def best_curve(
    outline: Polyline,
    corners: Corners,
    tolerance: float,
    chord_error: float,
    form: Form,
    degree: int,
    slack: float,
) -> Result | None:
    """Return the curve of a form that keeps the tolerance, certified; the best one found where none does.

    The fairing gets the whole tolerance at first and the economy the chord error; where the certified distance of
    what comes out passes the tolerance, the economy and then the fairing get less. A circle is written as
    the circle that it is.

    Args:
        outline: cleaned, the profile as a polyline.
        corners: where the tangent may jump.
        tolerance: largest distance between profile and curve, both ways, drawing units.
        chord_error: share of it that the economy may spend.
        form: what to write; arcs are planar.
        degree: of the spline, 2 or 3.
        slack: bound on the distance between outline and profile, added to the certified distance.

    Returns:
        None where no fair curve was found at all.
    """
    best: Result | None = None
    for share in _CAREFUL:
        faired = fair_outline(outline, corners, share * tolerance, degree)
        if faired.as_given:
            break  # less tolerance would not help
        for part in (*_ECONOMY, 0.0) if form == "spline" else _ECONOMY:
            curve = _economised(faired, part * chord_error, form)
            if curve is None:
                continue
            result = _certified(outline, curve, faired, tolerance, slack)
            if best is None or (result.crosses, result.deviation.certified) < (best.crosses, best.deviation.certified):
                best = result
            if result.within and not result.crosses:
                return result
    return best


def _certified(
    outline: Polyline, curve: Spline | ArcChain | Polyline, faired: Faired, tolerance: float, slack: float
) -> Result:
    deviation = hausdorff(outline, curve, _WIDTH * tolerance)
    within = deviation.certified + slack <= tolerance
    crosses = within and outline.dimension == 2 and _crosses(outline, curve, tolerance)
    return Result(curve, faired, deviation, within, crosses)


def _crosses(outline: Polyline, curve: Spline | ArcChain | Polyline, tolerance: float) -> bool:
    """Tell whether a curve crosses or touches itself though the outline does not (two walls closer than the band)."""
    drawn = curve.flatten(_SIMPLE * tolerance)
    return not is_simple(drawn) and is_simple(outline)


def _economised(faired: Faired, chord_error: float, form: Form) -> Spline | ArcChain | Polyline | None:
    """Return the curve with few entities; as it is for no chord error; None where the form cannot be had."""
    spline = faired.spline
    if chord_error <= 0.0:
        return spline
    try:
        if form == "arcs" and faired.circle is not None:
            chain = full_circle(*faired.circle)
            return chain if spline.area() > 0.0 else chain.reversed()
        if form == "arcs":
            from geometry.economy.arcs import fewest_arcs

            return fewest_arcs(spline, chord_error)
        if form == "lines":
            from geometry.economy.lines import fewest_vertices

            return fewest_vertices(spline, chord_error)
        from geometry.economy.knots import fewest_knots

        return fewest_knots(spline, chord_error)
    except GeometryError:
        return None


def corner_turns(spline: Spline) -> tuple[FloatArray, FloatArray]:
    """Return places and turns (radians, left positive in 2-D) of the corners of a spline."""
    pieces = spline.beziers
    at = spline.corner_breaks
    before, after = pieces[at - 1], pieces[at]
    if spline.closed and not spline.smooth_seam:
        before, after = np.concatenate([before, pieces[-1:]]), np.concatenate([after, pieces[:1]])
    d1, d2 = _end_direction(before[:, ::-1]) * -1.0, _end_direction(after)
    dot = (d1 * d2).sum(axis=1)
    if spline.dimension == 2:
        turn = np.arctan2(d1[:, 0] * d2[:, 1] - d1[:, 1] * d2[:, 0], dot)
    else:
        turn = np.arctan2(np.linalg.norm(np.cross(d1, d2), axis=1), dot)
    return after[:, 0], turn


def _end_direction(pieces: FloatArray) -> FloatArray:
    """Return the direction in which Bezier pieces leave their first point: to the first control point off it."""
    steps = pieces[:, 1:] - pieces[:, :1]
    size = np.linalg.norm(steps, axis=2)
    first = np.argmax(size > 1e-9 * np.maximum(size.max(axis=1, keepdims=True), 1e-300), axis=1)
    step = steps[np.arange(len(pieces)), first]
    return step / np.maximum(np.linalg.norm(step, axis=1), 1e-300)[:, None]
