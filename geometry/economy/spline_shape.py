"""Fairness of a rewritten spline against its source: inflections and curvature extrema, per smooth piece."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.spline_fit import Fit
from geometry.economy.spline_source import Source, cross, turning

__all__ = ["Guard", "Turns", "Verdict", "turning_points"]

SMALLEST_TURN = 2e-3  # radians: a bend to the other side that turns less is no inflection
TURN_LEVELS = (1.0, 8.0)  # a fit must not make more of what is small either, so counts hold at larger thresholds too
EXTREMA_LEVELS = (1.0,)
LEAST_HEIGHT = (
    0.025  # share of the chord error: a bend that stands off its chord by this counts however little it turns
)
PROMINENCE = 0.02  # share of a piece's range of curvature: smaller rises and falls are no extrema


@dataclass(frozen=True, eq=False)
class Turns:
    """Turning points of one quantity at one threshold.

    Attributes:
        at: their samples, ascending, shape (k,).
        top: whether each is a maximum, shape (k,).
    """

    at: IntArray
    top: BoolArray

    def per_piece(self, first: IntArray) -> IntArray:
        """Return their number in every piece."""
        return np.diff(np.searchsorted(self.at, first))


@dataclass(frozen=True, eq=False)
class Verdict:
    """How the fairness of a fit compares with the source's.

    Attributes:
        worse: pieces with more extrema or inflections than allowed, shape (pieces,).
        where: extrema and inflections of such pieces that have no counterpart, shape (n,).
        turns: turning points of the fit, for each quantity and threshold.
    """

    worse: BoolArray
    where: BoolArray
    turns: list[Turns]


class Guard:
    """Holds the inflections and curvature extrema of a source and compares fits with them.

    Inflections are turning points of the tangent angle, so a bend to the other side counts by how much it turns.
    Extrema are turning points of the curvature, cut off at +-0.1 / chord_error, by a share of its range (0
    included) within the piece. Degree 2 has no extrema to compare (its curvature jumps at knots), 3-D no
    inflections.
    """

    def __init__(self, source: Source, chord_error: float, slack: float = 1.0) -> None:
        """Count the turning points of a source.

        Args:
            slack: factor on the thresholds for what is compared with it; over 1, a fit that was held to the
                same thresholds at other samples is not refused for rounding.
        """
        self._source, self._limit = source, 0.1 / chord_error
        starts = source.first[:-1]
        k = np.clip(source.curvature, -self._limit, self._limit)
        reach = np.maximum(np.maximum.reduceat(k, starts), 0.0) - np.minimum(np.minimum.reduceat(k, starts), 0.0)
        flat = 0.16 * chord_error / np.maximum(source.lengths, 1e-300) ** 2  # stands off 0.02 of chord_error
        self._prominence = np.maximum(PROMINENCE * reach, flat)
        self._turn = np.full(len(starts), SMALLEST_TURN)
        self._checks: list[_Check] = []
        if source.degree > 2:
            for factor in EXTREMA_LEVELS:
                self._checks.append(_Check(k, factor * self._prominence, source, source.periodic, slack, np.inf))
        if len(source.point) == 2:
            angle, tall = turning(source.tangent, source.first), 8.0 * LEAST_HEIGHT * chord_error
            for factor in TURN_LEVELS:
                self._checks.append(_Check(angle, factor * self._turn, source, False, slack, factor * tall))

    def check(self, fit: Fit, u: FloatArray, base: Verdict | None = None) -> Verdict:
        """Tell which pieces of a fit are less fair than the source's, and at which samples.

        Args:
            u: parameters on the fit that belong to the samples of the source, shape (n,).
            base: what is let pass where it has more turning points than the source.
        """
        source = self._source
        span, t = fit.basis.locate(u)
        _, g1, g2 = fit.at(span, t)
        worse = np.zeros(len(source.low), dtype=bool)
        where = np.zeros(len(u), dtype=bool)
        values: list[FloatArray] = []
        if source.degree > 2:
            speed = np.sqrt((g1 * g1).sum(axis=0))
            k = np.clip(cross(g1, g2) / np.maximum(speed, 1e-300) ** 3, -self._limit, self._limit)
            values += [k] * len(EXTREMA_LEVELS)
        if len(source.point) == 2:
            values += [turning(g1, source.first)] * len(TURN_LEVELS)
        turns = []
        for i, (check, value) in enumerate(zip(self._checks, values, strict=True)):
            turns.append(check.compare(value, None if base is None else base.turns[i], worse, where))
        return Verdict(worse, where, turns)


class _Check:
    """Turning points of one quantity along the source, against which those of a fit are held."""

    def __init__(
        self, values: FloatArray, threshold: FloatArray, source: Source, cyclic: bool, slack: float, tall: float
    ) -> None:
        self.threshold, self.first, self.cyclic = slack * threshold, source.first, cyclic
        self.along, self.tall = source.along, slack * tall
        self.turns = turning_points(values, source.first, threshold, cyclic, source.along, tall)
        self.count = self.turns.per_piece(source.first)

    def compare(self, values: FloatArray, base: Turns | None, worse: BoolArray, where: BoolArray) -> Turns:
        """Mark pieces with more turning points than allowed, and those of them that have no counterpart.

        Counterparts are sought in the source, or in the base where that has more turning points.
        """
        turns = turning_points(values, self.first, self.threshold, self.cyclic, self.along, self.tall)
        count, most = turns.per_piece(self.first), self.count
        if base is not None:
            most = np.maximum(most, base.per_piece(self.first))
        for i in np.flatnonzero(count > most).tolist():
            worse[i] = True
            a, b = self.first[i], self.first[i + 1]
            known = self.turns if base is None or most[i] == self.count[i] else base
            for top in (False, True):
                old, new = (t.at[(t.at >= a) & (t.at < b) & (t.top == top)] for t in (known, turns))
                where[_unmatched(old, new)] = True
        return turns


def _unmatched(old: IntArray, new: IntArray) -> IntArray:
    """Return those of the new samples that are not the nearest to any of the old ones."""
    if not (old.size and new.size):
        return new
    nearest = np.searchsorted(0.5 * (new[1:] + new[:-1]), old)
    return np.delete(new, nearest)


def turning_points(
    values: FloatArray,
    first: IntArray,
    threshold: FloatArray,
    cyclic: bool,
    along: FloatArray | None = None,
    tall: float = np.inf,
) -> Turns:
    """Return the samples where a rise of at least a threshold turns into such a fall or back.

    For tangent angles, rise times the length over which it happens is some 8 times the height of the bend, and a
    bend may count by that too.

    Args:
        values: shape (n,).
        first: first sample of every piece, and n; the ends of pieces are no turning points.
        threshold: for every piece, shape (pieces,), positive.
        cyclic: whether the (only) piece closes; `values` then repeats from its start.
        along: arc lengths, shape (n,); with `tall`, not for cyclic values.
        tall: rise times length from which on a rise counts even if it is under the threshold.
    """
    if cyclic:
        shift = int(np.argmax(values))
        loop = np.concatenate([values[shift:], values[: shift + 1]])
        turns = turning_points(loop, np.array([0, len(loop)]), threshold, False)
        if not turns.at.size:
            return turns
        at = (np.append(0, turns.at) + shift) % len(values)
        order = np.argsort(at)
        return Turns(at[order], np.append(True, turns.top)[order])
    step = np.sign(np.diff(values))
    step[first[1:-1] - 1] = 0.0
    moving = np.flatnonzero(step)
    turns = moving[1:][step[moving[1:]] != step[moving[:-1]]]
    index = np.unique(np.concatenate([first[:-1], turns, first[1:] - 1]))
    fresh = np.zeros(len(index), dtype=bool)
    fresh[np.searchsorted(index, first[:-1])] = True
    limit = threshold[np.searchsorted(first, index, side="right") - 1]
    found: list[int] = []
    tops: list[bool] = []
    x = np.zeros(len(index)) if along is None else along[index]
    direction, high, low, start, high_at, low_at, high_x, low_x, start_x = 0, 0.0, 0.0, 0.0, 0, 0, 0.0, 0.0, 0.0
    rows = zip(index.tolist(), values[index].tolist(), x.tolist(), limit.tolist(), fresh.tolist(), strict=True)
    for at, value, here, least, new in rows:
        if new:
            direction, high, low, start, high_at, low_at = 0, value, value, value, at, at
            high_x = low_x = start_x = here
            continue
        if direction >= 0 and value > high:
            high, high_at, high_x = value, at, here
        if direction <= 0 and value < low:
            low, low_at, low_x = value, at, here
        fall, rise = high - value, value - low
        if direction >= 0 and (fall >= least or fall * (here - high_x) >= tall):
            if direction or high - start >= least or (high - start) * (high_x - start_x) >= tall:
                found.append(high_at)
                tops.append(True)
            direction, low, low_at, low_x = -1, value, at, here
        elif direction <= 0 and (rise >= least or rise * (here - low_x) >= tall):
            if direction or start - low >= least or (start - low) * (low_x - start_x) >= tall:
                found.append(low_at)
                tops.append(False)
            direction, high, high_at, high_x = 1, value, at, here
    return Turns(np.array(found, dtype=np.intp), np.array(tops, dtype=bool))
