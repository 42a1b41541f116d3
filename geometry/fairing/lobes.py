"""Take out needless inflections: stiffen small lobes of curvature where the band and the size still hold.

A lobe is a run of curvature of one sign within a piece. Its height is turning times length over 8, the sagitta of
an arc of that turn and length; a lobe whose height is below half the tolerance is not supported by the evidence.
"""

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.layout import Layout
from geometry.fairing.samples import normal_offsets
from geometry.fairing.stiffness import BAND, MEAN_4, MEAN_8, Fit, concerned, local_means, spread, worst_of
from geometry.fairing.system import System
from geometry.fairing.trace import ragged_ranges

__all__ = ["remove_lobes"]

_FLAT = 0.003  # curvature that is not counted, per tolerance
_HEIGHT = 0.5
_STIFFER, _STIFFEST = 1.5, 60.0
_STRAIGHT, _STRAIGHTER = 0.25, 1.4  # share of a lobe's length to begin with, and growth from round to round
_ROUNDS = 12


def remove_lobes(fit: Fit, pins: FloatArray | None) -> Fit:
    """Return the fit with small lobes of curvature flattened; a 3-D one, whose curvature has no sign, as it is.

    Lobes are stiffened first, with a margin on either side; those that this leaves are then drawn straight.
    """
    sampled, layout = fit.sampled, fit.sampled.layout
    if sampled.points.shape[-1] != 2:
        return fit
    system = System(layout, sampled.points, sampled.live, pins)
    allowed = np.maximum(_excess(fit, fit.coefficients) + 1e-9, 1.0)
    frozen = np.zeros(len(layout), dtype=np.bool_)
    stiffness, straightness = fit.stiffness, fit.straightness
    best = fit
    for straighten in (False, True):
        frozen[:] = False
        coefficients = best.coefficients
        for _ in range(_ROUNDS):
            start, stop = _small_lobes(layout, coefficients)
            margin = 0 * start if straighten else np.maximum(2, (0.7 * (stop - start)).astype(np.intp))
            chosen = _covered(layout, start - margin, stop + margin) & ~frozen
            if straighten:
                length = np.zeros(len(layout))
                owner, member, _ = ragged_ranges(start, stop)
                length[member] = np.maximum(1.0, _STRAIGHT * (stop - start)[owner] * layout.h[member])
                straightness = np.where(chosen, np.maximum(_STRAIGHTER * straightness, length), straightness)
            else:
                chosen &= stiffness < _STIFFEST
                stiffness = np.where(chosen, np.minimum(_STIFFER * stiffness, _STIFFEST), stiffness)
            if not chosen.any():
                break
            coefficients = _resolved(system, fit, pins, coefficients, stiffness, straightness, chosen)
            for reach, factor in ((7, 1.0), (16, 1.02), (64, 1.02)):  # give back what breaks a limit, wider each time
                broken = _excess(fit, coefficients) > factor * allowed
                if not broken.any():
                    break
                back = spread(layout, broken, reach)
                if straighten:
                    straightness = np.where(back, fit.straightness, straightness)
                else:
                    stiffness = np.where(back, fit.stiffness, stiffness)
                frozen |= back
                coefficients = _resolved(system, fit, pins, coefficients, stiffness, straightness, back)
        coefficients = system.solve(stiffness, None, straightness)  # windows were solved with their surroundings held
        if (_excess(fit, coefficients) > 1.02 * allowed).any():
            break
        best = Fit(sampled, coefficients, stiffness, straightness)
    return best


def _resolved(
    system: System,
    fit: Fit,
    pins: FloatArray | None,
    coefficients: FloatArray,
    stiffness: FloatArray,
    straightness: FloatArray,
    changed: BoolArray,
) -> FloatArray:
    """Return the coefficients after a change of stiffness, of windows about it where the profile is long."""
    sampled = fit.sampled
    chosen = concerned(sampled.layout, stiffness, changed)
    if chosen is None:
        return system.solve(stiffness, None, straightness)
    window = System(sampled.layout, sampled.points, sampled.live, pins, chosen)
    return window.solve(stiffness, coefficients, straightness)


