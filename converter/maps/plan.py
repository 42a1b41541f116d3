"""What a map shows of a comparison, whether as DXF or on a page: stretches by band, whiskers and numbered zones."""

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from converter.maps.bands import Bands, bands_of, largest_of
from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline
from geometry.cutting import cut_at, piece_lengths
from geometry.nearest import SegmentSearch

if TYPE_CHECKING:
    from converter.drawing import AnyCurve
    from converter.jobs.comparison import Compared, Comparison, ZoneRecord

__all__ = ["CHORD_SHARE", "Mark", "Plan", "Stretch", "Whiskers", "plan_of", "round_factor", "whiskers_of"]

CHORD_SHARE = 1e-6
"""What splines are flattened to in a map, as a share of its size."""
_LONGEST = 0.05  # of the size: the longest whisker where the factor is chosen
_ROOM = 0.4  # of the size of a middling profile: the longest whisker of it there
_SPACING = 1.0 / 250.0  # of the size: whiskers follow one another no closer
_VISIBLE = 1.0 / 4000.0  # of the size: shorter whiskers are left out
_MOST_STRETCHES = 2000  # of a pair
_MOST_WHISKERS = 8_000  # in all


@dataclass(frozen=True, slots=True, eq=False)
class Stretch:
    """A part of NEW, or the whole of it, whose deviation lies in one band."""

    band: int
    curve: "AnyCurve"


@dataclass(frozen=True, slots=True, eq=False)
class Whiskers:
    """Deviations drawn as lines from OLD towards NEW and on.

    Attributes:
        base: nearest points on OLD, shape (n, d), drawing units.
        tip: ends, magnified, shape (n, d).
        band: shape (n,).
    """

    base: FloatArray
    tip: FloatArray
    band: IntArray


