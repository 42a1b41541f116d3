"""Pieces that the evidence allows to be straight are drawn straight.

Between corners a side bows by whatever the raster or the noise happens to say, unless a straight line is preferred
where nothing speaks against it. A piece may be straight when its samples keep the band about their own line, their
local means stay small, and the sagitta of a parabola through them is within two and a half standard errors of none.
"""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.fairing.samples import Sampled
from geometry.fairing.stiffness import BAND, MEAN_4, MEAN_8, local_means

__all__ = ["straight_pieces", "straightness_of"]

# standard error of the sagitta of a least-squares parabola over a length of n tolerances, independent samples one
# tolerance apart with a standard deviation of 0.3 tolerances: sqrt(720) / 8 * 0.3 / sqrt(n)
_SAGITTA_ERROR = np.sqrt(720.0) / 8.0 * 0.3
_ERRORS = 2.5
_BEAM = 2.0  # straightness of a straight piece over its length


def straight_pieces(sampled: Sampled) -> BoolArray:
    """Return which pieces of a 2-D profile the evidence allows to be straight, shape (p,)."""
    layout = sampled.layout
    count = len(layout.lengths)
    if layout.periodic or sampled.points.shape[-1] != 2:
        return np.zeros(count, dtype=np.bool_)
    live = sampled.live
    weight = live.astype(np.float64)

    def total(values: FloatArray) -> FloatArray:
        return np.asarray(np.bincount(layout.piece, (weight * values).sum(axis=1), count), dtype=np.float64)

    number = np.maximum(total(np.ones_like(weight)), 1.0)
    x, y = sampled.points[..., 0], sampled.points[..., 1]
    x = x - (total(x) / number)[layout.piece][:, None]
    y = y - (total(y) / number)[layout.piece][:, None]
    angle = 0.5 * np.arctan2(2.0 * total(x * y), total(x * x) - total(y * y))
    c, s = np.cos(angle)[layout.piece][:, None], np.sin(angle)[layout.piece][:, None]
    along, across = c * x + s * y, c * y - s * x
    offsets = np.where(live, across, 0.0)[..., None]
    most = np.zeros(count)
    for value, limit in (
        (np.abs(offsets[..., 0]).max(axis=1), BAND),
        (local_means(layout.piece, False, offsets, live, 4.0), MEAN_4),
        (local_means(layout.piece, False, offsets, live, 8.0), MEAN_8),
    ):
        np.maximum.at(most, layout.piece, value / limit)
    bow = along * along
    bow = bow - (total(bow) / number)[layout.piece][:, None]
    slope = total(across * bow) / np.maximum(total(bow * bow), 1e-12)
    sagitta = np.abs(slope) * layout.lengths**2 / 4.0
    return (most <= 1.0) & (sagitta <= _ERRORS * _SAGITTA_ERROR / np.sqrt(layout.lengths))


def straightness_of(sampled: Sampled, straight: BoolArray) -> FloatArray:
    """Return the straightness of every interval: that of a stiff beam in straight pieces, 0 elsewhere, shape (m,)."""
    layout = sampled.layout
    return np.asarray(np.where(straight, _BEAM * layout.lengths, 0.0)[layout.piece])