def _excess(fit: Fit, coefficients: FloatArray) -> FloatArray:
    """Return the largest of the offsets and local means over their limits, for every interval."""
    layout, live = fit.sampled.layout, fit.sampled.live
    offsets = normal_offsets(fit.sampled, coefficients)
    return np.maximum.reduce(
        [
            worst_of(offsets) / BAND,
            local_means(layout.piece, layout.periodic, offsets, live, 4.0) / MEAN_4,
            local_means(layout.piece, layout.periodic, offsets, live, 8.0) / MEAN_8,
        ]
    )


def _small_lobes(layout: Layout, coefficients: FloatArray) -> tuple[IntArray, IntArray]:
    """Return [start, stop) of the small lobes that have a neighbour lobe in their piece, in intervals."""
    middle = np.arange(len(layout))
    t = np.full(len(layout), 0.5)
    first, second = (layout.evaluate(coefficients, middle, t, k) for k in (1, 2))
    speed = np.maximum(np.hypot(first[:, 0], first[:, 1]), 1e-9)
    curvature = (first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]) / speed**3
    curvature[np.abs(curvature) < _FLAT] = 0.0
    start, stop = _runs(layout, np.sign(curvature))
    turning = np.concatenate([[0.0], np.cumsum(np.abs(curvature) * speed * layout.h)])
    along = np.concatenate([[0.0], np.cumsum(speed * layout.h)])
    height = (turning[stop] - turning[start]) * (along[stop] - along[start]) / 8.0
    pieces = layout.piece[start]
    if layout.periodic:
        neighbour = np.full(len(start), len(start) > 1)
    else:
        same = pieces[1:] == pieces[:-1]
        neighbour = np.concatenate([same, [False]]) | np.concatenate([[False], same])
    small = neighbour & (height < _HEIGHT)
    return start[small], stop[small]


def _covered(layout: Layout, start: IntArray, stop: IntArray) -> BoolArray:
    """Return the intervals in ranges [start, stop), cut at the ends of the piece that the middle of a range lies in."""
    size = len(layout)
    change = np.zeros(3 * size + 1)
    if layout.periodic:
        np.add.at(change, start + size, 1.0)
        np.add.at(change, stop + size, -1.0)
        inside = (np.cumsum(change[:-1]) > 0.5).reshape(3, size)
        return np.asarray(inside.any(axis=0))
    piece = layout.piece[(start + stop) // 2]
    first = layout.starts[piece]
    np.add.at(change, np.maximum(start, first), 1.0)
    np.add.at(change, np.minimum(stop, first + layout.counts[piece]), -1.0)
    return np.asarray(np.cumsum(change[:size]) > 0.5)


def _runs(layout: Layout, sign: FloatArray) -> tuple[IntArray, IntArray]:
    """Return [start, stop) of runs of one sign in each piece; flat intervals go with the run before them."""
    size = len(sign)
    if layout.periodic and (sign != 0.0).any():
        bent = np.flatnonzero(sign)
        sign[: bent[0]] = sign[bent[-1]]
    index = np.where(sign != 0.0, np.arange(size), -1)
    index = np.maximum(np.maximum.accumulate(index), layout.starts[layout.piece])
    filled = sign[index]
    edge = (filled[1:] != filled[:-1]) | (layout.piece[1:] != layout.piece[:-1])
    # a flat beginning of a piece joins the first lobe
    flat_start = (filled[:-1] == 0.0) & (layout.piece[1:] == layout.piece[:-1])
    cuts = 1 + np.flatnonzero(edge & ~flat_start)
    return np.concatenate([[0], cuts]), np.concatenate([cuts, [size]])
