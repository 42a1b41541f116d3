"""Dense points: vertices on a spline, as few as keep a chord error, a longest step and a largest turn.

Between corners (and other places that must be vertices) the vertices are spread so that every chord uses the same
share of what is allowed: the density of vertices is kept by cells of the parameter, every chord is measured, and the
density is raised or lowered by what was measured, until the least number that fits is found. Where shares stay uneven a
walk that takes the farthest chord each time is tried as well.
Source of equidistribution: C. de Boor, "Good approximation by splines with variable knots II", in Conference on the
Numerical Solution of Differential Equations, Lecture Notes in Mathematics 363, Springer 1974.
"""

from collections.abc import Iterator
from itertools import pairwise

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.bspline import Spline
from geometry.dense.measure import ChordLimits, SplineMeasure
from geometry.dense.points import CHUNK, Dense, dense_at
from geometry.dense.walk import farthest_chords
from geometry.errors import GeometryError

__all__ = ["dense_points"]

MOST_POINTS = 50_000_000
_CELLS = 256  # cells a knot span at most
_ROUNDS, _TRIES = 40, 5
_HOPELESS = 20.0  # times the number that curvature asks for: then something turns on the spot
_MANY, _SPARE = 4000, 0.02  # chords of a piece over which that share of them may be more than is needed
_EVEN = 0.99  # mean usage from which on no fewer chords are looked for
_POWER = 6.0  # of the means of usage: nearly the largest, yet smooth
_SAME = 1e-12  # of the length of the parameter: nearer to a knot than this is the knot
_SMOOTH = 1e-4  # radians: a knot of full multiplicity that turns less is no corner
_SAFE = 1.0 - 1e-9  # share of a limit that is used, so that rounding does not pass it


def dense_points(
    spline: Spline,
    chord_error: float | None = None,
    max_step: float | None = None,
    max_turn: float | None = None,
    keep: FloatArray | None = None,
) -> Dense:
    """Return few vertices on a spline that keep all limits; corners and the ends are vertices.

    Between vertices that must be, the number is lowered until the limits are passed: chords that all use the same share
    of what is allowed are the fewest there can be, where a part of a chord never uses more than the whole of it.

    Args:
        spline: degree 1 to 3, d = 2 or 3.
        chord_error: largest distance between a chord and its piece of curve, drawing units; None for no limit.
            Certified: every chord is bounded as the head of `geometry.dense.measure` proves. The limits are tightened
            by 1e-9 of themselves, which covers the rounding of the bound; the points themselves are rounded to 16
            figures of the coordinates.
        max_step: longest chord, drawing units; None for no limit.
        max_turn: largest turn at a vertex that is no corner, radians; None for no limit. A turn is held by its two
            halves, the angles between a chord and the tangents at its ends: two chords that keep half of it each cannot
            turn by more. The smooth seam of a closed spline is held as well. More than a right angle is taken as one.
        keep: parameters that must be vertices, those of stations for instance, within the knots, any shape.

    Returns:
        The vertices in order of travel, the end of a closed curve (its start again) included; a closed curve has at
        least three others.

    Raises:
        GeometryError: no limit, one that is not positive, one that takes more than 50 million points, a parameter out
            of the knots, or a largest turn that no number of points keeps (a cusp).
    """
    stated = {"chord error": chord_error, "longest step": max_step, "largest turn": max_turn}
    for name, value in stated.items():
        if value is not None and not (value > 0.0 and np.isfinite(value)):
            raise GeometryError(f"{name} {value:g} is not a positive number")
    if all(value is None for value in stated.values()):
        raise GeometryError("dense points need a chord error, a longest step or a largest turn")
    limits = ChordLimits(
        _SAFE * (np.inf if chord_error is None else chord_error),
        _SAFE * (np.inf if max_step is None else max_step),
        np.inf if max_turn is None else _SAFE * min(0.5 * np.pi, max_turn),
    )
    return _Search(spline, limits, keep).run()


