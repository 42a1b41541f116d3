"""Uniform B-splines of all pieces of a profile, laid one behind another so that one banded system fits them all.

Each piece between corners has its own uniform knots; coefficients of different pieces never meet in a row, so the
normal matrix is block diagonal with half-width 3. A closed profile without corners is one periodic piece, whose
cyclic matrix is solved exactly through a border of three unknowns (Schur complement).

Penalty: squared third differences of the coefficients (P-splines: P. H. C. Eilers, B. D. Marx, Statistical Science
11, 1996), weighted by (l / h)^6 h a row; for cubic splines that is l^6 times the integral of |x'''|^2, so that
parabolas cost nothing and circles nearly nothing. For quadratic splines it acts on the jumps of x''.
"""

from functools import cached_property

import numpy as np
from scipy.linalg.lapack import dpbsv

from geometry.arrays import BoolArray, FloatArray, IntArray

__all__ = ["PER_INTERVAL", "Layout", "basis_table"]

PER_INTERVAL = 2  # samples in a knot interval
_PAIRS = [(a, b) for a in range(4) for b in range(a, 4)]
_PIN = 1e6


def basis_table(t: FloatArray, degree: int, derivative: int = 0) -> FloatArray:
    """Return uniform B-spline basis values on one interval, shape of t with 4 appended (unused columns are 0).

    Args:
        t: position in the interval, 0 to 1.
        degree: 2 or 3.
        derivative: order, by t.
    """
    t = np.asarray(t, dtype=np.float64)
    powers = _POWERS[degree]
    out = np.zeros((*t.shape, 4))
    for column in range(degree + 1):
        polynomial = np.polynomial.polynomial.polyder(powers[column], derivative) if derivative else powers[column]
        out[..., column] = np.polynomial.polynomial.polyval(t, polynomial)
    return out


# ascending powers of t for the basis functions of an interval
_POWERS = {
    2: np.array([[1.0, -2.0, 1.0], [1.0, 2.0, -2.0], [0.0, 0.0, 1.0]]) / 2.0,
    3: np.array([[1.0, -3.0, 3.0, -1.0], [4.0, 0.0, -6.0, 3.0], [1.0, 3.0, 3.0, -3.0], [0.0, 0.0, 0.0, 1.0]]) / 6.0,
}
_THIRD = np.array([-1.0, 3.0, -3.0, 1.0])
_SECOND = np.array([1.0, -1.0, -1.0, 1.0]) / 2.0


def _products(row: FloatArray) -> FloatArray:
    return np.stack([row[..., a] * row[..., b] for a, b in _PAIRS], axis=-1)


