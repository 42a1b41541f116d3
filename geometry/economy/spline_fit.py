"""Weighted least-squares fit of all pieces of a profile in one banded system, sliding along the curve being free.

The unknowns are control points. Sample j of the source, at f_j with unit tangent t_j, asks for
W_j (|r_j|^2 - (1 - a) (t_j . r_j)^2) to be small, r_j = g(u_j) - f_j. Only the moments sum W_j m_j t^k of the
local parameter t enter, one set a span, so a fit takes time linear in samples plus spans.
"""

from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy.linalg.lapack import dpbsv

from geometry.arrays import FloatArray, IntArray
from geometry.economy.spline_source import Source, bending, runs_of

__all__ = ["Basis", "Bend", "Fit", "measure", "solve"]

_BLOCK = 256  # runs of samples summed at a time
_HOLD = 1e10  # weight that holds the ends of pieces, over the largest weight of any control point


class Basis:
    """B-spline basis of all pieces behind one another, as polynomials of the local parameter a span.

    Attributes:
        inner: interior knots along, ascending, all pieces in one array; periodic: every break in [0, period).
        start, width: parameter at the start of every span and its width, shape (s,).
        piece: piece of every span, shape (s,).
        ids: control points that govern a span, shape (s, p + 1).
        matrix: matrix[s, i, k] is the coefficient of t^k of basis function i, t = (u - start) / width.
        count: number of control points.
        fixed: control points that are ends of pieces, shape (2 * pieces,); none if periodic.
        inside: periodic: first and one past the last span of the period; a few more stand on either side, so that
            samples may drift over the seam. Else 0 and s.
        low, high: ends of the parameters of every piece, shape (pieces,).
    """

    def __init__(self, source: Source, inner: FloatArray) -> None:
        p, self.inner = source.degree, inner
        pieces = len(source.low)
        if source.periodic:
            self.count = n = len(inner)
            period = source.high[0]
            reach = p + 3
            index = np.arange(-reach, n + reach + 1)
            knots = inner[index % n] + period * (index // n)
            span = np.arange(p - 1, len(knots) - p)
            self.ids = (index[span][:, None] + np.arange(p + 1)) % n
            self.piece = np.zeros(len(span), dtype=np.intp)
            self.fixed = np.zeros(0, dtype=np.intp)
            skip = reach - (p - 1)
            self.inside = (skip, skip + n)
            order = np.where(np.arange(n) < (n + 1) // 2, 2 * np.arange(n), 2 * (n - 1 - np.arange(n)) + 1)
            self.reach = 2 * p
        else:
            knots = np.sort(np.concatenate([inner, np.repeat(source.low, p + 1), np.repeat(source.high, p + 1)]))
            span = np.flatnonzero(np.diff(knots) > 0.0)
            piece = np.searchsorted(source.low, knots[span], side="right") - 1
            keep = knots[span] < source.high[piece]
            span, self.piece = span[keep], piece[keep]
            self.ids = span[:, None] + np.arange(-p, 1) - (p + 1) * self.piece[:, None]
            self.count = len(knots) - (p + 1) * pieces
            last = np.append(self.ids[np.flatnonzero(np.diff(self.piece)), -1], self.count - 1)
            self.fixed = np.stack([np.append(0, last[:-1] + 1), last], axis=1).ravel()
            self.inside = (0, len(span))
            order = np.arange(self.count)
            self.reach = p
        self.order: IntArray = order
        self.start, self.width = knots[span], knots[span + 1] - knots[span]
        self.matrix = _polynomials(knots, span, p)
        self.low: FloatArray = self.start[:1] if source.periodic else source.low
        self.high: FloatArray = self.start[-1:] + self.width[-1:] if source.periodic else source.high

    @property
    def edges(self) -> FloatArray:
        """Start of every span within the period or the pieces, shape (s',)."""
        return self.start[self.inside[0] : self.inside[1]]

    def locate(self, u: FloatArray) -> tuple[IntArray, FloatArray]:
        """Return span and local parameter of every u, each of its shape."""
        span = np.maximum(np.searchsorted(self.start, u, side="right") - 1, 0)
        return span, (u - self.start[span]) / self.width[span]


def _polynomials(knots: FloatArray, span: IntArray, p: int) -> FloatArray:
    """Return the basis functions on each span as powers of the local parameter (de Boor's recurrence).

    All functions of one degree at a time; of the two terms of each, the second falls off where the first rises.
    """
    near = knots[span[:, None] + np.arange(1 - p, p + 1)]  # knots span - p + 1 .. span + p
    start, width = knots[span], knots[span + 1] - knots[span]
    rows = np.ones((1, 1, len(span)))  # function, power, span
    for r in range(1, p + 1):
        left, right = near[:, p - r : p].T, near[:, p : p + r].T
        w = 1.0 / (right - left)
        rise = np.zeros((r, r + 1, len(span)))
        rise[:, :-1] = ((start - left) * w)[:, None] * rows  # (u - left) / (right - left) = a + b t
        rise[:, 1:] += (width * w)[:, None] * rows
        new = np.zeros((r + 1, r + 1, len(span)))
        new[1:] = rise
        new[:-1] -= rise
        new[:-1, :-1] += rows
        rows = new
    return np.ascontiguousarray(rows.transpose(2, 0, 1))


@dataclass(frozen=True, eq=False)
class Fit:
    """A fitted curve.

    Attributes:
        control: shape (count, d).
        coefficients: powers of the local parameter of every span, shape (p + 1, d, s).
    """

    basis: Basis
    control: FloatArray
    coefficients: FloatArray

    def at(self, span: IntArray, t: FloatArray, most: int = 2) -> list[FloatArray]:
        """Return position and derivatives up to order `most` by the parameter, each shape (d, n)."""
        size, d, _ = self.coefficients.shape
        c = np.take(self.coefficients.reshape(size * d, -1), span, axis=1).reshape(size, d, -1)
        inverse = 1.0 / self.basis.width[span]
        out = []
        for order in range(most + 1):
            value = c[-1]
            for k in range(size - 2, -1, -1):
                value = value * t + c[k]
            out.append(value * inverse**order if order else value)
            c = c[1:] * np.arange(1.0, size)[:, None, None]
            size -= 1
            if size == 0:
                out += [np.zeros_like(value)] * (most - order)
                break
        return out

    def curvature(self, u: FloatArray) -> FloatArray:
        """Return the curvature at parameters u, shape (n,), signed in 2-D."""
        _, slope, second = self.at(*self.basis.locate(u))
        return bending(slope, second)


@dataclass(frozen=True, eq=False)
class Bend:
    """Asks that second derivatives follow the curvature of the source.

    Attributes:
        weight: of the squared residual of the second derivative, tangential part cut, shape (n,).
        speed: length of source for a unit of parameter, shape (n,).
    """

    weight: FloatArray
    speed: FloatArray


def solve(
    source: Source, basis: Basis, u: FloatArray, weight: FloatArray, slide: float, bend: Bend | None = None
) -> Fit | None:
    """Return the least-squares fit with the ends of pieces pinned, or None if the system cannot be solved.

    Args:
        u: parameter of every sample, non-decreasing, shape (n,).
        weight: W of every sample, shape (n,), positive.
        slide: a, the share of a tangential residual that counts, in (0, 1].
        bend: if given, second derivatives are fitted too.
    """
    span, t = basis.locate(u)
    runs = runs_of(span)
    there = span[runs]
    sums = _normal(source, runs, t, weight, slide, source.point, source.point_along, basis.matrix[there])
    if bend is not None:
        powers = np.arange(2, source.degree + 1)
        second = basis.matrix[there, :, 2:] * (powers * (powers - 1)) / basis.width[there, None, None] ** 2
        target = source.bend * bend.speed**2  # square to the tangent
        sums = sums + _normal(source, runs, t, bend.weight, 0.0, target, np.zeros_like(target), second)
    return _solved(source, basis, there, sums)


class _Table:
    """Which products of basis functions and coordinates make up the lower half of a span's normal matrix.

    Attributes:
        left, right: the pairs of basis functions i <= j, shape (q,).
        row, column: function and coordinate of either side, shape (2, m).
        product: index of the sum that belongs there: pair times number of coordinate pairs plus coordinate pair.
        squares: coordinate pairs that are one coordinate twice.
    """

    def __init__(self, p: int, d: int) -> None:
        self.left, self.right = np.triu_indices(p + 1)
        self.squares = [0, 2] if d == 2 else [0, 3, 5]
        forms = {pair: k for k, pair in enumerate((i, j) for i in range(d) for j in range(i, d))}
        entries = [
            (i, c, j, e, pair * len(forms) + forms[min(c, e), max(c, e)])
            for pair, (i, j) in enumerate(zip(self.left.tolist(), self.right.tolist(), strict=True))
            for c in range(d)
            for e in range(d)
            if i < j or c <= e
        ]
        i, c, j, e, self.product = np.array(entries).T
        self.row, self.column = np.stack([i, c]), np.stack([j, e])


@cache
def _table(p: int, d: int) -> _Table:
    return _Table(p, d)


def _normal(
    source: Source,
    runs: IntArray,
    t: FloatArray,
    weight: FloatArray,
    slide: float,
    target: FloatArray,
    target_along: FloatArray,
    matrix: FloatArray,
) -> FloatArray:
    """Return the share of spans in the normal equations for sum weight |target - value|^2.

    The tangential part of the residual counts for `slide` only. Sums of powers of t are made first, with which the
    products of any two basis functions, themselves polynomials, are summed up at once.

    Args:
        target_along: the tangential part of the target, shape (d, n).
        runs: first sample in every span that holds any, shape (r,).
        matrix: powers of t of the basis functions there (or of derivatives of theirs), shape (r, p + 1, q).

    Returns:
        Products in the order of `_Table.product`, then right-hand sides by function and coordinate, shape (.., r).
    """
    d, n, size, q = len(target), len(t), matrix.shape[1], matrix.shape[2]
    table, most = _table(size - 1, d), 2 * q - 1
    pull = weight * (1.0 - slide)
    form = -pull * source.along_tangent
    form[table.squares] += weight
    right = weight * target - pull * target_along
    cut = most * len(form)
    moments = np.empty((cut + q * d, len(runs)))
    for first in range(0, len(runs), _BLOCK):  # blocks that stay in the cache
        starts = runs[first : first + _BLOCK]
        low, high = starts[0], runs[first + _BLOCK] if first + _BLOCK < len(runs) else n
        powers = np.empty((most, high - low))
        powers[0] = 1.0
        for k in range(1, most):
            np.multiply(powers[k - 1], t[low:high], out=powers[k])
        rows = np.empty((cut + q * d, high - low))
        np.multiply(powers[:, None], form[:, low:high], out=rows[:cut].reshape(most, len(form), -1))
        np.multiply(powers[:q, None], right[:, low:high], out=rows[cut:].reshape(q, d, -1))
        moments[:, first : first + _BLOCK] = np.add.reduceat(rows, starts - low, axis=1)
    product = np.zeros((len(runs), len(table.left), most))
    one, other = matrix[:, table.left], matrix[:, table.right]
    for k in range(q):
        product[:, :, k : k + q] += one[:, :, k, None] * other
    sums = np.matmul(product, moments[:cut].T.reshape(len(runs), most, len(form)))
    loads = np.matmul(matrix, moments[cut:].T.reshape(len(runs), q, d))
    return np.concatenate([sums.reshape(len(runs), -1), loads.reshape(len(runs), -1)], axis=1).T


def _solved(source: Source, basis: Basis, there: IntArray, sums: FloatArray) -> Fit | None:
    """Assemble the band matrix from the sums of the spans that hold samples, hold the ends, solve."""
    p, d = source.degree, len(source.point)
    table, size = _table(p, d), basis.count * d
    ids = basis.ids[there].T
    unknown = basis.order[ids] * d
    row, column = unknown[table.row[0]] + table.row[1][:, None], unknown[table.column[0]] + table.column[1][:, None]
    flat = np.abs(row - column) * size + np.minimum(row, column)
    products = len(sums) - (p + 1) * d
    band = (basis.reach + 1) * d
    ab = np.bincount(flat.ravel(), weights=sums[table.product].ravel(), minlength=band * size).reshape(band, size)
    place = unknown[:, None] + np.arange(d)[:, None]
    b = np.bincount(place.ravel(), weights=sums[products:].ravel(), minlength=size)
    scale = float(ab[0].max())
    if not (np.isfinite(scale) and scale > 0.0):
        return None
    if basis.fixed.size:
        held = source.ends
        pinned = (basis.order[basis.fixed][:, None] * d + np.arange(d)).ravel()
        ab[0, pinned] += _HOLD * scale
        b[pinned] += _HOLD * scale * held.ravel()
    for ridge in (0.0, 1e-12, 1e-9, 1e-6):
        ab[0] += ridge * scale
        _, x, info = dpbsv(ab, b, lower=1)
        if info == 0 and np.isfinite(x.sum()):
            break
    else:
        return None
    control = x.reshape(-1, d)[basis.order]
    if basis.fixed.size:
        control[basis.fixed] = held
    coefficients = np.matmul(basis.matrix.transpose(0, 2, 1), control[basis.ids]).transpose(1, 2, 0)
    return Fit(basis, control, np.ascontiguousarray(coefficients))


def measure(source: Source, fit: Fit, u: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return foot parameters one Newton step on and the distances there.

    The distance is that of the paired points to third order of the step, so it bounds both directions at the
    samples. Parameters stay in order and within their piece; ends of pieces keep theirs.

    Args:
        u: present parameters, non-decreasing, shape (n,).

    Returns:
        New parameters, shape (n,), and distances, shape (n,), drawing units.
    """
    basis = fit.basis
    span, t = basis.locate(u)
    g, g1, g2 = fit.at(span, t)
    r = g - source.point
    slope = (g1 * g1).sum(axis=0)
    top = (r * g1).sum(axis=0)
    bottom = slope + (r * g2).sum(axis=0)
    bottom = np.where(bottom < 0.2 * slope, slope, bottom)
    cap = 0.25 * basis.width[span]
    step = np.clip(-top / np.maximum(bottom, 1e-300), -cap, cap)
    if not source.periodic:
        step[source.first[:-1]] = 0.0
        step[source.first[1:] - 1] = 0.0
    new = np.clip(u + step, basis.low[source.piece], basis.high[source.piece])
    if np.any(new[1:] < new[:-1]):
        up = np.maximum.accumulate(new)
        down = np.minimum.accumulate(new[::-1])[::-1]
        new = 0.5 * (up + down)
    step = new - u
    r = r + step * (g1 + 0.5 * step * g2)
    return new, np.sqrt((r * r).sum(axis=0))
