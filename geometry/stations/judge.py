"""Mistyped stations: the rows that do not fit what the others say, and what would fit.

Three views of a run of stations are weighed against each other by their likelihood: every coordinate as a function of
the row number, one coordinate as a function of another, and all of them as functions of the length along the run. In
each, "row i is wrong in coordinate c" is compared with "all rows are right" by Bayes' rule: a wrong entry may be a
slip of the pen (`figures.slips`) of a value that fits, or anything at all. Runs longer than a window are judged window
by window, so that the work is in proportion to the rows. The prior odds and the threshold are empirical.
"""

from dataclasses import dataclass, replace
from itertools import pairwise, product

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.stations.figures import resolutions, slips
from geometry.stations.prediction import Predictions, log_sum, predictions

__all__ = ["LEAST_ROWS", "Suspect", "judge_stations"]

LEAST_ROWS = 6
"""Fewer stations than this between corners say too little about one another to be judged."""

_WINDOW = 24
_THRESHOLD = 3.5  # logarithm of the odds from which a row is named
_SLIP, _ANY = np.log(0.8), np.log(0.2)  # of wrong entries
_NEAR_END = 2  # rows
_STEP_SHARE = 0.25
_NEVER = -1e9
_LOOKED_AT = 4  # rows a window that are tried in the view along the run
_TRIED_SLIPS = 5
_MOST_SUSPECTS = 4  # a window
_LEAST_OFF = 4.0  # units of the last figure, and
_LEAST_SURE = 3.0  # standard deviations, by which an entry must be off to be named
_ROUNDING = 0.5  # of the last figure: standard deviation that makes a value as likely as can be, and a little less
_UNEVEN = 0.1  # share of a chord by which the length along it is unsure, a radian of turn and of its change


@dataclass(frozen=True, slots=True)
class Suspect:
    """A station that is probably mistyped.

    Attributes:
        row: index of the station.
        column: coordinate that is wrong.
        given, fair: the entry, and the value that the other stations predict.
        deviation: standard deviation of that prediction.
        meant: a number that fits and that a slip of the pen turns into the entry; None where there is none.
        odds: logarithm of the odds that the row is wrong.
    """

    row: int
    column: int
    given: float
    fair: float
    deviation: float
    meant: float | None
    odds: float

    @property
    def off(self) -> float:
        """How far the entry is off, signed, drawing units."""
        return self.given - self.fair


def judge_stations(
    points: FloatArray, closed: bool = False, corners: IntArray | list[int] | tuple[int, ...] = ()
) -> list[Suspect]:
    """Return the stations that are probably mistyped, in order of rows.

    Args:
        points: stations in order, shape (n, d), d = 2 or 3, finite, neighbours apart.
        closed: whether the last station is followed by the first.
        corners: rows at which the curve has a corner; every run between them is judged for itself. Runs of fewer than
            `LEAST_ROWS` stations are not judged.
    """
    points = np.array(points, dtype=np.float64)
    n, cuts = len(points), np.unique(np.asarray(corners, dtype=np.intp))
    if not len(cuts):
        return _judged(points, np.arange(n), closed)
    if closed:
        runs = [np.arange(a, b + 1) % n for a, b in pairwise([*cuts.tolist(), int(cuts[0]) + n])]
    else:
        runs = [np.arange(a, b + 1) for a, b in pairwise(sorted({0, *cuts.tolist(), n - 1}))]
    found = {suspect.row: suspect for run in runs for suspect in _judged(points, run, False)}
    return [found[row] for row in sorted(found)]


def _judged(every: FloatArray, run: IntArray, closed: bool) -> list[Suspect]:
    """Return the suspects of one run without corners; what they should have been is put in their place."""
    points, found = every[run], dict[int, Suspect]()
    for rows in _windows(len(points), closed):
        for _ in range(_MOST_SUSPECTS):
            suspect = _worst(points, rows, ends=not (closed and len(points) > _WINDOW))
            if suspect is None or suspect.row in found:
                break
            found[suspect.row] = suspect
            mended = suspect.fair if suspect.meant is None else suspect.meant
            points[suspect.row, suspect.column] = mended
    return [replace(suspect, row=int(run[suspect.row])) for suspect in found.values()]


