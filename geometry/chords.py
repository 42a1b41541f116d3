"""Any curve as chords, each with a proven bound on how far its piece of curve leaves it.

A chord joins two points of the curve and carries an error e: the piece of curve between them and the chord, both
travelled from end to end, can be paired in order so that no pair is farther apart than e. So every point of the
piece is within e of the chord and every point of the chord within e of the piece. Chords can be cut finer.

Why e holds.

- Line: the chord is the piece, e = 0.
- Bezier piece of degree 2 or 3 over the parameter interval [s, s + h]: its second derivative is linear, a at s and b at
  s + h. With x in [0, 1] the local parameter, curve minus chord at equal parameters is
  -h^2 (x (1 - x)^2 v + x^2 (1 - x) w) / 2 with v = (2 a + b) / 3 and w = (a + 2 b) / 3 (both sides are cubic, vanish at
  x = 0 and 1 and have equal second derivatives there). The two weights are >= 0 and add to x (1 - x) <= 1/4, so
  e = h^2 / 8 max(|v|, |w|). The slope of either weight is at most 1, so with c the chord as a vector the piece runs
  monotone along it where h^2 (|v c| + |w c|) / 2 <= c c; then each point can be paired with its foot instead, which is
  in order too, and only the parts of v and w across the chord count: a straight piece has e = 0 whatever its speed.
  (1e-14 of the part taken off is kept, for rounding.)
  n equal parts have at most h^2 / (8 n^2) max(|a|, |b|), the norm of a linear function being convex.
- Arc of sweep t <= pi / 2 and radius r: it runs monotone along its chord, so pairing each point of the arc with its
  foot is in order, and the largest distance is the sagitta r (1 - cos(t / 2)) = 2 r sin^2(t / 4) (the second form
  does not cancel).
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from geometry.arcs import ArcChain
from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline, bezier_evaluate
from geometry.curve import Curve
from geometry.errors import GeometryError, NotFiniteError, TooFewPointsError
from geometry.polyline import Polyline

__all__ = ["Chords", "Elements", "anchors", "even_delta", "whole_chords"]

_U = 2.0**-53
_QUARTER = 0.5 * np.pi


class Elements(Protocol):
    """The pieces a curve is made of (edges, arcs, knot spans), each over local parameters [0, 1]."""

    reach: float
    """Greatest absolute coordinate of the numbers the curve is computed from."""

    rounding: float
    """How far a computed point may lie from the curve, in units of 2^-53 reach."""

    def at(self, element: IntArray, t: FloatArray) -> FloatArray:
        """Return points, shape (n, d), at local parameters t, shape (n,)."""

    def error(self, element: IntArray, low: FloatArray, high: FloatArray, chord: FloatArray) -> FloatArray:
        """Return the bound e of the chords over [low, high], shape (n,), given as vectors, shape (n, d)."""

    def parts(self, element: IntArray, low: FloatArray, high: FloatArray, error: FloatArray, delta: float) -> IntArray:
        """Return into how many equal parts each interval must be cut so that no part has an error over delta."""


@dataclass(frozen=True, slots=True, eq=False)
class Chords:
    """Chords of a curve in order of travel, or a selection of them.

    Attributes:
        elements: what the curve is made of.
        element: which element each chord belongs to, shape (m,): edge, arc or non-empty knot span, from 0.
        low, high: the chord's local parameters within the element, shape (m,), in [0, 1].
        start, end: ends of the chords, shape (m, d), drawing units; they lie on the curve.
        error: bound e on the distance, in order of travel, between chord and curve, shape (m,), drawing units.
    """

    elements: Elements
    element: IntArray
    low: FloatArray
    high: FloatArray
    start: FloatArray
    end: FloatArray
    error: FloatArray

    def __len__(self) -> int:
        return len(self.element)

    def take(self, index: IntArray) -> "Chords":
        """Return a selection of the chords."""
        return Chords(
            self.elements,
            self.element[index],
            self.low[index],
            self.high[index],
            self.start[index],
            self.end[index],
            self.error[index],
        )

    def halved(self) -> tuple["Chords", FloatArray]:
        """Return both halves of every chord, in order, and the points between them, shape (m, d)."""
        middle = 0.5 * (self.low + self.high)
        inner = self.elements.at(self.element, middle)
        element = np.repeat(self.element, 2)
        low, high = (np.stack(pair, axis=1).ravel() for pair in ((self.low, middle), (middle, self.high)))
        start = np.stack([self.start, inner], axis=1).reshape(-1, inner.shape[1])
        end = np.stack([inner, self.end], axis=1).reshape(-1, inner.shape[1])
        error = self.elements.error(element, low, high, end - start)
        return Chords(self.elements, element, low, high, start, end, error), inner

    def split(self, delta: float) -> "Chords":
        """Return chords no error of which passes `delta` (drawing units, > 0); those that are good stay whole."""
        rough = np.flatnonzero(self.error > delta)
        if not rough.size:
            return self
        parts = np.ones(len(self), dtype=np.intp)
        parts[rough] = self.elements.parts(
            self.element[rough], self.low[rough], self.high[rough], self.error[rough], delta
        )
        after = np.cumsum(parts)
        origin = np.repeat(np.arange(len(self)), parts)
        step = np.arange(int(after[-1])) - np.repeat(after - parts, parts)
        low, first = self.low[origin], step == 0
        inner = np.flatnonzero(~first)
        wide = (self.high - self.low) / parts
        low[inner] += step[inner] * wide[origin[inner]]
        start = self.start[origin]
        start[inner] = self.elements.at(self.element[origin[inner]], low[inner])
        high, end = self.high[origin], self.end[origin]
        high[inner - 1], end[inner - 1] = low[inner], start[inner]
        element, error = self.element[origin], self.error[origin]
        cut = np.flatnonzero(parts[origin] > 1)
        error[cut] = self.elements.error(element[cut], low[cut], high[cut], end[cut] - start[cut])
        return Chords(self.elements, element, low, high, start, end, error)


class _Lines:
    rounding = 0.0

    def __init__(self, path: FloatArray) -> None:
        self.path = path
        self.reach = float(np.abs(path).max())

    def at(self, element: IntArray, t: FloatArray) -> FloatArray:
        start = self.path[element]
        return start + t[:, None] * (self.path[element + 1] - start)

    def error(self, element: IntArray, low: FloatArray, high: FloatArray, chord: FloatArray) -> FloatArray:
        del low, high, chord
        return np.zeros(len(element))

    def parts(self, element: IntArray, low: FloatArray, high: FloatArray, error: FloatArray, delta: float) -> IntArray:
        del low, high, error, delta
        return np.ones(len(element), dtype=np.intp)


class _Arcs:
    rounding = 60.0  # half angle, sine, cosine, two products and a sum: 30 u of a length of at most 2 reach

    def __init__(self, chain: ArcChain) -> None:
        path = chain.path()
        self.start, self.chord, self.bulge = path[:-1], np.diff(path, axis=0), chain.bulges
        self.half = 2.0 * np.arctan(chain.bulges)
        # diameter over chord = 1 / sin(half), sin(half) = 2 b / (1 + b^2): exact for flat and nearly full arcs alike
        bent = np.abs(chain.bulges) > 1e-150
        b = np.where(bent, chain.bulges, 1.0)
        self.ratio = np.where(bent, (1.0 + b * b) / (2.0 * b), 0.0)
        self.radius = 0.5 * np.abs(self.ratio) * np.linalg.norm(self.chord, axis=1)
        self.reach = float(np.abs(path).max() + 2.0 * self.radius[np.abs(self.half) > _QUARTER].max(initial=0.0))
        self.reach += float(self._sagitta(np.arange(len(b)), np.ones(len(b))).max())

    def at(self, element: IntArray, t: FloatArray) -> FloatArray:
        """Point at distance diameter sin(t half) from the start, turned half (1 - t) to the right of the chord."""
        half, ratio = self.half[element], self.ratio[element]
        length = np.where(ratio == 0.0, t, np.sin(t * half) * ratio)
        angle = -half * (1.0 - t)
        c, s = length * np.cos(angle), length * np.sin(angle)
        x, y = self.chord[element].T
        points: FloatArray = self.start[element] + np.stack([c * x - s * y, s * x + c * y], axis=1)
        return points

    def error(self, element: IntArray, low: FloatArray, high: FloatArray, chord: FloatArray) -> FloatArray:
        del chord
        return self._sagitta(element, high - low)

    def _sagitta(self, element: IntArray, share: FloatArray) -> FloatArray:
        quarter = 0.5 * np.abs(self.half[element]) * share  # sweep / 4
        sagitta: FloatArray = 2.0 * self.radius[element] * np.sin(np.minimum(quarter, _QUARTER)) ** 2
        return sagitta

    def parts(self, element: IntArray, low: FloatArray, high: FloatArray, error: FloatArray, delta: float) -> IntArray:
        del error
        radius, sweep = self.radius[element], 2.0 * np.abs(self.half[element]) * (high - low)
        share = np.sqrt(np.minimum(delta / np.maximum(2.0 * radius, 1e-300), 1.0))
        largest = np.minimum(4.0 * np.arcsin(share), _QUARTER)
        parts: IntArray = np.maximum(np.ceil(sweep / largest * (1.0 - 4.0 * _U)), 1.0).astype(np.intp)
        return parts

    def quarters(self) -> IntArray:
        """Into how many parts every arc must be cut so that none turns by more than a quarter."""
        # the rounding of a quarter turn itself must not ask for one part more
        parts: IntArray = np.maximum(np.ceil(2.0 * np.abs(self.half) / _QUARTER - 1e-12), 1.0).astype(np.intp)
        return parts


class _Beziers:
    rounding = 80.0  # 3 levels of blossoming at 10 u and 3 of evaluation at 5 u a coordinate, times sqrt(3)

    def __init__(self, spline: Spline) -> None:
        self.control = spline.beziers
        self.reach = float(np.abs(spline.control).max())
        degree = spline.degree
        if degree == 1:
            self.first = self.last = np.zeros_like(self.control[:, 0])
        else:
            second = degree * (degree - 1) * np.diff(self.control, n=2, axis=1)
            self.first, self.last = second[:, 0], second[:, -1]

    def at(self, element: IntArray, t: FloatArray) -> FloatArray:
        return bezier_evaluate(self.control[element], t, 0)

    def _bends(self, element: IntArray, low: FloatArray, high: FloatArray) -> tuple[FloatArray, FloatArray]:
        first, change = self.first[element], self.last[element] - self.first[element]
        return first + low[:, None] * change, first + high[:, None] * change

    def error(self, element: IntArray, low: FloatArray, high: FloatArray, chord: FloatArray) -> FloatArray:
        a, b = self._bends(element, low, high)
        v, w, c = (2.0 * a + b).T, (a + 2.0 * b).T, chord.T  # v and w thrice those of the text
        span, square = (high - low) ** 2, np.add.reduce(c * c)
        vc, wc = np.add.reduce(v * c), np.add.reduce(w * c)
        monotone = span * (np.abs(vc) + np.abs(wc)) <= 5.9 * square
        share = np.divide(1.0, square, out=np.zeros_like(square), where=monotone & (square > 1e-200))
        v_across, w_across = v - share * vc * c, w - share * wc * c
        largest = np.sqrt(np.maximum(np.add.reduce(v_across * v_across), np.add.reduce(w_across * w_across)))
        removed = np.sqrt(share) * np.maximum(np.abs(vc), np.abs(wc))
        error: FloatArray = span / 24.0 * (largest + 1e-14 * removed)
        return error

    def parts(self, element: IntArray, low: FloatArray, high: FloatArray, error: FloatArray, delta: float) -> IntArray:
        a, b = self._bends(element, low, high)
        largest = np.sqrt(np.maximum((a * a).sum(axis=1), (b * b).sum(axis=1)))
        parts = np.ceil((high - low) * np.sqrt(largest / (8.0 * delta)))
        return np.where(error <= delta, 1.0, np.maximum(parts, 2.0)).astype(np.intp)


def anchors(curve: Curve) -> FloatArray:
    """Return the points a curve is defined by (vertices or control points), shape (n, d), after checking them.

    Raises:
        NotFiniteError: a coordinate or a bulge is NaN or infinite.
        TooFewPointsError: the curve has no points at all.
        GeometryError: the curve is of a kind unknown here.
    """
    if isinstance(curve, Spline):
        points, extra = curve.control, curve.knots
    elif isinstance(curve, ArcChain):
        points, extra = curve.points, curve.bulges
    elif isinstance(curve, Polyline):
        points, extra = curve.points, None
    else:
        kind = type(curve).__name__
        raise GeometryError(f"a curve of type {kind} cannot be measured; give a polyline, arc chain or spline")
    if not len(points):
        raise TooFewPointsError(0, 1)
    if not np.isfinite(points).all():
        raise NotFiniteError(int(np.flatnonzero(~np.isfinite(points).all(axis=1))[0]))
    if extra is not None and not np.isfinite(extra).all():
        raise NotFiniteError(int(np.flatnonzero(~np.isfinite(extra))[0]))
    return points


def whole_chords(curve: Curve, shift: FloatArray | None = None) -> Chords:
    """Return the coarsest chords of a curve: one for every edge, arc of up to a quarter turn and knot span.

    Args:
        curve: polyline, arc chain or spline, open or closed, 2-D or 3-D; a single point counts as an edge of no length.
        shift: vector added to the curve first, shape (d,).

    Raises:
        NotFiniteError, TooFewPointsError, GeometryError: see `anchors`.
    """
    anchors(curve)
    if isinstance(curve, Spline):
        return _spline_chords(curve if shift is None else curve.moved(shift))
    if isinstance(curve, ArcChain) and len(curve.bulges):
        return _arc_chords(curve if shift is None else curve.moved(shift))
    points = curve.points if isinstance(curve, Polyline | ArcChain) else anchors(curve)
    moved = Polyline(points if shift is None else points + shift, curve.closed)
    path = moved.path() if len(points) > 1 else np.repeat(moved.points, 2, axis=0)
    count = len(path) - 1
    zero = np.zeros(count)
    return Chords(_Lines(path), np.arange(count), zero, np.ones(count), path[:-1], path[1:], zero)


def _spline_chords(spline: Spline) -> Chords:
    elements = _Beziers(spline)
    count = len(elements.control)
    start, end = elements.control[:, 0], elements.control[:, -1].copy()
    # where two spans meet, rounding may tell their common point two ways: take one
    meet = (np.abs(start[1:] - end[:-1]) <= 64.0 * _U * elements.reach).all(axis=1)
    end[:-1][meet] = start[1:][meet]
    index, low, high = np.arange(count), np.zeros(count), np.ones(count)
    return Chords(elements, index, low, high, start, end, elements.error(index, low, high, end - start))


def _arc_chords(chain: ArcChain) -> Chords:
    elements, path = _Arcs(chain), chain.path()
    parts = elements.quarters()
    after = np.cumsum(parts)
    index = np.repeat(np.arange(len(parts)), parts)
    step = np.arange(int(after[-1])) - np.repeat(after - parts, parts)
    low, high = step / parts[index], (step + 1) / parts[index]
    start = path[index]
    inner = np.flatnonzero(step > 0)
    start[inner] = elements.at(index[inner], low[inner])
    end = path[index + 1]
    end[inner - 1] = start[inner]
    return Chords(elements, index, low, high, start, end, elements.error(index, low, high, end - start))


def even_delta(chords: Chords, spare: int = 300) -> float:
    """Return an error that about doubles the number of chords at most, and adds `spare`, however their errors differ.

    Cutting to delta makes about sqrt(e / delta) parts of a chord with error e, so the sum over all chords is their
    number + `spare` where delta = (sum of sqrt(e) / (number + spare))^2. Drawing units; 0 for a polyline.
    """
    return float((np.sqrt(chords.error).sum() / (len(chords) + spare)) ** 2)
