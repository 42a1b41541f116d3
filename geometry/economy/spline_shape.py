"""Fairness of a rewritten spline against its source: inflections and curvature extrema, per smooth piece."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.spline_fit import Fit
from geometry.economy.spline_source import Source, cross, turning

__all__ = ["Guard", "counter_runs", "turning_points"]

SMALLEST_TURN = 2e-3  # radians: a bend to the other side that turns less is no inflection
PROMINENCE = 0.02  # share of a piece's range of curvature: smaller rises and falls are no extrema


Counts = list[IntArray]
"""Turning points per piece, one array for each quantity that is checked."""


@dataclass(frozen=True, eq=False)
class Verdict:
    """How the fairness of a fit compares with the source's.

    Attributes:
        worse: pieces with more extrema or inflections than allowed, shape (pieces,).
        where: samples of such pieces where the fit runs against the trend of the source, shape (n,).
        counts: turning points per piece, for each quantity.
    """

    worse: BoolArray
    where: BoolArray
    counts: Counts


class Guard:
    """Holds the inflections and curvature extrema of a source and compares fits with them.

    Inflections are turning points of the tangent angle, so a bend to the other side counts by how much it turns.
    Extrema are turning points of the curvature, cut off at +-0.1 / chord_error, by a share of its range (0
    included) within the piece. Degree 2 has no extrema to compare (its curvature jumps at knots), 3-D no
    inflections.
    """

    def __init__(self, source: Source, chord_error: float) -> None:
        self._source, self._limit = source, 0.1 / chord_error
        starts = source.first[:-1]
        k = np.clip(source.curvature, -self._limit, self._limit)
        reach = np.maximum(np.maximum.reduceat(k, starts), 0.0) - np.minimum(np.minimum.reduceat(k, starts), 0.0)
        flat = 0.16 * chord_error / np.maximum(source.lengths, 1e-300) ** 2  # stands off 0.02 of chord_error
        self._prominence = np.maximum(PROMINENCE * reach, flat)
        self._turn = np.full(len(starts), SMALLEST_TURN)
        self._checks: list[_Check] = []
        if source.degree > 2:
            self._checks.append(_Check(k, self._prominence, source.first, source.periodic))
        if len(source.point) == 2:
            self._checks.append(_Check(turning(source.tangent, source.first), self._turn, source.first, False))

    def check(self, fit: Fit, u: FloatArray, base: Counts | None = None) -> Verdict:
        """Tell which pieces of a fit are less fair than the source's, and at which samples.

        Args:
            u: parameters on the fit that belong to the samples of the source, shape (n,).
            base: counts that are let pass where they are above the source's.
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
            values.append(k)
        if len(source.point) == 2:
            values.append(turning(g1, source.first))
        counts = []
        for i, (check, value) in enumerate(zip(self._checks, values, strict=True)):
            counts.append(check.compare(value, None if base is None else base[i], worse, where))
        return Verdict(worse, where, counts)


class _Check:
    """Turning points of one quantity along the source, against which those of a fit are held."""

    def __init__(self, values: FloatArray, threshold: FloatArray, first: IntArray, cyclic: bool) -> None:
        self.threshold, self.first, self.cyclic = threshold, first, cyclic
        self.points = turning_points(values, first, threshold, cyclic)
        self.count = self._per_piece(self.points)

    def _per_piece(self, points: IntArray) -> IntArray:
        return np.diff(np.searchsorted(points, self.first))

    def compare(self, values: FloatArray, base: IntArray | None, worse: BoolArray, where: BoolArray) -> IntArray:
        """Mark pieces with more turning points than allowed, and the samples that run against the source's trend."""
        points = turning_points(values, self.first, self.threshold, self.cyclic)
        count = self._per_piece(points)
        most = self.count if base is None else np.maximum(self.count, base)
        for i in np.flatnonzero(count > most).tolist():
            worse[i] = True
            a, b = int(self.first[i]), int(self.first[i + 1])
            old, new = (p[(p >= a) & (p < b)] - a for p in (self.points, points))
            against = counter_runs(values[a:b], old.tolist(), float(self.threshold[i]))
            if not against.any():
                against[new] = True
            where[a:b] |= against
        return count


def turning_points(values: FloatArray, first: IntArray, threshold: FloatArray, cyclic: bool) -> IntArray:
    """Return the samples where a rise of at least a threshold turns into such a fall or back, ascending.

    Args:
        values: shape (n,).
        first: first sample of every piece, and n; the ends of pieces are no turning points.
        threshold: for every piece, shape (pieces,), positive.
        cyclic: whether the (only) piece closes; `values` then repeats from its start.
    """
    if cyclic:
        shift = int(np.argmax(values))
        loop = np.concatenate([values[shift:], values[: shift + 1]])
        points = turning_points(loop, np.array([0, len(loop)]), threshold, False)
        if points.size:
            points = np.append(0, points)
        return np.sort((points + shift) % len(values))
    step = np.sign(np.diff(values))
    step[first[1:-1] - 1] = 0.0
    moving = np.flatnonzero(step)
    turns = moving[1:][step[moving[1:]] != step[moving[:-1]]]
    index = np.unique(np.concatenate([first[:-1], turns, first[1:] - 1]))
    fresh = np.zeros(len(index), dtype=bool)
    fresh[np.searchsorted(index, first[:-1])] = True
    limit = threshold[np.searchsorted(first, index, side="right") - 1]
    found: list[int] = []
    direction, high, low, high_at, low_at, start = 0, 0.0, 0.0, 0, 0, 0
    rows = zip(index.tolist(), values[index].tolist(), limit.tolist(), fresh.tolist(), strict=True)
    for at, value, least, new in rows:
        if new:
            direction, high, low, high_at, low_at, start = 0, value, value, at, at, at
            continue
        if direction >= 0 and value > high:
            high, high_at = value, at
        if direction <= 0 and value < low:
            low, low_at = value, at
        if direction >= 0 and value <= high - least:
            if high_at > start:
                found.append(high_at)
            direction, low, low_at = -1, value, at
        elif direction <= 0 and value >= low + least:
            if low_at > start:
                found.append(low_at)
            direction, high, high_at = 1, value, at
    return np.array(found, dtype=np.intp)


def counter_runs(values: FloatArray, points: list[int], threshold: float) -> BoolArray:
    """Tell at which samples `values` run back by a threshold against their trend between given points, shape (n,)."""
    out = np.zeros(len(values), dtype=bool)
    edges = [0, *[i for i in points if 0 < i < len(values) - 1], len(values) - 1]
    for low, high in pairwise(edges):
        v = values[low : high + 1]
        v = v if v[-1] >= v[0] else -v
        fall = np.maximum.accumulate(v) - v
        rise = v - np.minimum.accumulate(v[::-1])[::-1]
        out[low : high + 1] |= np.maximum(fall, rise) >= threshold
    return out
