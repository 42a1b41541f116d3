"""Places of an outline that may be corners: peaks of curvature of a soft fit."""

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.corners.outline import EvenOutline

__all__ = ["candidates", "gaps_ahead"]

# lengths in the outline's scale, the turn in degrees
_SMOOTHING, _HALF, _TURN, _GAP = 1.5, 1.25, 16.0, 1.6


def candidates(outline: EvenOutline, scale: float) -> tuple[IntArray, FloatArray]:
    """Return indices of samples that may be corners, and the softly smoothed outline."""
    fair, first, second = outline.smoothed(_SMOOTHING * scale, 2)
    speed = np.maximum(np.hypot(first[:, 0], first[:, 1]), 1e-9)
    curvature = (first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]) / speed**3
    n, half = len(curvature), max(1, round(_HALF * scale / outline.step))
    size = np.abs(curvature)
    turn = _window_sum(curvature * speed * outline.step, half, outline.closed)
    peak = np.abs(turn) > np.radians(_TURN)
    before, after = np.roll(size, 1), np.roll(size, -1)
    peak &= (size >= before) & (size > after)
    if not outline.closed:
        clear = round(2.0 * scale / outline.step)
        peak[:clear] = peak[n - clear :] = False
    index = np.flatnonzero(peak)
    gap = _GAP * scale / outline.step
    while index.size > 1:  # of two nearer than the gap keep the sharper; repeat, since dropping one may free another
        ahead = gaps_ahead(index, n, outline.closed)
        close = ahead < gap
        if not close.any():
            break
        peak_size = size[index]
        following = np.roll(peak_size, -1)
        weaker = np.zeros(index.size, dtype=bool)
        weaker |= close & (peak_size < following)
        weaker |= np.roll(close & (peak_size >= following), 1)
        # drop only local minima, so that a run of close peaks is not emptied at once
        least = weaker & ~(np.roll(weaker & close, 1) & (np.roll(peak_size, 1) <= peak_size))
        index = index[~(least if least.any() else weaker)]
    return index, fair


def _window_sum(values: FloatArray, half: int, closed: bool) -> FloatArray:
    padded = np.pad(values, half, mode="wrap") if closed and half < len(values) else np.pad(values, half)
    total = np.concatenate([[0.0], np.cumsum(padded)])
    return total[2 * half + 1 :] - total[: -2 * half - 1]


def gaps_ahead(index: IntArray, count: int, closed: bool) -> FloatArray:
    """Return the distance in samples from each index to the next one; inf past the last one of an open outline."""
    ahead = (np.roll(index, -1) - index).astype(np.float64)
    if not index.size:
        return ahead
    ahead[-1] = index[0] + count - index[-1] if closed else np.inf
    return ahead
