"""How a fair curve is written: the form, its limits, the decimals; and what the controller will see of it."""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from geometry.arcs import ArcChain, full_circle
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.errors import GeometryError
from geometry.polyline import Polyline

__all__ = [
    "Counts",
    "Form",
    "Writing",
    "Written",
    "beyond_radii",
    "counts_of",
    "economised",
    "least_of",
    "rounded",
    "rounding_of",
    "sharper_turns",
]

Form = Literal["spline", "arcs", "lines"]
Written = Spline | ArcChain | Polyline


@dataclass(frozen=True, slots=True)
class Writing:
    """How to write a curve; lengths in drawing units.

    Attributes:
        form: SPLINE, lines and arcs, or vertices.
        on_curve: lines only: whether vertices must lie on the curve; otherwise they lie about it, fewer of them.
        max_step: lines only: longest segment; None for no limit.
        max_turn: lines only: largest turn at a vertex that is no corner, radians; None for no limit.
        least_radius, most_radius: arcs only: radii that arcs keep where the chord error allows it; None for no limit.
        decimals: places that coordinates are rounded to; None writes them in full.
    """

    form: Form = "spline"
    on_curve: bool = False
    max_step: float | None = None
    max_turn: float | None = None
    least_radius: float | None = None
    most_radius: float | None = None
    decimals: int | None = None

    @property
    def rounding(self) -> float:
        """How far rounding may move a vertex or a control point, in the plane or in space: half a unit a coordinate."""
        return 0.0 if self.decimals is None else 0.5 * 3.0**0.5 * 10.0**-self.decimals

    @property
    def step(self) -> float | None:
        """Longest segment before rounding, so that none is longer than `max_step` after it."""
        return None if self.max_step is None else self.max_step - 2.0 * self.rounding


@dataclass(frozen=True, slots=True)
class Counts:
    """What the controller will see of a curve; counts that do not apply are 0.

    Attributes:
        entities: the number to keep low: control points of a spline, arcs and lines of a chain, vertices of a polyline.
        pieces: polynomial spans, arcs and lines, or sides.
        control_points, arcs, lines, vertices: of the entity written.
    """

    entities: int
    pieces: int
    control_points: int = 0
    arcs: int = 0
    lines: int = 0
    vertices: int = 0


def economised(
    spline: Spline, circle: tuple[FloatArray, float] | None, chord_error: float, writing: Writing
) -> Written | None:
    """Return a fair curve in the form to write, with few entities.

    Args:
        spline: the fair curve.
        circle: centre and radius where it is a whole circle.
        chord_error: how far the result may lie from it; 0 returns a spline as it is.
        writing: how to write it.

    Returns:
        None where the form cannot be had within the chord error.
    """
    if chord_error <= 0.0:
        return spline if writing.form == "spline" else None
    try:
        if writing.form == "arcs" and circle is not None:
            chain = full_circle(*circle)
            return chain if spline.area() > 0.0 else chain.reversed()
        if writing.form == "arcs":
            from geometry.economy.arcs import fewest_arcs

            return fewest_arcs(spline, chord_error, least_radius=writing.least_radius, most_radius=writing.most_radius)
        if writing.form == "lines":
            from geometry.economy.lines import fewest_vertices

            return fewest_vertices(spline, chord_error, writing.on_curve, writing.step, writing.max_turn)
        from geometry.economy.knots import fewest_knots

        return fewest_knots(spline, chord_error)
    except GeometryError:
        return None


def rounded(curve: Written, circle: bool, decimals: int | None) -> Written:
    """Return a curve with the coordinates of its vertices or control points rounded; bulges and knots stay in full.

    Equal points are rounded alike, so corners stay corners and closed curves stay closed. Of a circle centre and
    radius are rounded; neighbouring vertices that fall on one another become one.

    Args:
        curve: in the coordinates it is written in.
        circle: whether it is written as a CIRCLE.
        decimals: places; None returns the curve as it is.
    """
    if decimals is None:
        return curve
    if isinstance(curve, Spline):
        control = np.round(curve.control, decimals)
        return Spline(curve.knots, control, curve.degree, curve.closed, curve.smooth_seam)
    if isinstance(curve, ArcChain) and circle:
        radius = 0.5 * float(np.linalg.norm(curve.points[1] - curve.points[0]))
        chain = full_circle(np.round(curve.points.mean(axis=0), decimals), round(radius, decimals))
        return chain if curve.bulges[0] > 0.0 else chain.reversed()
    points = np.round(curve.points, decimals)
    after = np.roll(points, -1, axis=0)
    apart = (points != after).any(axis=1)
    if not curve.closed:
        apart[-1] = True
    if isinstance(curve, ArcChain):
        return ArcChain(points[apart], curve.bulges[apart[: len(curve.bulges)]], curve.closed)
    return Polyline(points[apart], curve.closed)


