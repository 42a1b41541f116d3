"""The penalised least-squares fit of a layout's coefficients: one banded system for all pieces, or for windows of them.

Coefficients of different pieces never meet in a row, so the normal matrix is block diagonal with half-width 3; a
periodic piece is solved exactly through a border of three unknowns (Schur complement). A window is a set of runs of
intervals; the coefficients that it shares with the intervals around it are held, and the change of the others is found.

Penalty: squared third differences of the coefficients (P-splines: P. H. C. Eilers, B. D. Marx, Statistical Science
11, 1996), weighted by (l / h)^6 h a row; for cubic splines that is l^6 times the integral of |x'''|^2, so that
parabolas cost nothing and circles nearly nothing. For quadratic splines it acts on the jumps of x''.
"""

import numpy as np
from scipy.linalg.lapack import dpbsv

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.layout import PER_INTERVAL, Layout, basis_table

__all__ = ["System"]

_PAIRS = [(a, b) for a in range(4) for b in range(a, 4)]
_THIRD = np.array([-1.0, 3.0, -3.0, 1.0])
_SECOND = np.array([1.0, -1.0, -1.0, 1.0]) / 2.0
_PIN = 1e6  # weight of a pin while solving; the very end is then made exact
_SHORT = 8.0  # pieces under this length get a bending term besides: they have little else to hold them
_SHARED = 3  # coefficients that a window shares with either side


