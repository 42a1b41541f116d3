"""Fairness of a rewritten spline against its source: inflections and curvature extrema, per smooth piece."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.spline_fit import Fit
from geometry.economy.spline_source import Source, bending, turning

__all__ = ["Guard", "Turns", "Verdict", "turning_points"]

SMALLEST_TURN = 2e-3  # radians: a bend to the other side that turns less is no inflection
TURN_LEVELS = (1.0, 4.0, 8.0)
LEAST_HEIGHT = 0.025  # share of the chord error: a bend that stands off its chord by this counts, whatever its turn
PROMINENCE = 0.018  # share of a piece's range of curvature: less is no extremum; just under that of `geometry.fairness`
PROMINENCE_LEVELS = (1.0, 5.0)  # a fit with more extrema is let pass in need only while they are small


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

    def within(self, a: int, b: int) -> "Turns":
        """Return those at samples a to b, b not included."""
        low, high = np.searchsorted(self.at, (a, b))
        return Turns(self.at[low:high], self.top[low:high])


@dataclass(frozen=True, eq=False)
class Verdict:
    """How the fairness of a fit compares with the source's.

    Attributes:
        worse: pieces with more extrema or inflections than allowed, shape (pieces,).
        badly: those of them whose inflections are more at the last of `TURN_LEVELS`, or whose extrema are more.
        unfair: those of them that have more inflections or extrema at the last levels.
        where: extrema and inflections of such pieces that have no counterpart, shape (n,).
        turns: turning points of the fit, for each quantity its thresholds.
    """

    worse: BoolArray
    badly: BoolArray
    unfair: BoolArray
    where: BoolArray
    turns: list[list[Turns]]


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
        self._source, self.limit = source, 0.1 / chord_error
        starts = source.first[:-1]
        k = np.clip(source.curvature, -self.limit, self.limit)
        reach = np.maximum(np.maximum.reduceat(k, starts), 0.0) - np.minimum(np.minimum.reduceat(k, starts), 0.0)
        flat = 0.16 * chord_error / np.maximum(source.lengths, 1e-300) ** 2  # stands off 0.02 of chord_error
        self.prominence = np.maximum(PROMINENCE * reach, flat)
        self._turn = np.full(len(starts), SMALLEST_TURN)
        self._checks: list[_Check] = []
        if source.degree > 2:
            levels = [(factor * self.prominence, np.inf) for factor in PROMINENCE_LEVELS]
            self._checks.append(_Check(k, levels, source, source.periodic, slack, True))
        if len(source.point) == 2:
            angle, tall = turning(source.tangent, source.first), LEAST_HEIGHT * chord_error
            levels = [(factor * self._turn, factor * tall) for factor in TURN_LEVELS]
            self._checks.append(_Check(angle, levels, source, False, slack, False))

    def check(self, fit: Fit, u: FloatArray, base: Verdict | None = None) -> Verdict:
        """Tell which pieces of a fit are less fair than the source's, and at which samples.

        Args:
            u: parameters on the fit that belong to the samples of the source, shape (n,).
            base: what is let pass where it has more turning points than the source.
        """
        source = self._source
        span, t = fit.basis.locate(u)
        _, g1, g2 = fit.at(span, t)
        worse, badly, unfair = np.zeros((3, len(source.low)), dtype=bool)
        where = np.zeros(len(u), dtype=bool)
        values: list[FloatArray] = []
        if source.degree > 2:
            values.append(np.clip(bending(g1, g2), -self.limit, self.limit))
        if len(source.point) == 2:
            values.append(turning(g1, source.first))
        turns: list[list[Turns]] = []
        for i, (check, value) in enumerate(zip(self._checks, values, strict=True)):
            mine, last = np.zeros((2, len(source.low)), dtype=bool)
            turns.append(check.compare(value, None if base is None else base.turns[i], mine, last, where))
            worse |= mine
            badly |= mine if check.curvature else last
            unfair |= last
        return Verdict(worse, badly, unfair, where, turns)


class _Check:
    """Turning points of one quantity along the source, at some thresholds, against which those of a fit are held."""

    def __init__(
        self,
        values: FloatArray,
        thresholds: list[tuple[FloatArray, float]],
        source: Source,
        cyclic: bool,
        slack: float,
        curvature: bool,
    ) -> None:
        self.first, self.cyclic, self.along, self.curvature = source.first, cyclic, source.along, curvature
        self.thresholds = thresholds
        self.turns = self._turns(_Extrema(values, source.first, cyclic))
        self.counts = [turns.per_piece(source.first) for turns in self.turns]
        self.least_counts = np.min(self.counts, axis=0)
        self.thresholds = [(slack * least, slack * tall) for least, tall in thresholds]

    def _turns(self, extrema: "_Extrema") -> list[Turns]:
        sideways = None if self.curvature else _Sideways(extrema.values, self.along)
        return [extrema.that_count(least, sideways, tall) for least, tall in self.thresholds]

    def compare(
        self, values: FloatArray, base: list[Turns] | None, worse: BoolArray, last: BoolArray, where: BoolArray
    ) -> list[Turns]:
        """Mark pieces with more turning points than allowed, and those of them that have no counterpart.

        Counterparts are sought in the source, or in the base where that has more turning points.
        """
        extrema = _Extrema(values, self.first, self.cyclic)
        every = extrema.every()
        if np.all(every.per_piece(self.first) <= self.least_counts):  # no more even with the smallest among them
            return [every] * len(self.thresholds)
        found = self._turns(extrema)
        for level, (turns, own, most) in enumerate(zip(found, self.turns, self.counts, strict=True)):
            count, allowed = turns.per_piece(self.first), most
            if base is not None:
                allowed = np.maximum(most, base[level].per_piece(self.first))
            for i in np.flatnonzero(count > allowed).tolist():
                last[i] |= level == len(found) - 1
                if self.curvature and worse[i]:
                    continue  # its places are among those of the first level
                worse[i] = True
                a, b = self.first[i : i + 2].tolist()
                known = own if base is None or allowed[i] == most[i] else base[level]
                here, there = turns.within(a, b), known.within(a, b)
                ends = np.concatenate([[a], here.at, [b - 1]])
                for top in (False, True):
                    extra = _unmatched(there.at[there.top == top], here.at[here.top == top])
                    place = np.searchsorted(here.at, extra)
                    for beside in (extra, ends[place], ends[place + 2]):  # the point, the middles of the bends there
                        where[(extra + beside) // 2] = True
        return found


def _unmatched(old: IntArray, new: IntArray) -> IntArray:
    """Return those of the new samples that are not the nearest to any of the old ones."""
    if not (old.size and new.size):
        return new
    nearest = np.searchsorted(0.5 * (new[1:] + new[:-1]), old)
    return np.delete(new, nearest)


def turning_points(values: FloatArray, first: IntArray, threshold: FloatArray, cyclic: bool) -> Turns:
    """Return the samples where a rise of at least a threshold turns into such a fall or back.

    Args:
        values: shape (n,).
        first: first sample of every piece, and n; the ends of pieces are no turning points.
        threshold: for every piece, shape (pieces,), positive.
        cyclic: whether the (only) piece closes; `values` then repeats from its start.
    """
    return _Extrema(values, first, cyclic).that_count(threshold, None, np.inf)


class _Sideways:
    """How far a curve stands off chords, from its tangent angles (small angles)."""

    def __init__(self, angle: FloatArray, along: FloatArray) -> None:
        self.along = along
        steps = 0.5 * (angle[1:] + angle[:-1]) * np.diff(along)
        self.offset = np.concatenate([[0.0], np.cumsum(steps)])

    def height(self, a: int, b: int) -> float:
        """Return how far the curve from sample a to sample b stands off its chord halfway."""
        if b - a < 2:
            return 0.0
        middle = (a + b) // 2
        x, y = self.along, self.offset
        share = (x[middle] - x[a]) / (x[b] - x[a])
        return float(abs(y[middle] - y[a] - share * (y[b] - y[a])))


class _Extrema:
    """Samples where values turn, however little; a cyclic piece is begun and ended at its largest value.

    Attributes:
        index: the ends of pieces and the turns between them, ascending, in the order of `values`.
    """

    def __init__(self, values: FloatArray, first: IntArray, cyclic: bool) -> None:
        self.cyclic, self.shift, self.count = cyclic, 0, len(values)
        if cyclic:
            self.shift = int(np.argmax(values))
            values = np.concatenate([values[self.shift :], values[: self.shift + 1]])
            first = np.array([0, len(values)])
        self.values, self.first = values, first
        rising = values[1:] > values[:-1]
        moving = values[1:] != values[:-1]
        moving[first[1:-1] - 1] = False
        at = np.flatnonzero(moving)
        turns = at[1:][rising[at[1:]] != rising[at[:-1]]]
        marked = np.zeros(len(values), dtype=bool)
        marked[turns] = True
        marked[first[:-1]] = marked[first[1:] - 1] = True
        self.index = np.flatnonzero(marked)

    def _in_place(self, at: IntArray, top: BoolArray) -> Turns:
        """Return turns between the ends of pieces as turns of the values that were given."""
        if not self.cyclic or not at.size:
            return Turns(at, top)
        at = (np.append(0, at) + self.shift) % self.count
        order = np.argsort(at)
        return Turns(at[order], np.append(True, top)[order])

    def every(self) -> Turns:
        """Return all of them."""
        inner = np.ones(len(self.index), dtype=bool)
        inner[np.searchsorted(self.index, self.first[:-1])] = False
        inner[np.searchsorted(self.index, self.first[1:] - 1)] = False
        at = self.index[inner]
        return self._in_place(at, self.values[at] > self.values[at - 1])

    def that_count(self, threshold: FloatArray, sideways: _Sideways | None, tall: float) -> Turns:
        """Pick those where a rise of at least a threshold turns into such a fall or back.

        Args:
            threshold: for every piece, shape (pieces,).
            sideways: for tangent angles; a rise then counts too where the curve stands `tall` off its chord halfway.
        """
        index, values = self.index, self.values[self.index]
        fresh = np.zeros(len(index), dtype=bool)
        fresh[np.searchsorted(index, self.first[:-1])] = True
        limit = threshold[np.cumsum(fresh) - 1]
        found: list[int] = []
        tops: list[bool] = []
        direction, high, low, start, high_at, low_at, start_at = 0, 0.0, 0.0, 0.0, 0, 0, 0
        rows = zip(index.tolist(), values.tolist(), limit.tolist(), fresh.tolist(), strict=True)
        for at, value, least, new in rows:
            if new:
                direction, high, low, start, high_at, low_at, start_at = 0, value, value, value, at, at, at
                continue
            if direction >= 0 and value > high:
                high, high_at = value, at
            if direction <= 0 and value < low:
                low, low_at = value, at
            if direction >= 0 and (high - value >= least or (sideways and sideways.height(high_at, at) >= tall)):
                if direction or high - start >= least or (sideways and sideways.height(start_at, high_at) >= tall):
                    found.append(high_at)
                    tops.append(True)
                direction, low, low_at = -1, value, at
            elif direction <= 0 and (value - low >= least or (sideways and sideways.height(low_at, at) >= tall)):
                if direction or start - low >= least or (sideways and sideways.height(start_at, low_at) >= tall):
                    found.append(low_at)
                    tops.append(False)
                direction, high, high_at = 1, value, at
        return self._in_place(np.array(found, dtype=np.intp), np.array(tops, dtype=bool))
