"""Where the two sides of a corner meet, from fits that know nothing of each other."""

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.fairing.layout import Layout
from geometry.fairing.trace import Trace

__all__ = ["corner_points", "unit"]

_REACH, _REACH_SHARE, _BEYOND = 3.0, 0.4, 2.5
_POINTS = 25
_STEP, _FARTHEST, _WINDOW = 0.05, 8.0, 8.0
_BATCH = 2000


def unit(vectors: FloatArray) -> FloatArray:
    """Return vectors of length 1, shape kept; a zero vector stays zero."""
    size = np.sqrt((vectors * vectors).sum(axis=-1, keepdims=True))
    return vectors / np.where(size > 0.0, size, 1.0)


def corner_points(
    trace: Trace,
    layout: Layout,
    coefficients: FloatArray,
    before: IntArray,
    after: IntArray,
    own: FloatArray,
    most: float,
) -> FloatArray:
    """Return the sharp corner between each two neighbouring pieces.

    The nearest pair of points of the two sides, extended straight, is refined by intersecting the tangents there. A
    point farther than `most` from the trace moves in along the bisector of the corner to the first place within it:
    the farthest sharp tip that the band allows.

    Args:
        before, after: pieces that end and start at each corner, shape (n,).
        own: arc length of the trace at each corner, shape (n,).
        most: largest distance from the trace.

    Returns:
        Shape (n, d).
    """
    out = [
        _batch(trace, layout, coefficients, before[k : k + _BATCH], after[k : k + _BATCH], own[k : k + _BATCH], most)
        for k in range(0, len(own), _BATCH)
    ]
    return np.concatenate(out)


def _batch(
    trace: Trace,
    layout: Layout,
    coefficients: FloatArray,
    before: IntArray,
    after: IntArray,
    own: FloatArray,
    most: float,
) -> FloatArray:
    p, d1 = _side(layout, coefficients, before, end=True)
    q, d2 = _side(layout, coefficients, after, end=False)
    gap = p[:, :, None] - q[:, None]
    square = sum(gap[..., k] ** 2 for k in range(gap.shape[-1]))
    best = np.asarray(square).reshape(len(own), -1).argmin(axis=1)
    i, j = np.divmod(best, q.shape[1])
    row = np.arange(len(own))
    p, d1, q, d2 = p[row, i], d1[row, i], q[row, j], d2[row, j]
    middle = 0.5 * (p + q)
    meeting = middle
    if trace.dimension == 2:
        sine = d1[:, 0] * d2[:, 1] - d1[:, 1] * d2[:, 0]
        across = q - p
        ahead = (across[:, 0] * d2[:, 1] - across[:, 1] * d2[:, 0]) / np.where(np.abs(sine) > 0.1, sine, 1.0)
        crossing = p + ahead[:, None] * d1
        near = np.sqrt(((crossing - middle) ** 2).sum(axis=1)) < 0.5
        meeting = np.where((near & (np.abs(sine) > 0.1))[:, None], crossing, middle)
    return _moved_in(trace, meeting, d2 - d1, own, most)


def _side(layout: Layout, coefficients: FloatArray, piece: IntArray, *, end: bool) -> tuple[FloatArray, FloatArray]:
    """Return points and directions of travel on the last (first) stretch of pieces and its straight extension."""
    lengths = layout.lengths[piece]
    reach = np.minimum(_REACH, _REACH_SHARE * lengths)
    fraction = np.linspace(0.0, 1.0, _POINTS)
    position = lengths[:, None] - reach[:, None] * (1.0 - fraction) if end else reach[:, None] * (1.0 - fraction)
    interval, t = layout.locate(np.broadcast_to(piece[:, None], position.shape), position)
    points = layout.evaluate(coefficients, interval, t)
    directions = unit(layout.evaluate(coefficients, interval, t, 1))
    beyond = (_BEYOND if end else -_BEYOND) * fraction[1:, None]
    straight = points[:, -1:] + beyond * directions[:, -1:]
    extended = np.broadcast_to(directions[:, -1:], straight.shape)
    return np.concatenate([points, straight], axis=1), np.concatenate([directions, extended], axis=1)


def _moved_in(trace: Trace, points: FloatArray, inwards: FloatArray, own: FloatArray, most: float) -> FloatArray:
    far = np.flatnonzero(trace.distance(points, own, _WINDOW) > most)
    if not far.size:
        return points
    steps = np.arange(_STEP, _FARTHEST + 0.5 * _STEP, _STEP)
    trial = points[far, None] + steps[:, None] * unit(inwards[far])[:, None]
    flat = trial.reshape(-1, trial.shape[-1])
    gap = trace.distance(flat, np.repeat(own[far], len(steps)), _WINDOW).reshape(len(far), len(steps))
    inside = gap <= most
    first = inside.argmax(axis=1)
    out = points.copy()
    out[far] = np.where(inside.any(axis=1, keepdims=True), trial[np.arange(len(far)), first], trace.at(own[far]))
    return out
