"""Fewest vertices of a spline in space: the farthest-reaching chords between points of the curve."""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline, bezier_evaluate
from geometry.economy.gates import PER_LINK, PER_PIECE, Limits
from geometry.economy.track import smooth_runs
from geometry.polyline import Polyline

__all__ = ["fewest_space_vertices"]


def fewest_space_vertices(spline: Spline, limits: Limits) -> Polyline:
    """Return a polyline whose vertices lie on a spline of any dimension, within a chord error both ways.

    From every vertex the farthest chord is taken that leaves no sample of the curve farther than the chord error, with
    gates (samples) at least 24 a link; corners are vertices.

    Args:
        spline: d = 2 or 3.
        limits: chord error and caps.
    """
    points, corner, slack = _samples(spline, limits)
    turn = _turns(points, corner)
    width = limits.chord_error - slack
    kept, at, end = [0], 0, len(points) - 1
    stops = np.append(np.flatnonzero(corner), end)
    while at < end:
        stop = int(stops[np.searchsorted(stops, at, side="right")])
        at = _farthest(points, turn, at, stop, width, limits)
        kept.append(at)
    vertices = points[np.array(kept[:-1] if spline.closed else kept)]
    return Polyline(vertices, spline.closed)


def _samples(spline: Spline, limits: Limits) -> tuple[FloatArray, BoolArray, float]:
    """Return samples along the curve, which of them are corners, and how far the curve may leave their chords."""
    beziers, starts, _ = smooth_runs(spline)
    t = np.linspace(0.0, 1.0, 9)
    slope, bend = bezier_evaluate(beziers[:, None], t, 1), bezier_evaluate(beziers[:, None], t, 2)
    speed = np.maximum(np.linalg.norm(slope, axis=-1), 1e-300)
    across = bend - slope * ((bend * slope).sum(axis=-1) / speed**2)[..., None]
    links = np.sqrt(np.linalg.norm(across, axis=-1).max(axis=1) / (8.0 * limits.chord_error))  # in one span
    if limits.max_step is not None:
        links = np.maximum(links, speed.mean(axis=1) / limits.max_step)
    if limits.max_turn is not None:
        links = np.maximum(links, (np.linalg.norm(across, axis=-1) / speed).max(axis=1) / limits.max_turn)
    share = speed.mean(axis=1) / speed.mean(axis=1).sum()
    count = np.ceil(PER_LINK * links + PER_PIECE * share + 2.0).astype(np.intp)
    span = np.repeat(np.arange(len(count)), count)
    step = np.arange(len(span)) - np.repeat(np.cumsum(count) - count, count)
    points = bezier_evaluate(beziers[span], step / count[span], 0)
    corner = np.zeros(len(points) + 1, dtype=np.bool_)
    corner[(np.cumsum(count) - count)[starts]] = True
    slack = 2.5 / PER_LINK**2 * limits.chord_error
    return np.vstack([points, beziers[-1, -1]]), corner, slack


def _turns(points: FloatArray, corner: BoolArray) -> FloatArray:
    """Return the running turn of the samples, radians; a corner adds none."""
    edges = np.diff(points, axis=0)
    unit = edges / np.maximum(np.linalg.norm(edges, axis=1), 1e-300)[:, None]
    turn = 2.0 * np.arcsin(np.minimum(0.5 * np.linalg.norm(np.diff(unit, axis=0), axis=1), 1.0))
    return np.cumsum(np.concatenate([[0.0], np.where(corner[1:-1], 0.0, turn), [0.0]]))


def _farthest(points: FloatArray, turn: FloatArray, at: int, stop: int, width: float, limits: Limits) -> int:
    """Return the last sample up to `stop` that a chord from sample `at` may end on: doubling, then halving."""
    good, step = at + 1, 2 * PER_LINK
    while good < stop:
        trial = min(at + step, stop)
        if not _fits(points, turn, at, trial, width, limits):
            break
        good, step = trial, 2 * step
    bad = min(at + step, stop + 1)
    while bad - good > 1:
        middle = (good + bad) // 2
        if _fits(points, turn, at, middle, width, limits):
            good = middle
        else:
            bad = middle
    return min(good, stop)


def _fits(points: FloatArray, turn: FloatArray, at: int, to: int, width: float, limits: Limits) -> bool:
    chord = points[to] - points[at]
    length = float(np.linalg.norm(chord))
    if limits.max_step is not None and length > limits.max_step:
        return False
    if limits.max_turn is not None and turn[to] - turn[at] > limits.max_turn:
        return False
    inner = points[at + 1 : to] - points[at]
    if length == 0.0:
        return bool(np.linalg.norm(inner, axis=1).max(initial=0.0) <= width)
    along = np.clip(inner @ chord / length**2, 0.0, 1.0)
    return bool(np.linalg.norm(inner - along[:, None] * chord, axis=1).max(initial=0.0) <= width)