@dataclass(frozen=True, slots=True)
class Mark:
    """A zone with its number (1 has the highest peak), the index of its pair, and the whisker at its peak."""

    number: int
    pair: int
    zone: "ZoneRecord"
    base: tuple[float, ...]
    tip: tuple[float, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """What is drawn.

    Attributes:
        bands: steps and colours.
        size: diagonal of the box around everything, in plan, drawing units.
        low, high: its corners, shape (2,).
        factor: how many times its size a deviation is drawn by whiskers.
        stretches: of every pair.
        whiskers: of every pair, zones' peaks apart.
        marks: zones, the highest peak first.
        coarse: ids of pairs that pass from band to band so often that cells of 1/2000 of their length have the band of
            their largest deviation instead.
    """

    bands: Bands
    size: float
    low: FloatArray
    high: FloatArray
    factor: float
    stretches: list[list[Stretch]]
    whiskers: list[Whiskers]
    marks: list[Mark]
    coarse: list[str]


def plan_of(comparison: "Comparison", factor: float | None = None) -> Plan:
    """Return what a map of a comparison shows.

    Args:
        comparison: as measured.
        factor: how many times its size a deviation is drawn, above 0; None chooses a round number that makes the
            largest one about a twentieth of the size, less among many small profiles, but 1 at least.
    """
    bands = bands_of(comparison)
    low, high = _box(comparison)
    size = float(np.linalg.norm(high - low)) or 1.0
    largest = largest_of(comparison)
    if factor is None:
        factor = round_factor(min(_LONGEST * size / largest, _room(comparison))) if largest > 0.0 else 1.0
    spacing = _SPACING * size
    least = _VISIBLE * size if largest > 0.0 else np.inf
    spacing = max(spacing, sum(pair.record.length_new for pair in comparison.pairs) / _MOST_WHISKERS)
    delta = CHORD_SHARE * size
    stretches, whiskers, marks, coarse = [], [], [], []
    for number, pair in enumerate(comparison.pairs):
        parts, exact = _stretches(pair, bands, delta)
        stretches.append(parts)
        whiskers.append(whiskers_of(pair, bands, factor, spacing, least, delta))
        marks += _peaks(number, pair, factor, delta)
        if not exact:
            coarse.append(pair.record.new_id)
    marks.sort(key=lambda mark: -abs(mark.zone.peak))
    numbered = [Mark(k, mark.pair, mark.zone, mark.base, mark.tip) for k, mark in enumerate(marks, start=1)]
    return Plan(bands, size, low, high, factor, stretches, whiskers, numbered, coarse)


def _room(comparison: "Comparison") -> float:
    """Return the factor that draws the largest deviation of a middling profile over two fifths of its size."""
    shares = []
    for pair in comparison.pairs:
        found = float(np.abs(pair.course.deviation).max(initial=0.0))
        if found > 0.0:
            shares.append(float(np.linalg.norm(np.subtract(*pair.old.bounds()))) / found)
    return _ROOM * float(np.median(shares)) if shares else np.inf


def round_factor(wanted: float) -> float:
    """Return the one of 1, 2, 5, 10, 20, ... nearest by ratio to a positive number, 1 at least."""
    if not 1.0 < wanted < 1e12:
        return 1.0 if wanted <= 1.0 else 1e12
    power = math.floor(math.log10(wanted))
    choices = [float(f"{digit}e{power}") for digit in (1, 2, 5, 10)]
    return min(choices, key=lambda choice: abs(math.log(choice / wanted)))


def _box(comparison: "Comparison") -> tuple[FloatArray, FloatArray]:
    curves = [curve for pair in comparison.pairs for curve in (pair.old, pair.new)]
    curves += [curve for _, _, curve in (*comparison.only_old, *comparison.only_new)]
    if not curves:
        return np.zeros(2), np.zeros(2)
    ends = np.array([np.stack(curve.bounds())[:, :2] for curve in curves])
    return ends[:, 0].min(axis=0), ends[:, 1].max(axis=0)


def _stretches(pair: "Compared", bands: Bands, delta: float) -> tuple[list[Stretch], bool]:
    """Return NEW in stretches by band, and whether they are exact."""
    course, new = pair.course, pair.new
    curve = new.flatten(delta) if isinstance(new, Spline) else new
    band = bands.index(course.deviation)
    change = np.flatnonzero(np.diff(band))
    total = float(piece_lengths(curve).sum())
    # samples are told along chords, which fall short of arcs by a trifle
    covered = float(course.weights.sum())
    scale = total / covered if covered > 0.0 else 1.0
    exact = len(change) < _MOST_STRETCHES
    if not exact:
        cell = np.minimum((course.along * scale / total * _MOST_STRETCHES).astype(np.intp), _MOST_STRETCHES - 1)
        first = np.flatnonzero(np.diff(cell, prepend=-1))
        rank = np.abs(band - 3) * 2 + (band > 3)
        worst = np.maximum.reduceat(rank, first)
        of = 3 + np.where(worst % 2 == 1, worst // 2, -(worst // 2))
        change = np.flatnonzero(np.diff(of))
        cuts = cell[first[change + 1]] * (total / _MOST_STRETCHES)
        values = of[np.concatenate([[0], change + 1])]
    elif len(change):
        cuts, values = _crossings(course.along, course.deviation, band, change, bands)
        cuts = cuts * scale
    else:
        return ([Stretch(int(band[0]), curve)] if len(band) else []), True
    middles = 0.5 * (np.concatenate([[0.0], cuts]) + np.concatenate([cuts, [total]]))
    parts = cut_at(curve, cuts)
    if len(parts) != len(values):  # two cuts at one place: a part has the value at its own middle
        ends = np.cumsum([float(piece_lengths(part).sum()) for part in parts])
        own = ends - 0.5 * np.diff(ends, prepend=0.0)
        values = values[np.abs(middles[None, :] - own[:, None]).argmin(axis=1)]
    return [Stretch(int(value), part) for value, part in zip(values, parts, strict=True)], exact


def _crossings(
    along: FloatArray, deviation: FloatArray, band: IntArray, change: IntArray, bands: Bands
) -> tuple[FloatArray, IntArray]:
    """Return where deviation, linear between samples, passes the end of a band, and the bands between those places."""
    edges = bands.edges()
    a, b = band[change], band[change + 1]
    steps = np.abs(b - a)
    of = np.repeat(np.arange(len(change)), steps)
    step = np.arange(len(of)) - np.repeat(np.cumsum(steps) - steps, steps)
    up = b[of] > a[of]
    edge = edges[np.where(up, a[of] + step, a[of] - step - 1)]
    i = change[of]
    rise = deviation[i + 1] - deviation[i]
    share = np.clip((edge - deviation[i]) / np.where(rise != 0.0, rise, 1.0), 0.0, 1.0)
    cuts = along[i] + share * (along[i + 1] - along[i])
    values = np.concatenate([band[:1], np.where(up, a[of] + step + 1, a[of] - step - 1)])
    return cuts, values


def whiskers_of(pair: "Compared", bands: Bands, factor: float, spacing: float, least: float, delta: float) -> Whiskers:
    """Return whiskers of a pair: in every cell along NEW the one of the largest deviation.

    Args:
        pair: as measured.
        bands: steps.
        factor: magnification.
        spacing: length of a cell, drawing units.
        least: whiskers that would be drawn shorter than this are left out, drawing units.
        delta: what OLD is flattened to, drawing units.
    """
    course = pair.course
    size = np.abs(course.deviation)
    cell = np.floor(course.along / spacing)
    first = np.flatnonzero(np.diff(cell, prepend=-1.0))
    if not first.size:
        return Whiskers(np.zeros((0, 2)), np.zeros((0, 2)), np.zeros(0, dtype=np.intp))
    order = np.lexsort((size, cell))
    rows = order[np.append(first[1:], len(order)) - 1]  # cells rise along the course, so sorting keeps their places
    rows = rows[size[rows] * factor >= least]
    base = _nearest(pair.old, course.points[rows], delta)
    tip = base + factor * (course.points[rows] - base)
    return Whiskers(base, tip, bands.index(course.deviation[rows]))


def _nearest(curve: "AnyCurve", points: FloatArray, delta: float) -> FloatArray:
    """Return the points of a curve nearest to given ones, shape (n, d)."""
    middle = np.mean(np.stack(curve.bounds()), axis=0)
    path = curve.flatten(delta).path() - middle
    if len(path) < 2 or not len(points):
        return np.repeat(path[:1] + middle, len(points), axis=0)
    search = SegmentSearch(path[:-1].T.copy(), path[1:].T.copy())
    local = (points - middle).T.copy()
    index = search.exact(local)[0]
    return np.asarray((search.start[:, index] + search.foot(local, index) * search.along[:, index]).T + middle)


def _peaks(number: int, pair: "Compared", factor: float, delta: float) -> list[Mark]:
    marks = []
    for missing in (False, True):
        zones = [zone for zone in pair.record.zones if (zone.along_profile == "old") == missing]
        if not zones:
            continue
        points = np.array([[zone.x, zone.y] for zone in zones])
        if pair.new.dimension == 3:  # a zone names its place in plan: the height is that of the nearest sample
            path = pair.old.flatten(delta).path() if missing else pair.course.points
            points = np.array([path[np.linalg.norm(path[:, :2] - point, axis=1).argmin()] for point in points])
        other = _nearest(pair.new if missing else pair.old, points, delta)
        bases, ends = (points, other) if missing else (other, points)
        tips = bases + factor * (ends - bases)
        marks += [
            Mark(0, number, zone, tuple(base), tuple(tip))
            for zone, base, tip in zip(zones, bases.tolist(), tips.tolist(), strict=True)
        ]
    return marks
