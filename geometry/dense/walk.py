"""A walk along a spline that takes the farthest chord each time: the least number where limits are monotone.

Long stretches are cut into blocks that are walked at once, one row a block. A second walk at a lower level of usage
takes the rest out of the last chord of every block, so that no sliver is left there.
"""

import numpy as np

from geometry.arrays import FloatArray
from geometry.dense.measure import ChordLimits, SplineMeasure

__all__ = ["farthest_chords"]

_BLOCK = 100  # chords that are walked one after the other
_LEAST_USED = 0.997  # of the level, from which on a chord is long enough
_HALVINGS = 40


def farthest_chords(measure: SplineMeasure, limits: ChordLimits, u: FloatArray) -> FloatArray:
    """Return parameters of vertices from the first to the last of given ones, as few as a walk finds.

    Args:
        measure: the spline.
        limits: what chords must keep.
        u: parameters of vertices that keep the limits, increasing, shape (m,); they tell how long chords are about.
    """
    blocks = -(-(len(u) - 1) // _BLOCK)
    stops = u[np.rint(np.linspace(0, len(u) - 1, blocks + 1)).astype(np.intp)]
    level = np.ones(blocks)
    first, used = _walk(measure, limits, stops, level, u)
    counts = np.bincount(first[:, 0].astype(np.intp), minlength=blocks)
    level = np.minimum((counts - 1.0 + 1.02 * used) / counts, 1.0)
    second, _ = _walk(measure, limits, stops, level, u)
    even = np.bincount(second[:, 0].astype(np.intp), minlength=blocks) <= counts
    row = first[:, 0].astype(np.intp), second[:, 0].astype(np.intp)
    starts = np.concatenate([first[~even[row[0]], 1], second[even[row[1]], 1]])
    return np.append(np.sort(starts), u[-1])


def _walk(
    measure: SplineMeasure, limits: ChordLimits, stops: FloatArray, level: FloatArray, u: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return (row, parameter of the start) of every chord, shape (k, 2), and the usage of the last chord of a row."""
    rows = np.arange(len(level))
    at, used, taken = stops[:-1].copy(), np.zeros(len(level)), []
    step = np.diff(u)[np.minimum(np.searchsorted(u, at), len(u) - 2)]
    while len(rows):
        taken.append(np.stack([rows, at], axis=1))
        end = stops[rows + 1]
        reached, use = _farthest(measure, limits, at, end, level[rows], step)
        arrived = reached >= end
        used[rows[arrived]] = use[arrived]
        step = (reached - at)[~arrived]
        rows, at = rows[~arrived], reached[~arrived]
    return np.concatenate(taken), used


def _farthest(
    measure: SplineMeasure, limits: ChordLimits, at: FloatArray, end: FloatArray, level: FloatArray, step: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the farthest ends of chords that use no more than the level, and what they use, by a bracketed search."""
    good, good_use = at.copy(), np.zeros(len(at))
    bad, bad_use = np.full(len(at), np.inf), np.ones(len(at))
    trial = np.minimum(at + step, end)
    going = np.arange(len(at))
    for _ in range(4 * _HALVINGS):
        use = measure.usage(at[going], trial, limits) / level[going]
        fits = use <= 1.0
        good[going[fits]], good_use[going[fits]] = trial[fits], use[fits]
        bad[going[~fits]], bad_use[going[~fits]] = trial[~fits], use[~fits]
        done = fits & ((use >= _LEAST_USED) | (trial >= end[going]))
        done |= (good[going] > at[going]) & (bad[going] - good[going] <= 1e-3 * (good[going] - at[going]))
        going = going[~done]
        if not len(going):
            return good, good_use * level
        low, high, start = good[going], bad[going], at[going]
        open_ahead = ~np.isfinite(high)
        gain = np.clip(1.0 / np.maximum(good_use[going], 1e-3), 1.0005, 2.0)
        ahead = np.where(low > start, start + (low - start) * gain, start + step[going])
        safe = np.where(open_ahead, low + 1.0, high)
        rise = np.maximum(bad_use[going] - good_use[going], 1e-12)
        share = np.clip((0.9985 - good_use[going]) / rise, 0.02, 0.98)
        share = np.where((low == start) & (bad_use[going] > 8.0), 0.25, share)
        trial = np.minimum(np.where(open_ahead, ahead, low + share * (safe - low)), end[going])
    # chords shrink to nothing only where the level itself is out of reach: the given vertices stand there
    return np.where(good > at, good, np.minimum(at + step, end)), good_use * level