def _windows(n: int, closed: bool) -> list[IntArray]:
    """Return the rows of every window: half overlapping, the last one at the end."""
    if n < LEAST_ROWS:
        return []
    if n <= _WINDOW:
        return [np.arange(n)]
    step = _WINDOW // 2
    if closed:
        return [np.arange(first, first + _WINDOW) % n for first in range(0, n, step)]
    firsts = [*range(0, n - _WINDOW, step), n - _WINDOW]
    return [np.arange(first, first + _WINDOW) for first in firsts]


def _worst(points: FloatArray, rows: IntArray, ends: bool) -> Suspect | None:
    """Return the most suspicious row of a window, if it is suspicious enough."""
    window = points[rows]
    if (np.linalg.norm(np.diff(window, axis=0), axis=1) <= 0.0).any():
        return None
    # beyond an end there is nothing to hold an entry against: near it only a gross slip that fits counts
    near = np.minimum(rows, len(points) - 1 - rows) < (_NEAR_END if ends else 0)
    views = _Views(window, near)
    odds = views.odds()
    odds[near] = views.odds(slips_only=True)[near]
    if len(rows) < len(points):  # rows at the edge of a window stand well inside the next one
        place = np.arange(len(rows))
        edge = np.minimum(place, len(rows) - 1 - place) < _NEAR_END
        odds[edge & ~near] = _NEVER
    for best in np.argsort(-odds, axis=None)[:_LOOKED_AT]:
        row, column = (int(k) for k in np.unravel_index(best, odds.shape))
        if odds[row, column] < _THRESHOLD:
            break
        given = float(window[row, column])
        fair, deviation, meant = views.better(row, column)
        away = abs(given - fair)
        if near[row]:  # round ends are steep there: what is off by less than a part of a step may be right
            beside = window[np.clip([row - 1, row + 1], 0, len(window) - 1), column]
            away *= away > _STEP_SHARE * abs(float(beside[1] - beside[0]))
        if away > _LEAST_OFF * views.unit_beside(row, column) and away > _LEAST_SURE * deviation:
            return Suspect(int(rows[row]), column, given, fair, deviation, meant, float(odds[row, column]))
    return None


