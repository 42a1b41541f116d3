"""Stiffness that gives way only where the evidence asks for it.

The fit starts stiff. Where it leaves the band, or where its local mean offset passes a small share of the tolerance (so
that the size stays unbiased), the stiffness falls; it grows again only slowly along the curve.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.fairing.layout import Layout
from geometry.fairing.samples import Sampled, normal_offsets
from geometry.fairing.trace import near

__all__ = ["BAND", "Fit", "limit_growth", "local_means", "relax", "spread", "start_stiffness", "worst_of"]

BAND = 0.93  # offset of a sample that counts as leaving the band
_DRIFT = 0.15  # local mean offset that counts as biased
_STIFFEST, _SOFTEST = 40.0, 0.6
_GROWTH = 0.1
_SPREAD = 3
_ROUNDS = 40


@dataclass(frozen=True, slots=True)
class Fit:
    """Samples, the coefficients fitted to them, and the stiffness of every interval."""

    sampled: Sampled
    coefficients: FloatArray
    stiffness: FloatArray


def start_stiffness(layout: Layout) -> FloatArray:
    """Return the stiffness to begin with: twice the piece, at most 40 tolerances."""
    return np.minimum(_STIFFEST, 2.0 * layout.lengths)[layout.piece]


def worst_of(values: FloatArray) -> FloatArray:
    """Return the largest size of the offsets of each interval, shape (m,), from (m, q, 1 or 3)."""
    size = np.abs(values[..., 0]) if values.shape[-1] == 1 else np.sqrt((values * values).sum(axis=-1))
    return np.asarray(size.max(axis=1))


def local_means(layout: Layout, offsets: FloatArray, live: BoolArray, sigma: float) -> FloatArray:
    """Return the size of the Gaussian mean of the offsets inside each piece, shape (m,).

    The sum of g w e is divided by the root of the sum of g w, since a short window is noisier than a long one.

    Args:
        offsets: shape (m, q, 1 or 3), 0 where not live.
        sigma: width in intervals.
    """
    half = int(np.ceil(3.0 * sigma))
    kernel = np.exp(-0.5 * (np.arange(-half, half + 1) / sigma) ** 2)
    kernel /= kernel.sum()
    weight = live.mean(axis=1)
    columns = [offsets[..., k].mean(axis=1) for k in range(offsets.shape[-1])]
    if layout.periodic:
        size = len(layout)
        at = np.mod(np.arange(-half, size + half), size)
        smooth = [np.convolve(column[at], kernel, mode="valid") for column in (*columns, weight)]
    else:
        at = np.arange(len(layout)) + half * (layout.piece + 1)
        padded = np.zeros(len(layout) + half * (len(layout.lengths) + 1))
        smooth = []
        for column in (*columns, weight):
            padded[at] = column
            smooth.append(np.convolve(padded, kernel, mode="same")[at])
    scale = np.sqrt(np.maximum(smooth[-1], 1e-12))
    total = np.abs(smooth[0]) if len(columns) == 1 else np.sqrt(sum(s * s for s in smooth[:-1]))
    return np.asarray(np.where(smooth[-1] > 1e-9, total / scale, 0.0))


def limit_growth(layout: Layout, stiffness: FloatArray, slope: float) -> FloatArray:
    """Return the largest stiffness below the given one that grows by at most `slope` per unit length in a piece."""
    position = layout.position
    if layout.periodic:
        total = layout.lengths[0]
        triple = np.concatenate([position - total, position, position + total])
        size = len(position)
        return _limited(np.tile(stiffness, 3), slope * triple)[size : 2 * size]
    return _limited(stiffness, slope * position + 1e4 * layout.piece)


def _limited(values: FloatArray, ramp: FloatArray) -> FloatArray:
    forward = np.minimum.accumulate(values - ramp) + ramp
    return np.asarray(np.minimum.accumulate((forward + ramp)[::-1])[::-1] - ramp)


def relax(sampled: Sampled, stiffness: FloatArray, pins: FloatArray | None) -> Fit:
    """Soften a fit until it keeps the band and its size.

    Args:
        stiffness: of every interval, shape (m,); it only falls.
        pins: points where pieces start and end, shape (p, 2, d); None for a periodic piece.
    """
    layout, live = sampled.layout, sampled.live
    for _ in range(_ROUNDS):
        coefficients = layout.solve(sampled.points, live, stiffness, pins)
        offsets = normal_offsets(sampled, coefficients) * live[..., None]
        excess = np.maximum(worst_of(offsets) / BAND, local_means(layout, offsets, live, 4.0) / _DRIFT)
        hot = excess > 1.0
        if not hot.any():
            break
        spread = _spread_maximum(layout, np.where(hot, excess, 0.0))
        factor = np.where(spread > 1.0, np.clip(np.maximum(spread, 1.0) ** -0.7, 0.5, 0.95), 1.0)
        stiffness = np.maximum(limit_growth(layout, stiffness * factor, _GROWTH), _SOFTEST)
    return Fit(sampled, coefficients, stiffness)


def _spread_maximum(layout: Layout, values: FloatArray) -> FloatArray:
    """Return the largest value among neighbours at most 3 intervals away in the same piece."""
    out = values.copy()
    for shift in range(1, _SPREAD + 1):
        if layout.periodic:
            out = np.maximum(out, np.maximum(np.roll(values, shift), np.roll(values, -shift)))
            continue
        same = layout.piece[shift:] == layout.piece[:-shift]
        out[shift:] = np.where(same, np.maximum(out[shift:], values[:-shift]), out[shift:])
        out[:-shift] = np.where(same, np.maximum(out[:-shift], values[shift:]), out[:-shift])
    return out


def spread(layout: Layout, flags: BoolArray, reach: int) -> BoolArray:
    """Return flags spread to neighbours at most `reach` intervals away in the same piece."""
    return near(flags, layout.piece, reach, layout.periodic)