class _Search:
    """The search for the least numbers of chords, of all pieces at once."""

    def __init__(self, spline: Spline, limits: ChordLimits, keep: FloatArray | None) -> None:
        self.spline, self.limits, self.measure = spline, limits, SplineMeasure(spline)
        breaks = spline.breaks
        keep = np.zeros(0) if keep is None else np.asarray(keep, dtype=np.float64).ravel()
        if not ((keep >= breaks[0]) & (keep <= breaks[-1])).all():
            raise GeometryError("a parameter to keep lies beyond the ends of the curve")
        near = breaks[np.clip(np.searchsorted(breaks, keep), 1, len(breaks) - 1) - np.array([[1], [0]])]
        near = np.where(np.abs(near[0] - keep) < np.abs(near[1] - keep), near[0], near[1])
        keep = np.where(np.abs(near - keep) <= _SAME * (breaks[-1] - breaks[0]), near, keep)
        self.corners = breaks[_corners(spline)]
        stops = np.unique(np.concatenate([breaks[[0, -1]], self.corners, keep]))
        spans = np.unique(np.concatenate([breaks, stops]))
        density = self.measure.demand(spans[:-1], spans[1:], limits)
        cells = np.clip(np.ceil(8.0 * density), 6, _CELLS).astype(np.intp)
        if spline.degree == 1:
            cells[:] = 1
        span = np.repeat(np.arange(len(cells)), cells)
        step = np.arange(len(span)) - np.repeat(np.cumsum(cells) - cells, cells)
        self.edges = np.append(spans[span] + np.diff(spans)[span] * step / cells[span], spans[-1])
        self.first = np.searchsorted(self.edges, stops[:-1])  # first cell of every piece
        self.stops = stops
        self.least = {1: 3.0, 2: 2.0}.get(len(stops) - 1, 1.0) if spline.closed else 1.0  # chords of a piece
        self.density = np.maximum(self.measure.demand(self.edges[:-1], self.edges[1:], limits), 1e-9)

    def run(self) -> Dense:
        sums = np.add.reduceat(self.density, self.first)
        self._check_count(sums)
        many = sums > _MANY
        count = np.maximum(np.ceil(np.where(many, 1.002, 0.97) * sums), self.least)
        best = np.full(len(count), np.inf)
        best_density = self.density.copy()
        fails = np.zeros(len(count), dtype=np.intp)
        done = np.zeros(len(count), dtype=np.bool_)
        cells = np.diff(np.append(self.first, len(self.density)))
        for turn in range(4 * _ROUNDS):
            most, usage = self._usage(count)
            worst = np.maximum.reduceat(most, self.first)
            fits = worst <= 1.0
            better = np.repeat(fits & (count < best), cells)
            best = np.where(fits, np.minimum(count, best), best)
            best_density[better] = self.density[better]
            scaled = self.density * np.repeat(count / np.add.reduceat(self.density, self.first), cells)
            needed = np.add.reduceat(scaled * np.maximum(usage, 0.05), self.first)
            spare = np.where(many, _SPARE * count, 0.6)
            less = fits & ~done & (count > self.least) & (needed <= count - spare) & (turn < _ROUNDS)
            done |= fits & ~less
            fails = np.where(fits, 0, fails + 1)
            gave_up = ~fits & (fails >= _TRIES)
            done |= gave_up & np.isfinite(best)
            if done.all() or (~fits & (count > _HOPELESS * sums + _MANY)).any():
                break
            more = ~fits & ~done & (gave_up | many | (turn >= _ROUNDS))
            update = np.maximum(usage, 0.2) ** (1.0 if turn < 3 else 0.6)
            self.density = np.where(np.repeat(done, cells), self.density, scaled * update)
            count = np.where(less, np.maximum(np.minimum(count - 1.0, np.ceil(needed)), self.least), count)
            grown = np.ceil(count * np.clip(worst, 1.0 + 1.0 / count, 2.0 if turn >= _ROUNDS else 1.015) - 1e-9)
            count = np.where(more, np.maximum(grown, count + 1.0), count)
            fails[more] = 0
            self._check_count(count)
        if not np.isfinite(best).all():
            at = self.measure.spline.evaluate(self.stops[[int(np.argmax(~np.isfinite(best)))]])[0]
            where = ", ".join(f"{value:g}" for value in at)
            raise GeometryError(
                f"no number of points keeps the limits after ({where}): the curve turns on the spot there; "
                "leave out the largest turn or make that place a corner"
            )
        self.density = best_density
        return dense_at(self.measure, self._walked(self._parameters(best), best))

    def _walked(self, u: FloatArray, count: FloatArray) -> FloatArray:
        """Return the parameters with pieces laid anew by a walk where it takes fewer chords."""
        if self.measure.spline.degree == 1:
            return u
        stop = np.append(0, np.cumsum(count)).astype(np.intp)
        small = (count > self.least) & (count <= _MANY)
        if not small.any():
            return u
        used = np.concatenate([self.measure.usage(a[:-1], a[1:], self.limits) for a in _portions(u)])
        uneven = small & (np.add.reduceat(used, stop[:-1]) < _EVEN * count)
        parts = []
        for (first, last), walk in zip(pairwise(stop.tolist()), uneven.tolist(), strict=True):
            part = u[first : last + 1]
            if walk:
                walked = farthest_chords(self.measure, self.limits, part)
                fits = self.measure.usage(walked[:-1], walked[1:], self.limits).max() <= 1.0
                part = walked if fits and self.least < len(walked) < len(part) else part
            parts.append(part[:-1])
        return np.append(np.concatenate(parts), u[-1])

    def _check_count(self, counts: FloatArray) -> None:
        total = float(counts.sum())
        if not total <= MOST_POINTS:
            raise GeometryError(f"the limits take {total:.3g} points, more than {MOST_POINTS}; state larger limits")

    def _parameters(self, count: FloatArray) -> FloatArray:
        """Return the parameters of all vertices for given numbers of chords of the pieces."""
        sums = np.add.reduceat(self.density, self.first)
        cells = np.diff(np.append(self.first, len(self.density)))
        start = np.cumsum(count) - count
        running = np.cumsum(self.density) - self.density
        within = (running - np.repeat(running[self.first], cells)) * np.repeat(count / sums, cells)
        levels = np.append(np.repeat(start, cells) + within, count.sum())
        levels[self.first] = start
        u = np.interp(np.arange(levels[-1] + 1.0), levels, self.edges)
        u[np.append(start, count.sum()).astype(np.intp)] = self.stops
        return u

    def _usage(self, count: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return by cell the largest and a mean share of a limit that the chords in it use, shapes (c,)."""
        every = self._parameters(count)
        worst, total, weight = (np.zeros(len(self.density)) for _ in range(3))
        for u in _portions(every):
            used = self.measure.usage(u[:-1], u[1:], self.limits)
            _spread(worst, total, weight, used, self.edges, u)
        return worst, (total / np.maximum(weight, 1e-300)) ** (1.0 / _POWER)


def _portions(u: FloatArray) -> Iterator[FloatArray]:
    """Yield the vertices in portions that share their ends."""
    for first in range(0, len(u) - 1, CHUNK):
        yield u[first : first + CHUNK + 1]


def _spread(
    worst: FloatArray, total: FloatArray, weight: FloatArray, used: FloatArray, edges: FloatArray, u: FloatArray
) -> None:
    """Raise the worst usage of every cell to that of the chords in it, and add to the power sums of usage over it."""
    low = np.clip(np.searchsorted(edges, u[:-1], side="right") - 1, 0, len(worst) - 1)
    high = np.clip(np.searchsorted(edges, u[1:], side="left") - 1, low, len(worst) - 1)
    count = high - low + 1
    cell = np.repeat(low - np.cumsum(count) + count, count) + np.arange(count.sum())
    chord = np.repeat(np.arange(len(used)), count)
    np.maximum.at(worst, cell, used[chord])
    part = np.minimum(edges[cell + 1], u[chord + 1]) - np.maximum(edges[cell], u[chord])
    part = np.maximum(part, 0.0) / (edges[cell + 1] - edges[cell])
    total += np.bincount(cell, weights=part * used[chord] ** _POWER, minlength=len(total))
    weight += np.bincount(cell, weights=part, minlength=len(weight))


def _corners(spline: Spline) -> IntArray:
    """Return the breaks at which the tangent jumps, the seam of a closed spline apart."""
    at = spline.corner_breaks
    if not len(at):
        return at
    before = spline.beziers[at - 1, -1] - spline.beziers[at - 1, -2]
    after = spline.beziers[at, 1] - spline.beziers[at, 0]
    sizes = np.maximum(np.linalg.norm(before, axis=1) * np.linalg.norm(after, axis=1), 1e-300)
    straight: BoolArray = (before * after).sum(axis=1) > np.cos(_SMOOTH) * sizes
    return at[~straight] if spline.degree > 1 else at