class System:
    """Normal equations whose data part is built once and whose penalty changes from solve to solve.

    Attributes:
        chosen: intervals solved for, in the order of travel (a window may pass the seam of a loop), shape (n,).
        runs: run, or piece, of each of them, shape (n,).
    """

    def __init__(
        self,
        layout: Layout,
        targets: FloatArray,
        live: BoolArray,
        pins: FloatArray | None,
        intervals: IntArray | None = None,
    ) -> None:
        """Build the data part.

        Args:
            layout: knot intervals.
            targets: samples, shape (m, q, d).
            live: samples that count, shape (m, q).
            pins: points where pieces must start and end, shape (p, 2, d); None for free ends.
            intervals: the intervals of a window, increasing; None for all.
        """
        self._layout, self._pins = layout, pins
        self._whole = intervals is None
        if intervals is None:
            self.chosen, self.runs = np.arange(len(layout)), layout.piece
            self._first, self._count = layout.first, layout.coefficients
            reach = 3 if layout.periodic else 1  # rows of the penalty may reach past the last coefficient
        else:
            self._set_window(intervals)
            reach = 1
        self._stored = self._count + reach
        chosen = self.chosen
        self._h = layout.h[chosen]
        last = layout.local[chosen] == layout.counts[layout.piece[chosen]] - 1
        if layout.degree == 2 and not self._whole:
            last |= np.append(np.diff(self._first) > 1, True)
        self._no_row = last if layout.degree == 2 and not (layout.periodic and self._whole) else None
        self._band, self._right = self._data(targets[chosen], live[chosen])
        if pins is not None:
            self._pin(pins)

    def _set_window(self, intervals: IntArray) -> None:
        """Number the coefficients of the runs one behind another, and mark those that are held."""
        layout = self._layout
        size, degree = len(layout), layout.degree
        intervals, run = layout.windows(intervals)
        self.chosen, self.runs = intervals, run
        self._first = np.arange(len(intervals)) + degree * run
        self._count = len(intervals) + degree * (int(run[-1]) + 1)
        self._index = np.zeros(self._count, dtype=np.intp)
        for a in range(degree + 1):
            self._index[self._first + a] = layout.first[intervals] + a
        if layout.periodic:
            self._index %= size
        starts = np.flatnonzero(np.diff(run, prepend=-1))
        stops = np.append(starts[1:], len(intervals)) - 1
        held = np.zeros(self._count, dtype=np.bool_)
        local, counts = layout.local[intervals], layout.counts[layout.piece[intervals]]
        free_start = (local[starts] == 0) & (not layout.periodic)
        free_stop = (local[stops] == counts[stops] - 1) & (not layout.periodic)
        for a in range(_SHARED):
            held[self._first[starts[~free_start]] + a] = True
            held[self._first[stops[~free_stop]] + degree - a] = True
        self._held = held

    def _data(self, targets: FloatArray, live: BoolArray) -> tuple[FloatArray, FloatArray]:
        layout, first = self._layout, self._first
        weight = live * (self._h / PER_INTERVAL)[:, None]
        values = layout.tables[0]
        band, right = np.zeros((4, self._stored)), np.zeros((self._stored, targets.shape[-1]))
        plane, point = np.zeros(self._stored), np.zeros_like(right)
        for q in range(PER_INTERVAL):
            plane[first] = weight[:, q]
            self._spread(band, plane, values[q])
            point[first] = weight[:, q, None] * targets[:, q]
            for a in range(layout.degree + 1):
                right[a:] += values[q, a] * point[: self._stored - a]
        short = layout.lengths < _SHORT
        if short.any() and layout.degree == 3:
            factor = np.where(short, 2.0 * (_SHORT / layout.lengths - 1.0), 0.0)
            plane[first] = factor[layout.piece[self.chosen]] / self._h**3
            self._spread(band, plane, _SECOND)
        return band, right

    @staticmethod
    def _spread(band: FloatArray, weight: FloatArray, row: FloatArray) -> None:
        """Add the outer product of a row, weighted for each position of its first coefficient, to a band."""
        size = len(weight)
        for a, b in _PAIRS:
            product = row[a] * row[b]
            if product != 0.0:
                band[b - a, a:] += product * weight[: size - a]

    def _ends(self) -> tuple[FloatArray, list[tuple[IntArray, IntArray, int]]]:
        """Return the basis row at an end, and for starts and ends: pieces, first coefficient concerned, side."""
        layout = self._layout
        row = basis_table(np.array(0.0), layout.degree)[: layout.degree]
        local, piece = layout.local[self.chosen], layout.piece[self.chosen]
        starts = np.flatnonzero(local == 0)
        stops = np.flatnonzero(local == layout.counts[piece] - 1)
        return row, [(piece[starts], self._first[starts], 0), (piece[stops], self._first[stops] + 1, 1)]

    def _pin(self, pins: FloatArray) -> None:
        row, ends = self._ends()
        for piece, at, side in ends:
            for a in range(len(row)):
                for b in range(a, len(row)):
                    self._band[b - a, at + a] += _PIN * row[a] * row[b]
                self._right[at + a] += _PIN * row[a] * pins[piece, side]

    def solve(
        self, stiffness: FloatArray, current: FloatArray | None = None, straightness: FloatArray | None = None
    ) -> FloatArray:
        """Return the coefficients of the whole layout.

        Args:
            stiffness: length l of every interval of the layout, shape (m,).
            current: coefficients of the whole layout; a window changes its own part of them.
            straightness: length b of every interval, shape (m,), of a penalty b^4 times the integral of |x''|^2.

        Returns:
            Shape (m + degree * p, d); a periodic piece repeats its first `degree` ones at the end.
        """
        layout = self._layout
        band = self._penalised(stiffness, straightness)
        if self._whole and layout.periodic:
            return self._solve_cyclic(band, self._right.copy())
        band, right = band[:, : self._count], self._right[: self._count]
        if self._whole:
            solution = _banded(band, right)
        else:
            assert current is not None
            solution = current.copy()
            solution[self._index] += self._change(band, right, current[self._index])
            if layout.periodic:
                solution[len(layout) :] = solution[: layout.degree]
        return solution if self._pins is None else self._exact_ends(solution, self._pins)

    def end_forces(self, stiffness: FloatArray, straightness: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return how hard the fit pulls at its pins.

        Args:
            stiffness, straightness: lengths l and b of every interval, shape (m,).

        Returns:
            Half the derivative of the sum of squares by the pins, shape (p, 2, d), and half its second derivative
            by each pin, the other ends held, shape (p, 2).
        """
        assert self._whole
        assert self._pins is not None
        pins, pieces = self._pins, len(self._layout.lengths)
        row, ends = self._ends()
        right = np.hstack([self._right[: self._count], np.zeros((self._count, 2))])
        for piece, at, side in ends:
            for a in range(len(row)):
                right[at + a, -2 + side] += _PIN * row[a]
            del piece
        solution = _banded(self._penalised(stiffness, straightness)[:, : self._count], right)
        force, second = np.zeros_like(pins), np.zeros((pieces, 2))
        for piece, at, side in ends:
            reached = sum(row[a] * solution[at + a] for a in range(len(row)))
            force[piece, side] = _PIN * (pins[piece, side] - reached[:, :-2])
            second[piece, side] = _PIN * (1.0 - reached[:, -2 + side])
        return force, second

    def _penalised(self, stiffness: FloatArray, straightness: FloatArray | None = None) -> FloatArray:
        """Return the matrix with its penalty, as a lower band."""
        layout = self._layout
        ratio = stiffness[self.chosen] / self._h
        square = ratio * ratio
        penalty = square * square * square * self._h
        if self._no_row is not None:
            penalty[self._no_row] = 0.0
        plane = np.zeros(self._stored)
        plane[self._first] = penalty
        band = self._band.copy()
        self._spread(band, plane, _THIRD)
        if straightness is not None and layout.degree == 3:
            square = straightness[self.chosen] ** 2
            plane[self._first] = square * square / self._h**3
            self._spread(band, plane, _SECOND)
        return band

    def _change(self, band: FloatArray, right: FloatArray, current: FloatArray) -> FloatArray:
        """Return the change of a window's coefficients, 0 for those that are held."""
        rest = right - band[0, :, None] * current
        for r in range(1, 4):
            rest[r:] -= band[r, :-r, None] * current[:-r]
            rest[:-r] -= band[r, :-r, None] * current[r:]
        rest[self._held] = 0.0
        band = band.copy()
        band[0, self._held] = 1.0
        for r in range(1, 4):
            band[r, self._held] = 0.0
            band[r, :-r][self._held[r:]] = 0.0
        return _banded(band, rest)

    def _exact_ends(self, solution: FloatArray, pins: FloatArray) -> FloatArray:
        layout = self._layout
        row = basis_table(np.array(0.0), layout.degree)[: layout.degree]
        first = layout.first[layout.starts]
        last = first + layout.counts  # the last `degree` coefficients of a piece carry its end
        rest = sum(row[a] * solution[first + a] for a in range(1, layout.degree))
        solution[first] = (pins[:, 0] - rest) / row[0]
        rest = sum(row[a] * solution[last + a] for a in range(layout.degree - 1))
        solution[last + layout.degree - 1] = (pins[:, 1] - rest) / row[-1]
        return solution

    def _solve_cyclic(self, band: FloatArray, right: FloatArray) -> FloatArray:
        m = len(self._layout)
        band[:, :3] += band[:, m : m + 3]
        right[:3] += right[m : m + 3]
        band, right = band[:, :m], right[:m]
        n = m - 3
        main = np.zeros((4, n))
        border, corner = np.zeros((n, 3)), np.zeros((3, 3))
        for r in range(4):
            main[r, : n - r] = band[r, : n - r]
            for j in range(n - r, m):  # entries that touch the border, some of them round the seam
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
        return np.concatenate([solution, solution[: self._layout.degree]])


def _banded(band: FloatArray, right: FloatArray) -> FloatArray:
    """Solve a symmetric positive definite banded system; a nearly singular one is damped by 1e-10 and more."""
    for damping in (0.0, 1e-10, 1e-8, 1e-6):
        damped = np.array(band, order="F")  # as LAPACK wants it
        if damping > 0.0:
            damped[0] += damping * band[0].max()
        _, solution, info = dpbsv(damped, right, lower=1, overwrite_ab=1)
        if info == 0 and np.isfinite(solution).all():
            return np.ascontiguousarray(solution)
    raise np.linalg.LinAlgError("the fit has no stable solution")