class _Views:
    """The three views of a window and what each says of every row being wrong."""

    def __init__(self, points: FloatArray, near: BoolArray) -> None:
        self.points = points
        self.units = [resolutions(column) for column in points.T]
        finest = [units[-1].tolist() for units in self.units]
        self.slips = [
            [_apart(slips(value, gross), value, _LEAST_OFF * unit) for value, gross, unit in zip(*entries, strict=True)]
            for entries in zip(points.T.tolist(), [near.tolist()] * points.shape[1], finest, strict=True)
        ]
        self.null: list[float] = []
        d = points.shape[1]
        self.slip: list[FloatArray] = []
        self.any: list[FloatArray] = []
        self.part: list[dict[int, Predictions]] = []  # of every view: what predicts a column
        self._by_row()
        if d == 2:
            self._by_coordinate(0, 1)
            self._by_coordinate(1, 0)
        self._along()

    def odds(self, slips_only: bool = False) -> FloatArray:
        """Return the logarithm of the odds of every entry being wrong, shape (n, d)."""
        wrong = [part + _SLIP for part in self.slip]
        if not slips_only:
            wrong += [part + _ANY for part in self.any]
        prior = np.log(2.0 * self.points.size)
        return log_sum(np.stack(wrong)) - log_sum(np.array(self.null)[:, None])[0] - prior

    def unit_beside(self, row: int, column: int) -> float:
        """Return the coarsest rounding of an entry and its neighbours."""
        return max(float(unit[max(row - 1, 0) : row + 2].max()) for unit in self.units[column][-1:])

    def better(self, row: int, column: int) -> tuple[float, float, float | None]:
        """Return the value that fits, its standard deviation, and a slip that fits too."""
        gains = [max(slip[row, column], free[row, column]) for slip, free in zip(self.slip, self.any, strict=True)]
        part = self.part[int(np.argmax(gains))].get(column)
        fair, deviation = part.predicted(row) if part is not None else self._beside(row, column)
        options = self.slips[column][row]
        unit = max(float(unit[row]) for unit in self.units[column])
        if not len(options):
            return fair, deviation, None
        nearest = float(options[np.argmin(np.abs(options - fair))])
        return fair, deviation, nearest if abs(nearest - fair) <= 3.0 * deviation + unit else None

    def _beside(self, row: int, column: int) -> tuple[float, float]:
        """Return what the run along the other stations gives where it has the other coordinates of a row."""
        rest = np.delete(self.points, row, axis=0)
        units = [[np.delete(unit, row) for unit in units] for units in self.units]
        along = _arc_lengths(rest)
        low = along[row - 1] if row > 0 else along[0] - (along[1] - along[0])
        high = along[row] if row < len(along) else along[-1] + (along[-1] - along[-2])
        best, found = np.inf, (0.0, 0.0)
        for share in np.linspace(0.05, 0.95, 7):
            at = low + share * (high - low)
            inputs, guess = (
                np.insert(along, row, at),
                np.insert(rest, row, 0.5 * (rest[row - 1] + rest[row % len(rest)]), 0),
            )
            off, value = 0.0, (0.0, 0.0)
            for c in range(self.points.shape[1]):
                one = [np.insert(unit, row, unit.min()) for unit in units[c]]
                predicted = predictions(inputs, guess[:, c], one).predicted(row)
                if c == column:
                    value = predicted
                else:
                    off = max(off, abs(predicted[0] - float(self.points[row, c])))
            if off < best:
                best, found = off, value
        return found

    def _by_row(self) -> None:
        points, d = self.points, self.points.shape[1]
        number = np.arange(len(points), dtype=np.float64)
        own = [predictions(number, points[:, c], self.units[c]) for c in range(d)]
        evidence = [_whole(part) for part in own]
        self.own, self.evidence = own, evidence
        self.part.append(dict(enumerate(own)))
        self.null.append(sum(evidence))
        gain = np.stack([self._gains(own[c], c) for c in range(d)])  # (d, 2, n)
        rest = sum(evidence) - np.array(evidence)
        self.slip.append((gain[:, 0] + rest[:, None]).T)
        self.any.append((gain[:, 1] + rest[:, None]).T)
        self.own_gain = gain

    def _by_coordinate(self, a: int, b: int) -> None:
        """Coordinate b as a function of a, which must run one way."""
        inputs = self.points[:, a] * (1.0 if self.points[-1, a] >= self.points[0, a] else -1.0)
        if not (np.diff(inputs) > 0.0).all():
            return
        steep = np.abs(np.gradient(self.points[:, b], inputs))
        units = [np.hypot(unit, steep * self.units[a][-1]) for unit in self.units[b]]
        part = predictions(inputs, self.points[:, b], units)
        gain, base = self._gains(part, b), self.evidence[a]
        self.null.append(base + _whole(part))
        self.part.append({b: part})
        n, d = self.points.shape
        slip, free = np.full((n, d), _NEVER), np.full((n, d), _NEVER)
        slip[:, b], free[:, b] = base + gain[0], base + gain[1]
        slip[:, a], free[:, a] = self.own_gain[a, 0] + gain[1], self.own_gain[a, 1] + gain[1]
        self.slip.append(slip)
        self.any.append(free)

    def _gains(self, part: Predictions, column: int) -> FloatArray:
        """Return the evidence with each entry a slip of any number, and with it anything, shape (2, n)."""
        n = len(self.points)
        slip = np.full(n, _NEVER)
        for row in range(n):
            options = self.slips[column][row]
            if len(options):
                slip[row] = log_sum(part.with_values(row, options)) - np.log(len(options))
        return np.stack([slip, log_sum(part.others) - np.log(3.0 * self._range(column))])

    def _range(self, column: int) -> float:
        return max(float(np.ptp(self.points[:, column])), float(self.units[column][0].max()))

    def _along(self) -> None:
        """All coordinates as functions of the length along the run; only the rows that look worst are tried."""
        points, (n, d) = self.points, self.points.shape
        parts = _parametric(points, self.units)
        self.null.append(sum(_whole(part) for part in parts))
        content = sum(part.density[np.argmax(part.evidence)] for part in parts)
        before = np.max(self.odds(), axis=1)
        slip, free = np.full((n, d), _NEVER), np.full((n, d), _NEVER)
        size = max(self._range(c) for c in range(d))
        fine = min(float(np.median(unit[-1])) for unit in self.units)
        others = np.full(n, _NEVER)
        rows = [*np.argsort(-before)[: _LOOKED_AT // 2].tolist(), *np.argsort(content)[:_LOOKED_AT].tolist()]
        rows = list(dict.fromkeys(rows))
        rival = max(max(self.null[:-1]), *(float(part.max()) for part in (*self.slip, *self.any)))
        for k, row in enumerate(rows):
            rest = [[np.delete(unit, row) for unit in units] for units in self.units]
            others[row] = sum(_whole(part) for part in _parametric(np.delete(points, row, axis=0), rest))
            free[row] = (
                others[row] - np.log(3.0 * size) - (d - 1) * np.log(fine)
            )  # along the run every place is as good
            if k == _LOOKED_AT // 2 and max(self.null[-1], float(free.max())) < rival:
                self.null.pop()  # another view tells more: nothing is gained along the run
                return
        null = float(log_sum(np.array(self.null)[:, None])[0]) + np.log(2.0 * points.size)
        for row, column in product(rows, range(d)):
            options = self.slips[column][row]
            most = others[row] - sum(
                np.log(_ROUNDING * float(unit[-1][row])) for unit in self.units
            )  # at the very best
            if len(options) and most - np.log(len(options)) - null > _THRESHOLD - 1.0:
                gains = [self._with_value(row, column, value) for value in self._near(row, column, options)]
                if gains:
                    slip[row, column] = float(log_sum(np.array(gains)[:, None])[0]) - np.log(len(options))
        self.part.append({})
        self.slip.append(slip)
        self.any.append(free)

    def _near(self, row: int, column: int, options: FloatArray) -> list[float]:
        """Return the slips that come to lie about the neighbours."""
        values = self.points[:, column]
        inner = 0 < row < len(values) - 1
        beside = np.concatenate([values[max(row - 2, 0) : row], values[row + 1 : row + 3]])
        low, high = float(beside.min()), float(beside.max())
        margin = (0.6 if inner else 2.0) * max(high - low, float(self.units[column][0].max()))
        near = options[(options > low - margin) & (options < high + margin)]
        if inner:
            likely = 0.5 * (values[row - 1] + values[row + 1])
        else:  # straight on
            likely = 2.0 * values[1] - values[2] if row == 0 else 2.0 * values[-2] - values[-3]
        return near[np.argsort(np.abs(near - likely))[:_TRIED_SLIPS]].tolist()

    def _with_value(self, row: int, column: int, value: float) -> float:
        points = self.points.copy()
        points[row, column] = value
        if (np.linalg.norm(np.diff(points, axis=0), axis=1) <= 0.0).any():
            return _NEVER
        units = list(self.units)
        units[column] = resolutions(points[:, column])
        return sum(_whole(part) for part in _parametric(points, units))


def _apart(options: FloatArray, value: float, least: float) -> FloatArray:
    return options[np.abs(options - value) > least]


def _whole(part: Predictions) -> float:
    return float(log_sum(part.evidence[:, None])[0])


def _parametric(points: FloatArray, units: list[list[FloatArray]]) -> list[Predictions]:
    """Return the predictions of every coordinate from the length along arcs through the points.

    The length takes up what a point is off along the run, and hands it on across: part of the rounding of one
    coordinate appears in the others.
    """
    along = _arc_lengths(points)
    slope = np.abs(np.gradient(points, along, axis=0))
    unsure = _UNEVEN * _uneven(points)
    out = []
    for c in range(points.shape[1]):
        carried = sum((slope[:, k] * slope[:, c] * units[k][-1]) ** 2 for k in range(points.shape[1]) if k != c)
        out.append(predictions(along, points[:, c], [np.sqrt(unit**2 + carried + unsure**2) for unit in units[c]]))
    return out


def _arc_lengths(points: FloatArray) -> FloatArray:
    """Return the length along circular arcs over the chords, each turning as much as its ends turn on average."""
    chord, turn = _turns(points)
    half = np.minimum(0.25 * (turn[:-1] + turn[1:]), 1.0)
    return np.concatenate([[0.0], np.cumsum(chord / np.sinc(half / np.pi))])


def _uneven(points: FloatArray) -> FloatArray:
    """Return chord times turn times change of turn at every point: where arcs tell the length badly, shape (n,)."""
    chord, turn = _turns(points)
    change = np.abs(np.diff(turn))
    beside = np.maximum(np.append(chord, chord[-1]), np.insert(chord, 0, chord[0]))
    return np.asarray(beside * turn * np.maximum(np.append(change, change[-1]), np.insert(change, 0, change[0])))


def _turns(points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the chords and the turn at every point, those of the ends as beside them, shapes (n - 1,), (n,)."""
    edges = np.diff(points, axis=0)
    chord = np.linalg.norm(edges, axis=1)
    unit = edges / chord[:, None]
    turn = 2.0 * np.arcsin(np.minimum(0.5 * np.linalg.norm(np.diff(unit, axis=0), axis=1), 1.0))
    return chord, np.concatenate([turn[:1], turn, turn[-1:]])