def rounding_of(curve: Written, decimals: int | None) -> float:
    """Return a bound on how far `rounded` moves any point of a curve.

    Each coordinate of a vertex or control point moves by half a unit u at most, so the point by u sqrt(d) in d
    dimensions. Points of a side or of a spline are averages of those and move no farther. A point P of an arc from A to
    B is A + (B - A) w with a complex w that the bulge b fixes, so it moves by at most |w| + |1 - w| times that, which
    is (PA + PB) / AB. By the law of sines that sum is largest where both are equal, at the top of the arc, b AB / 2
    over the chord: sqrt(1 + b^2). A whole circle moves by u sqrt(2) with its centre and by u with its radius. Where
    vertices become one the same holds, for then A and B are the same point.
    """
    if decimals is None:
        return 0.0
    unit = 0.5 * 10.0**-decimals
    if not isinstance(curve, ArcChain):
        return float(unit * curve.dimension**0.5)
    bend = float(np.abs(curve.bulges).max(initial=0.0))
    return unit * max(1.0 + 2.0**0.5, float(np.sqrt(2.0 * (1.0 + bend * bend))))


def sharper_turns(before: Written, after: Written, max_turn: float | None) -> int:
    """Count how many more vertices turn by more than a limit after rounding than before.

    Args:
        before, after: as found and as written; only polylines have vertices that turn.
        max_turn: radians; None counts nothing.
    """
    if max_turn is None or not isinstance(before, Polyline) or not isinstance(after, Polyline):
        return 0
    sharp = [int((np.abs(_turns(path)) > max_turn * (1.0 + 1e-6)).sum()) for path in (before, after)]
    return max(0, sharp[1] - sharp[0])


def _turns(path: Polyline) -> FloatArray:
    """Return the angle between the sides that meet at each vertex, 0 to pi, the ends of an open path left out."""
    points = path.path()
    edges = np.diff(np.vstack([points, points[1:2]]) if path.closed else points, axis=0)
    edges /= np.linalg.norm(edges, axis=1)[:, None]
    halves = np.linalg.norm(np.diff(edges, axis=0), axis=1)
    return 2.0 * np.arcsin(np.clip(0.5 * halves, 0.0, 1.0))


def counts_of(curve: Written, circle: bool = False) -> Counts:
    """Count what the controller will see.

    Args:
        curve: as written.
        circle: whether it is written as a CIRCLE.
    """
    if isinstance(curve, Spline):
        return Counts(len(curve.control), len(curve.spans), control_points=len(curve.control))
    if isinstance(curve, ArcChain):
        if circle:
            return Counts(1, 1, arcs=1)
        arcs, pieces = int(np.count_nonzero(curve.bulges)), len(curve.bulges)
        return Counts(pieces, pieces, arcs=arcs, lines=pieces - arcs, vertices=len(curve.points))
    vertices = len(curve.points)
    sides = vertices - (0 if curve.closed else 1)
    return Counts(vertices, sides, lines=sides, vertices=vertices)


def least_of(
    spline: Spline, circle: tuple[FloatArray, float] | None, chord_error: float, writing: Writing
) -> float | None:
    """Return the theoretical least number of entities for a fair curve, a chord error and a form.

    By the asymptotic formulas of `geometry.economy.least`; for splines that is a yardstick and no bound. None for
    splines in space, and where limits on steps and turns ask for more than the chord error does.
    """
    if chord_error <= 0.0:
        return None
    if writing.form == "arcs" and circle is not None:
        return 1.0
    from geometry.economy.least import least_arcs, least_control_points, least_vertices

    if writing.form == "spline":
        return least_control_points(spline, chord_error, spline.degree) if spline.dimension == 2 else None
    if writing.form == "arcs":
        return least_arcs(spline, chord_error)
    if writing.max_step is not None or writing.max_turn is not None:
        return None
    return least_vertices(spline, chord_error, writing.on_curve)


def beyond_radii(curve: Written, writing: Writing) -> list[tuple[float, FloatArray]]:
    """Return radius and middle of the chord of every arc that passes a limit on radii, the worst first."""
    if not isinstance(curve, ArcChain) or (writing.least_radius is None and writing.most_radius is None):
        return []
    from geometry.economy.arc_radii import outside_radii

    beyond = outside_radii(curve, writing.least_radius, writing.most_radius)
    radii = 1.0 / np.abs(curve.curvatures()[beyond])
    path = curve.path()
    excess = np.maximum((writing.least_radius or 0.0) / radii, radii / (writing.most_radius or np.inf))
    order = np.argsort(-excess, kind="stable")
    return [(float(radii[k]), 0.5 * (path[beyond[k]] + path[beyond[k] + 1])) for k in order.tolist()]