class Layout:
    """Knot intervals of the pieces of a profile.

    Attributes:
        lengths: parameter length of every piece, shape (p,).
        counts: intervals of every piece, shape (p,).
        piece: piece of every interval, shape (m,).
        h: parameter length of every interval, shape (m,).
        first: index of an interval's first coefficient, shape (m,).
        position: parameter at the middle of every interval, counted through all pieces, shape (m,).
        periodic: whether the one piece is a loop.
    """

    def __init__(self, lengths: FloatArray, periodic: bool, degree: int, knot_step: float = 1.0) -> None:
        self.lengths, self.periodic, self.degree = lengths, periodic, degree
        self.counts = np.maximum(8 if periodic else 6, np.ceil(lengths / knot_step)).astype(np.intp)
        self.piece = np.repeat(np.arange(len(lengths)), self.counts)
        size = len(self.piece)
        self.h = (lengths / self.counts)[self.piece]
        self.starts = np.cumsum(self.counts) - self.counts
        self.local = np.arange(size) - self.starts[self.piece]
        self.first = np.arange(size) + (0 if periodic else degree) * self.piece
        self.offsets = np.cumsum(lengths) - lengths
        self.position = self.offsets[self.piece] + (self.local + 0.5) * self.h
        self.coefficients = size + degree * len(lengths)
        self._stored = self.coefficients + (3 if periodic else 1)  # rows of the penalty may reach past the last one

    def __len__(self) -> int:
        return len(self.piece)

    @cached_property
    def tables(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Basis values and first two derivatives by the interval's own t at the samples, each (q, 4)."""
        t = (np.arange(PER_INTERVAL) + 0.5) / PER_INTERVAL
        return tuple(basis_table(t, self.degree, k) for k in range(3))  # type: ignore[return-value]

    def sample_positions(self) -> FloatArray:
        """Return the parameter of every sample within its piece, shape (m, q)."""
        t = (np.arange(PER_INTERVAL) + 0.5) / PER_INTERVAL
        return (self.local[:, None] + t) * self.h[:, None]

    def live(self, dead: FloatArray) -> BoolArray:
        """Return which samples lie outside the dead zones at piece ends: dead (p, 2); result (m, q)."""
        if self.periodic:
            return np.ones((len(self), PER_INTERVAL), dtype=bool)
        position = self.sample_positions()
        away = self.lengths[self.piece][:, None] - position
        return (position > dead[self.piece, :1]) & (away > dead[self.piece, 1:])

    # ---- solving -----------------------------------------------------------------------

    def solve(self, targets: FloatArray, live: BoolArray, stiffness: FloatArray, pins: FloatArray | None) -> FloatArray:
        """Return the coefficients that fit samples under a penalty.

        Args:
            targets: samples, shape (m, q, d).
            live: samples that count, shape (m, q).
            stiffness: length l of every interval, shape (m,).
            pins: points where pieces must start and end, shape (p, 2, d); None for free ends.

        Returns:
            Coefficients, shape (m + degree * p, d); a periodic piece repeats its first `degree` ones at the end.
        """
        weight = live * (self.h / PER_INTERVAL)[:, None]
        values = self.tables[0]
        blocks = weight @ _products(values)
        penalty = (stiffness / self.h) ** 6 * self.h
        if self.degree == 2 and not self.periodic:
            penalty = np.where(self.local == self.counts[self.piece] - 1, 0.0, penalty)
        blocks += penalty[:, None] * _products(_THIRD)
        short = self.lengths < 8.0
        if short.any() and self.degree == 3:  # a short piece has little else to hold it
            bending = np.where(short, 2.0 * (8.0 / self.lengths - 1.0), 0.0)[self.piece] / self.h**3
            blocks += bending[:, None] * _products(_SECOND)
        dimension = targets.shape[-1]
        band = np.zeros((4, self._stored))
        right = np.zeros((self._stored, dimension))
        for column, (a, b) in enumerate(_PAIRS):
            band[b - a, self.first + a] += blocks[:, column]
        weighted = weight[..., None] * targets
        for a in range(self.degree + 1):
            right[self.first + a] += np.einsum("q,mqd->md", values[:, a], weighted)
        if self.periodic:
            return self._solve_cyclic(band, right)
        if pins is not None:
            self._pin(band, right, pins)
        solution = _banded(band[:, : self.coefficients], right[: self.coefficients])
        return solution if pins is None else self._exact_ends(solution, pins)

    def _ends(self) -> tuple[FloatArray, IntArray, IntArray]:
        row = basis_table(np.array(0.0), self.degree)[: self.degree]
        first = self.first[self.starts]
        return row, first, first + self.counts  # the last `degree` coefficients of a piece carry its end

    def _pin(self, band: FloatArray, right: FloatArray, pins: FloatArray) -> None:
        row, first, last = self._ends()
        for side, at in ((0, first), (1, last)):
            for a in range(self.degree):
                for b in range(a, self.degree):
                    band[b - a, at + a] += _PIN * row[a] * row[b]
                right[at + a] += _PIN * row[a] * pins[:, side]

    def _exact_ends(self, solution: FloatArray, pins: FloatArray) -> FloatArray:
        row, first, last = self._ends()
        rest = sum(row[a] * solution[first + a] for a in range(1, self.degree))
        solution[first] = (pins[:, 0] - rest) / row[0]
        rest = sum(row[a] * solution[last + a] for a in range(self.degree - 1))
        solution[last + self.degree - 1] = (pins[:, 1] - rest) / row[-1]
        return solution

    def _solve_cyclic(self, band: FloatArray, right: FloatArray) -> FloatArray:
        m = len(self)
        band[:, :3] += band[:, m : m + 3]
        right[:3] += right[m : m + 3]
        band, right = band[:, :m], right[:m]
        n = m - 3
        main = np.zeros((4, n))
        border, corner = np.zeros((n, 3)), np.zeros((3, 3))
        for r in range(4):
            main[r, : n - r] = band[r, : n - r]
            for j in range(n - r, m):  # r + 3 entries that touch the border, some of them round the seam
                k = (j + r) % m
                low, high = min(j, k), max(j, k)
                if low < n:
                    border[low, high - n] += band[r, j]
                else:
                    corner[low - n, high - n] += band[r, j]
                    if low != high:
                        corner[high - n, low - n] += band[r, j]
        dimension = right.shape[1]
        both = _banded(main, np.hstack([right[:n], border]))
        known, through = both[:, :dimension], both[:, dimension:]
        last = np.linalg.solve(corner - border.T @ through, right[n:] - border.T @ known)
        solution = np.concatenate([known - through @ last, last])
        return np.concatenate([solution, solution[: self.degree]])

    # ---- evaluating --------------------------------------------------------------------

    def at_samples(self, coefficients: FloatArray, derivative: int = 0) -> FloatArray:
        """Return points or derivatives by the piece's parameter at all samples, shape (m, q, d)."""
        local = coefficients[self.first[:, None] + np.arange(self.degree + 1)]
        values = np.matmul(self.tables[derivative][:, : self.degree + 1], local)
        return values / (self.h**derivative)[:, None, None] if derivative else values

    def evaluate(self, coefficients: FloatArray, interval: IntArray, t: FloatArray, derivative: int = 0) -> FloatArray:
        """Return points or derivatives at positions t of intervals, shape of t with d appended."""
        table = basis_table(t, self.degree, derivative)
        out = sum(table[..., a, None] * coefficients[self.first[interval] + a] for a in range(self.degree + 1))
        return out / (self.h[interval] ** derivative)[..., None] if derivative else np.asarray(out)

    def locate(self, piece: IntArray, position: FloatArray) -> tuple[IntArray, FloatArray]:
        """Return interval and position in it for parameters within pieces."""
        step = self.h[self.starts[piece]]
        local = np.clip((position / step).astype(np.intp), 0, self.counts[piece] - 1)
        return self.starts[piece] + local, position / step - local


def _banded(band: FloatArray, right: FloatArray) -> FloatArray:
    """Solve a symmetric positive definite banded system; a nearly singular one is damped by 1e-10 and more."""
    for damping in (0.0, 1e-10, 1e-8, 1e-6):
        damped = band.copy()
        damped[0] += damping * band[0].max()
        _, solution, info = dpbsv(damped, right, lower=1, overwrite_ab=1)
        if info == 0 and np.isfinite(solution).all():
            return np.ascontiguousarray(solution)
    raise np.linalg.LinAlgError("the fit has no stable solution")
