"""Weighted least-squares fit of all pieces of a profile in one banded system, sliding along the curve being free.

The unknowns are control points. Sample j of the source, at f_j with unit tangent t_j, asks for
W_j (|r_j|^2 - (1 - a) (t_j . r_j)^2) to be small, r_j = g(u_j) - f_j. Only the moments sum W_j m_j t^k of the
local parameter t enter, one set a span, so a fit takes time linear in samples plus spans.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dpbsv

from geometry.arrays import FloatArray, IntArray
from geometry.economy.spline_source import Source

__all__ = ["Basis", "Bend", "Fit", "measure", "solve"]

_BLOCK = 4096  # samples summed at a time


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
    """Return the basis functions on each span as powers of the local parameter (de Boor's recurrence)."""
    start, width = knots[span], knots[span + 1] - knots[span]
    rows = [np.ones((1, len(span)))]
    for r in range(1, p + 1):
        new = [np.zeros((r + 1, len(span))) for _ in range(r + 1)]
        for k, poly in enumerate(rows):
            left, right = knots[span - r + 1 + k], knots[span + 1 + k]
            w = 1.0 / (right - left)
            a, b = (start - left) * w, width * w  # (u - left) / (right - left) = a + b t
            rise = np.zeros((r + 1, len(span)))
            rise[:-1] = a * poly
            rise[1:] += b * poly
            new[k + 1] += rise
            new[k] -= rise
            new[k][:-1] += poly
        rows = new
    return np.stack(rows).transpose(2, 0, 1)


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
    local, load = _normal(source, basis, span, t, weight, slide, source.point, basis.matrix)
    if bend is not None:
        p = source.degree
        powers = np.arange(2, p + 1)
        second = basis.matrix[:, :, 2:] * (powers * (powers - 1)) / basis.width[:, None, None] ** 2
        more, pull = _normal(source, basis, span, t, bend.weight, 0.0, source.bend * bend.speed**2, second)
        local, load = local + more, load + pull
    return _solve_spans(source, basis, local, load)


def _normal(
    source: Source,
    basis: Basis,
    span: IntArray,
    t: FloatArray,
    weight: FloatArray,
    slide: float,
    target: FloatArray,
    matrix: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Return each span's share of the normal equations for sum weight |target - value|^2, tangential part cut.

    Args:
        matrix: powers of t of the basis functions (or of derivatives of theirs), shape (s, p + 1, q).

    Returns:
        Matrices, shape (s, p + 1, d, p + 1, d), and right-hand sides, shape (s, p + 1, d).
    """
    q, d, n = matrix.shape[2], len(target), len(t)
    pairs = [(i, j) for i in range(d) for j in range(i, d)]
    pull = weight * (1.0 - slide)
    form = -pull * source.along_tangent
    for row, (i, j) in enumerate(pairs):
        if i == j:
            form[row] += weight
    right = weight * target - pull * (source.tangent * target).sum(axis=0) * source.tangent
    cut, s = (2 * q - 1) * len(pairs), len(basis.start)
    sums = np.zeros((cut + q * d, s))
    for start in range(0, n, _BLOCK):  # blocks that stay in the cache
        block = slice(start, min(start + _BLOCK, n))
        powers = np.empty((2 * q - 1, block.stop - start))
        powers[0] = 1.0
        for k in range(1, 2 * q - 1):
            np.multiply(powers[k - 1], t[block], out=powers[k])
        rows = np.empty((cut + q * d, powers.shape[1]))
        np.multiply(powers[:, None], form[:, block], out=rows[:cut].reshape(2 * q - 1, len(pairs), -1))
        np.multiply(powers[:q, None], right[:, block], out=rows[cut:].reshape(q, d, -1))
        runs = np.flatnonzero(np.diff(span[block], prepend=-1))
        sums[:, span[block][runs]] += np.add.reduceat(rows, runs, axis=1)
    forms = sums[:cut].reshape(2 * q - 1, len(pairs), s)
    rights = sums[cut:].reshape(q, d, s).transpose(2, 0, 1)
    product = matrix[:, :, None, :, None] * matrix[:, None, :, None, :]
    size = matrix.shape[1]
    by_power = np.zeros((s, size, size, 2 * q - 1))
    for a in range(q):
        by_power[..., a : a + q] += product[..., a, :]
    local = by_power.reshape(s, size * size, 2 * q - 1) @ forms.transpose(2, 0, 1)
    which = np.empty((d, d), dtype=np.intp)
    for row, (i, j) in enumerate(pairs):
        which[i, j] = which[j, i] = row
    stiff = local.reshape(s, size, size, len(pairs))[..., which].transpose(0, 1, 3, 2, 4)
    return stiff, matrix @ rights


def _solve_spans(source: Source, basis: Basis, stiff: FloatArray, load: FloatArray) -> Fit | None:
    """Assemble the band matrix from the share of every span, pin the ends, solve."""
    p, d, s, m = source.degree, len(source.point), len(basis.start), basis.matrix
    size = basis.count * d
    free = np.ones(basis.count)
    held = np.zeros((basis.count, d))
    if basis.fixed.size:
        free[basis.fixed] = 0.0
        ends = np.stack([source.first[:-1], source.first[1:] - 1], axis=1).ravel()
        held[basis.fixed] = source.point[:, ends].T
        load = load - np.einsum("sicjd,sjd->sic", stiff, held[basis.ids])
        mask = free[basis.ids]
        stiff = stiff * mask[:, :, None, None, None] * mask[:, None, None, :, None]
        load = load * mask[:, :, None]
    unknown = (basis.order[basis.ids][:, :, None] * d + np.arange(d)).reshape(s, -1)
    row, column = unknown[:, :, None], unknown[:, None, :]
    lower = row >= column
    band = (basis.reach + 1) * d
    flat = ((row - column) * size + column)[lower]
    ab = np.bincount(flat, weights=stiff.reshape(s, (p + 1) * d, -1)[lower], minlength=band * size)
    ab = ab.reshape(band, size)
    b = np.bincount(unknown.ravel(), weights=load.ravel(), minlength=size)
    scale = float(ab[0].max())
    if not (np.isfinite(scale) and scale > 0.0):
        return None
    pinned = (basis.order[basis.fixed][:, None] * d + np.arange(d)).ravel()
    ab[0, pinned] = scale
    b[pinned] = scale * held[basis.fixed].ravel()
    for ridge in (0.0, 1e-12, 1e-9, 1e-6):
        ab[0] += ridge * scale
        _, x, info = dpbsv(ab, b, lower=1)
        if info == 0 and np.all(np.isfinite(x)):
            break
    else:
        return None
    control = x.reshape(-1, d)[basis.order]
    if basis.fixed.size:
        control[basis.fixed] = held[basis.fixed]
    coefficients = np.matmul(m.transpose(0, 2, 1), control[basis.ids]).transpose(1, 2, 0)
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
