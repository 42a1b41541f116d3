"""Chords between points of a spline, measured: how far the curve leaves them, how long and how turned they are.

A stretch of the parameter is cut at the knots, and every cut is written as a polynomial about its own start, so that
nothing is lost where chords are short. With q the control points of a cut seen from the start of the chord, the
distance from the chord is at most hypot(a, b), a the largest distance from the line of the chord and b how far any q
lies beyond the ends of the chord: the curve stays in the convex hull of q, and a point of it whose foot lies beyond an
end is at most b farther along than that end. In the plane a is the extreme of a cubic polynomial, found exactly. In
space a is the extreme of the cubic with the Bezier values |q - foot of q|, which bounds it because the Bernstein
polynomials are not negative.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline

__all__ = ["ChordLimits", "SplineMeasure"]

_TINY = 1e-300


@dataclass(frozen=True, slots=True)
class ChordLimits:
    """What chords must keep; infinite for no limit.

    Attributes:
        chord_error: largest distance from the chord to its piece of curve, drawing units.
        step: longest chord, drawing units.
        turn: largest turn between chords, radians.
    """

    chord_error: float
    step: float
    turn: float


@dataclass(frozen=True, slots=True, eq=False)
class _Cuts:
    """Stretches cut at the knots; polynomials start + e1 t + e2 t^2 + e3 t^3 for t from 0 to 1.

    Attributes:
        stretch: the stretch that a cut belongs to, shape (c,).
        opens, closes: first and last cut of every stretch, shapes (m,).
        start: start of the cut seen from the start of its stretch, one array of shape (c,) a coordinate.
        e1, e2, e3: coefficients, the same.
    """

    stretch: IntArray
    opens: IntArray
    closes: IntArray
    start: list[FloatArray]
    e1: list[FloatArray]
    e2: list[FloatArray]
    e3: list[FloatArray]


class SplineMeasure:
    """A spline as power series about the starts of its spans, for measuring many chords."""

    def __init__(self, spline: Spline) -> None:
        self.spline = spline
        self.breaks = spline.breaks
        self.width = np.diff(self.breaks)
        b, p = spline.beziers, spline.degree
        power = np.zeros((spline.dimension, 4, len(b)))  # coordinate, order, span
        steps = [b[:, 0], *(np.diff(b, n=k, axis=1)[:, 0] for k in range(1, p + 1))]
        for k, (step, ways) in enumerate(zip(steps, ([1, 1], [1, 2, 1], [1, 3, 3, 1])[p - 1], strict=True)):
            power[:, k] = ways * step.T
        self.power = power

    def usage(self, start: FloatArray, end: FloatArray, limits: ChordLimits) -> FloatArray:
        """Return the largest share of a limit that chords use, shape (m,).

        The share of the chord error is its root, which is in proportion to the length of the chord, as that of the
        step. The turn between two chords is at most the sum of their angles with the common tangent: each chord gets
        half of it.

        Args:
            start, end: parameters of the ends of every chord, start < end, shape (m,).
            limits: see `ChordLimits`.
        """
        cuts = self._cut(start, end)
        rises = [one + two + three for one, two, three in zip(cuts.e1, cuts.e2, cuts.e3, strict=True)]
        whole = len(start) == len(cuts.stretch)
        chords = rises if whole else [np.bincount(cuts.stretch, weights=rise, minlength=len(start)) for rise in rises]
        length = np.sqrt(sum(x * x for x in chords))
        unit = [x / np.maximum(length, _TINY) for x in chords]
        used = length / limits.step
        if np.isfinite(limits.chord_error) and self.spline.degree > 1:
            used = np.maximum(used, np.sqrt(self._errors(cuts, unit, length) / limits.chord_error))
        if np.isfinite(limits.turn) and self.spline.degree > 1:
            opening = [x[cuts.opens] for x in cuts.e1]
            closing = [(x + 2.0 * y + 3.0 * z)[cuts.closes] for x, y, z in zip(cuts.e1, cuts.e2, cuts.e3, strict=True)]
            most = np.maximum(_angle(opening, unit), _angle(closing, unit))
            used = np.maximum(used, 2.0 * most / limits.turn)
        return np.asarray(used)

    def demand(self, low: FloatArray, high: FloatArray, limits: ChordLimits) -> FloatArray:
        """Estimate how many chords stretches take, from speed and curvature at three places each, shape (m,)."""
        most = np.zeros(len(low))
        for share in (0.02, 0.5, 0.98):
            first, second = (self.spline.evaluate(low + share * (high - low), k) for k in (1, 2))
            speed = np.linalg.norm(first, axis=1)
            safe = np.maximum(speed, _TINY)
            across = second - first * ((first * second).sum(axis=1) / np.maximum(speed * speed, _TINY))[:, None]
            bend = np.linalg.norm(across, axis=1)  # curvature times speed squared
            chord = np.sqrt(bend / (8.0 * limits.chord_error))
            most = np.maximum(most, np.maximum(chord, np.maximum(speed / limits.step, bend / safe / limits.turn)))
        return most * (high - low)

    def lengths(self, u: FloatArray) -> FloatArray:
        """Return the arc lengths between neighbouring parameters, Gauss-Legendre quadrature by 5 nodes a cut."""
        cuts = self._cut(u[:-1], u[1:])
        nodes, weights = np.polynomial.legendre.leggauss(5)
        total = np.zeros(len(cuts.stretch))
        for node, weight in zip((0.5 * (nodes + 1.0)).tolist(), (0.5 * weights).tolist(), strict=True):
            squared = sum(
                (x + node * (2.0 * y + 3.0 * node * z)) ** 2 for x, y, z in zip(cuts.e1, cuts.e2, cuts.e3, strict=True)
            )
            total += weight * np.sqrt(squared)
        return np.asarray(np.bincount(cuts.stretch, weights=total, minlength=len(u) - 1), dtype=np.float64)

    def _cut(self, start: FloatArray, end: FloatArray) -> _Cuts:
        breaks = self.breaks
        first = np.clip(np.searchsorted(breaks, start, side="right") - 1, 0, len(breaks) - 2)
        last = np.clip(np.searchsorted(breaks, end, side="left") - 1, first, len(breaks) - 2)
        count = last - first + 1
        closes = np.cumsum(count) - 1
        opens = closes - count + 1
        stretch = np.repeat(np.arange(len(start)), count)
        span = np.arange(len(stretch)) + np.repeat(first - opens, count)
        width = self.width[span]
        low = np.maximum((start[stretch] - breaks[span]) / width, 0.0)
        step = (np.minimum(end[stretch], breaks[span + 1]) - np.maximum(start[stretch], breaks[span])) / width
        starts, e1, e2, e3 = [], [], [], []
        for c in self.power:
            c1, c2, c3 = c[1][span], c[2][span], c[3][span]
            e1.append(step * (c1 + low * (2.0 * c2 + 3.0 * low * c3)))
            e2.append(step * step * (c2 + 3.0 * low * c3))
            e3.append(step * step * step * c3)
            rise = e1[-1] + e2[-1] + e3[-1]
            before = np.cumsum(rise) - rise
            starts.append(before - before[opens][stretch])
        return _Cuts(stretch, opens, closes, starts, e1, e2, e3)

    def _errors(self, cuts: _Cuts, unit: list[FloatArray], length: FloatArray) -> FloatArray:
        """Bound the distance of every stretch from its chord, shape (m,): see the head of the module."""
        u = [x[cuts.stretch] for x in unit]
        ahead = [_dot(u, part) for part in (cuts.start, cuts.e1, cuts.e2, cuts.e3)]
        bezier = _as_bezier(*ahead)
        low, high = np.minimum.reduce(bezier), np.maximum.reduce(bezier)
        beyond = np.maximum(np.maximum(-low, high - length[cuts.stretch]), 0.0)
        if len(u) == 2:
            off = [u[0] * part[1] - u[1] * part[0] for part in (cuts.start, cuts.e1, cuts.e2, cuts.e3)]
        else:
            parts = zip(cuts.start, cuts.e1, cuts.e2, cuts.e3, strict=True)
            points = zip(*(_as_bezier(*part) for part in parts), strict=True)
            away = []
            for point, along in zip(points, bezier, strict=True):
                away.append(np.sqrt(sum((x - along * y) ** 2 for x, y in zip(point, u, strict=True))))
            q0, q1, q2, q3 = away
            off = [q0, 3.0 * (q1 - q0), 3.0 * (q0 - 2.0 * q1 + q2), q3 - q0 + 3.0 * (q1 - q2)]
        errors = np.hypot(_largest(*off), beyond)
        if len(errors) == len(length):
            return errors
        return np.asarray(np.maximum.reduceat(errors, cuts.opens))


def _dot(a: list[FloatArray], b: list[FloatArray]) -> FloatArray:
    return np.asarray(sum(x * y for x, y in zip(a, b, strict=True)))


def _as_bezier(e0: FloatArray, e1: FloatArray, e2: FloatArray, e3: FloatArray) -> list[FloatArray]:
    return [e0, e0 + e1 / 3.0, e0 + (2.0 * e1 + e2) / 3.0, e0 + e1 + e2 + e3]


def _largest(f0: FloatArray, f1: FloatArray, f2: FloatArray, f3: FloatArray) -> FloatArray:
    """Return the largest size of cubic polynomials on [0, 1], shape (c,)."""
    most = np.maximum(np.abs(f0), np.abs(f0 + f1 + f2 + f3))
    # roots of f1 + 2 f2 t + 3 f3 t^2, without cancellation
    q = -(f2 + np.copysign(np.sqrt(np.maximum(f2 * f2 - 3.0 * f1 * f3, 0.0)), f2))
    for top, bottom in ((q, 3.0 * f3), (f1, q)):
        usable = np.abs(bottom) > 1e-8 * np.abs(top)  # roots far out, and none
        t = np.minimum(np.maximum(top / np.where(usable, bottom, 1.0) * usable, 0.0), 1.0)
        most = np.maximum(most, np.abs(f0 + t * (f1 + t * (f2 + t * f3))))
    return np.asarray(most)


def _angle(a: list[FloatArray], unit: list[FloatArray]) -> FloatArray:
    """Return the angles between vectors and unit vectors, 0 to pi, accurate where small."""
    along = _dot(a, unit)
    off = np.sqrt(sum((x - along * y) ** 2 for x, y in zip(a, unit, strict=True)))
    return np.asarray(np.arctan2(off, along))
