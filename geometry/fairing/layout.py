"""Uniform B-splines of all pieces of a profile, their coefficients laid one behind another.

Each piece between corners has its own uniform knots. A closed profile without corners is one periodic piece.
"""

from functools import cache

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray

__all__ = ["PER_INTERVAL", "Layout", "basis_table", "sample_tables"]

PER_INTERVAL = 2  # samples in a knot interval


def basis_table(t: FloatArray, degree: int, derivative: int = 0) -> FloatArray:
    """Return uniform B-spline basis values on one interval, shape of t with 4 appended (unused columns are 0).

    Args:
        t: position in the interval, 0 to 1.
        degree: 2 or 3.
        derivative: order, by t.
    """
    t = np.asarray(t, dtype=np.float64)
    square = t * t
    return np.stack([np.ones_like(t), t, square, square * t], axis=-1) @ _polynomials(degree, derivative)


@cache
def _polynomials(degree: int, derivative: int) -> FloatArray:
    """Return ascending powers of t (rows) of the derivative of each basis function (columns), shape (4, 4)."""
    out = np.zeros((4, 4))
    for column in range(degree + 1):
        powers = np.polynomial.polynomial.polyder(_POWERS[degree][column], derivative)
        out[: len(powers), column] = powers
    return out


@cache
def sample_tables(degree: int) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return basis values and first two derivatives by the interval's own t at the samples, each (q, 4)."""
    t = (np.arange(PER_INTERVAL) + 0.5) / PER_INTERVAL
    return basis_table(t, degree), basis_table(t, degree, 1), basis_table(t, degree, 2)


# ascending powers of t for the basis functions of an interval
_POWERS = {
    2: np.array([[1.0, -2.0, 1.0], [1.0, 2.0, -2.0], [0.0, 0.0, 1.0]]) / 2.0,
    3: np.array([[1.0, -3.0, 3.0, -1.0], [4.0, 0.0, -6.0, 3.0], [1.0, 3.0, 3.0, -3.0], [0.0, 0.0, 0.0, 1.0]]) / 6.0,
}


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

    def __init__(self, lengths: FloatArray, periodic: bool, degree: int, knot_step: float) -> None:
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

    def __len__(self) -> int:
        return len(self.piece)

    @property
    def tables(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Basis values and first two derivatives by the interval's own t at the samples, each (q, 4)."""
        return sample_tables(self.degree)

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

    # ---- evaluating --------------------------------------------------------------------

    def at_samples(
        self, coefficients: FloatArray, derivative: int = 0, intervals: IntArray | None = None
    ) -> FloatArray:
        """Return points or derivatives by the piece's parameter at the samples of all or some intervals, (m, q, d)."""
        first, h = (self.first, self.h) if intervals is None else (self.first[intervals], self.h[intervals])
        table = self.tables[derivative]
        if intervals is None and len(self.lengths) == 1:
            columns = [coefficients[a : a + len(first)] for a in range(self.degree + 1)]
        else:
            columns = [coefficients[first + a] for a in range(self.degree + 1)]
        values = np.empty((len(first), PER_INTERVAL, coefficients.shape[1]))
        for q in range(PER_INTERVAL):
            values[:, q] = sum(table[q, a] * column for a, column in enumerate(columns))
        if derivative:
            values /= (h**derivative)[:, None, None]
        return values

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

    def windows(self, intervals: IntArray) -> tuple[IntArray, IntArray]:
        """Return intervals (given increasing) in the order of travel, and the run that each belongs to.

        A run is a stretch of neighbouring intervals of one piece; on a loop it may pass the seam.
        """
        size = len(self)
        if self.periodic and len(intervals) < size and intervals[0] == 0 and intervals[-1] == size - 1:
            gap = int(np.argmax(np.diff(intervals) > 1)) + 1  # begin after a gap
            intervals = np.roll(intervals, -gap)
        step = np.diff(intervals)
        joined = (step == 1) | (self.periodic & (step == 1 - size))
        joined &= self.piece[intervals[1:]] == self.piece[intervals[:-1]]
        return intervals, np.concatenate([[0], np.cumsum(~joined)])
