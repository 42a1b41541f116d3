"""Stiffness that gives way only where the evidence asks for it.

The fit starts stiff. Where it leaves the band, or where its local mean offset passes a small share of the tolerance (so
that the size stays unbiased), the stiffness falls; it grows again only slowly along the curve.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.layout import Layout
from geometry.fairing.samples import Sampled, normal_offsets
from geometry.fairing.system import System
from geometry.fairing.trace import near

__all__ = [
    "BAND",
    "MEAN_4",
    "MEAN_8",
    "Fit",
    "concerned",
    "limit_growth",
    "local_means",
    "relax",
    "spread",
    "start_stiffness",
    "step_means",
    "window_core",
    "worst_of",
]

BAND = 0.93  # offset of a sample that counts as leaving the band
MEAN_4, MEAN_8 = 0.35, 0.30  # local means, of 4 and 8 intervals, that a fit preferred for its shape may have
_DRIFT = 0.12  # local mean offset that counts as biased
_STIFFEST, _SOFTEST = 40.0, 0.6
_GROWTH = 0.1
_WIDER, _TREAD_SHARE = (8.0, 16.0, 32.0), 0.8
_SPREAD = 3
_ROUNDS = 40
_WINDOWED, _NARROWER = 600, 0.6
_REACH, _LEAST_REACH, _MARGIN = 5.0, 16, 12


@dataclass(frozen=True, slots=True)
class Fit:
    """Samples, the coefficients fitted to them, and the stiffness and straightness of every interval."""

    sampled: Sampled
    coefficients: FloatArray
    stiffness: FloatArray
    straightness: FloatArray


def start_stiffness(layout: Layout) -> FloatArray:
    """Return the stiffness to begin with: twice the piece, at most 40 tolerances."""
    return np.minimum(_STIFFEST, 2.0 * layout.lengths)[layout.piece]


def worst_of(values: FloatArray) -> FloatArray:
    """Return the largest size of the offsets of each interval, shape (m,), from (m, q, 1 or 3)."""
    size = np.abs(values[..., 0]) if values.shape[-1] == 1 else np.sqrt((values * values).sum(axis=-1))
    return np.asarray(size.max(axis=1))


def local_means(runs: IntArray, wrap: bool, offsets: FloatArray, live: BoolArray, sigma: float) -> FloatArray:
    """Return the size of the Gaussian mean of the offsets inside each run of intervals, shape (m,).

    The sum of g w e is divided by the root of the sum of g w, since a short window is noisier than a long one.

    Args:
        runs: run of every interval, not decreasing, shape (m,).
        wrap: whether the one run is a loop.
        offsets: shape (m, q, 1 or 3), 0 where not live.
        live: samples that count, shape (m, q).
        sigma: width in intervals.
    """
    half = int(np.ceil(3.0 * sigma))
    kernel = np.exp(-0.5 * (np.arange(-half, half + 1) / sigma) ** 2)
    kernel /= kernel.sum()
    size = len(runs)
    columns = [offsets[..., k].sum(axis=1) / offsets.shape[1] for k in range(offsets.shape[-1])]
    columns.append(live.sum(axis=1) / live.shape[1])
    if wrap:
        at = np.mod(np.arange(-half, size + half), size)
        smooth = [np.convolve(column[at], kernel, mode="valid") for column in columns]
    else:
        at = np.arange(size) + half * (runs + 1)
        padded = np.zeros(size + half * (int(runs[-1]) + 2))
        smooth = []
        for column in columns:
            padded[at] = column
            smooth.append(np.convolve(padded, kernel, mode="same")[at])
    scale = np.sqrt(np.maximum(smooth[-1], 1e-12))
    total = np.abs(smooth[0]) if len(columns) == 2 else np.sqrt(sum(s * s for s in smooth[:-1]))
    return np.asarray(np.where(smooth[-1] > 1e-9, total / scale, 0.0))


def step_means(runs: IntArray, wrap: bool, offsets: FloatArray, live: BoolArray, tread: FloatArray) -> FloatArray:
    """Return local means of 4 intervals, and of more beside long treads: a mean over less sees the steps themselves.

    Args:
        runs, wrap, offsets, live: as for `local_means`.
        tread: longest tread of a staircase beside every interval, shape (m,).
    """
    means = local_means(runs, wrap, offsets, live, 4.0)
    for width in _WIDER:
        wide = tread > _TREAD_SHARE * width
        if wide.any():
            means = np.where(wide, local_means(runs, wrap, offsets, live, width), means)
    return means


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


def relax(sampled: Sampled, stiffness: FloatArray, pins: FloatArray | None, straightness: FloatArray) -> Fit:
    """Soften a fit until it keeps the band and its size.

    On a long profile only windows about the places that ask for it are solved again, so that a stretch costs its own
    rounds only. What lies around a window is held, which keeps the curve as smooth as before but no longer the exact
    minimum; the band and the local means are always judged on the whole curve as it is.

    Args:
        sampled: samples and layout.
        stiffness: of every interval, shape (m,); it only falls.
        pins: points where pieces start and end, shape (p, 2, d); None for a periodic piece.
        straightness: of every interval, shape (m,); a piece that breaks the band loses it.
    """
    layout = sampled.layout
    system = System(layout, sampled.points, sampled.live, pins)
    coefficients = system.solve(stiffness, None, straightness)
    excess = _excess(sampled, layout.piece, layout.periodic, coefficients, straightness, None)
    for _ in range(_ROUNDS):
        hot = (excess > 1.0) & ((stiffness > _SOFTEST) | (straightness > 0.0))  # the softest can give no more
        if not hot.any():
            break
        straightness = _unbent(layout, straightness, hot)
        stiffness = limit_growth(layout, _softened(stiffness, excess, layout.piece, layout.periodic), _GROWTH)
        stiffness = np.maximum(stiffness, _SOFTEST)
        chosen = concerned(layout, stiffness, hot)
        if chosen is None:
            coefficients = system.solve(stiffness, None, straightness)
            excess = _excess(sampled, layout.piece, layout.periodic, coefficients, straightness, None)
        else:
            stiffness, coefficients = _relax_windows(sampled, stiffness, pins, straightness, coefficients, chosen)
            stiffness = np.maximum(limit_growth(layout, stiffness, _GROWTH), _SOFTEST)
            chosen, runs = layout.windows(chosen)
            core = window_core(layout, chosen, runs)  # nothing has changed outside
            excess[chosen[core]] = _excess(sampled, runs, False, coefficients, straightness, chosen)[core]
    return Fit(sampled, coefficients, stiffness, straightness)


def _unbent(layout: Layout, straightness: FloatArray, hot: BoolArray) -> FloatArray:
    """Return the straightness without the pieces that hold a hot interval."""
    lost = np.zeros(len(layout.lengths), dtype=np.bool_)
    lost[layout.piece[hot & (straightness > 0.0)]] = True
    return np.asarray(np.where(lost[layout.piece], 0.0, straightness))


def _relax_windows(
    sampled: Sampled,
    stiffness: FloatArray,
    pins: FloatArray | None,
    straightness: FloatArray,
    coefficients: FloatArray,
    chosen: IntArray,
) -> tuple[FloatArray, FloatArray]:
    """Return stiffness and coefficients after softening inside windows, the coefficients around them held."""
    layout = sampled.layout
    stiffness = stiffness.copy()
    system: System | None = None
    for _ in range(_ROUNDS):
        if system is None:
            system = System(layout, sampled.points, sampled.live, pins, chosen)
            chosen, runs = system.chosen, system.runs
            core = window_core(layout, chosen, runs)
            position = np.cumsum(layout.h[chosen])
        coefficients = system.solve(stiffness, coefficients, straightness)
        excess = np.where(core, _excess(sampled, runs, False, coefficients, straightness, chosen), 0.0)
        asking = (excess > 1.0) & (stiffness[chosen] > _SOFTEST)
        if not asking.any():
            break
        softer = _softened(stiffness[chosen], excess, runs, False)
        stiffness[chosen] = np.maximum(_limited(softer, _GROWTH * position + 1e4 * runs), _SOFTEST)
        hot = np.zeros(len(layout), dtype=np.bool_)
        hot[chosen[asking]] = True
        narrower = np.sort(chosen[_reached(layout, stiffness, hot)[chosen]])
        if len(narrower) < _NARROWER * len(chosen):
            chosen, system = narrower, None
    return stiffness, coefficients


def _excess(
    sampled: Sampled,
    runs: IntArray,
    wrap: bool,
    coefficients: FloatArray,
    straightness: FloatArray,
    chosen: IntArray | None,
) -> FloatArray:
    """Return the largest of offset and local mean over their limits, for every interval chosen."""
    offsets = normal_offsets(sampled, coefficients, chosen)
    live = sampled.live if chosen is None else sampled.live[chosen]
    straight = (straightness if chosen is None else straightness[chosen]) > 0.0
    drift = np.where(straight, MEAN_4, _DRIFT)
    tread = sampled.tread if chosen is None else sampled.tread[chosen]
    return np.maximum(worst_of(offsets) / BAND, step_means(runs, wrap, offsets, live, tread) / drift)


def _softened(stiffness: FloatArray, excess: FloatArray, runs: IntArray, wrap: bool) -> FloatArray:
    """Return the stiffness lowered where the excess of an interval at most 3 away in the same run passes 1."""
    values = np.maximum(excess, 1.0)
    most = values.copy()
    for shift in range(1, _SPREAD + 1):
        if wrap:
            most = np.maximum(most, np.maximum(np.roll(values, shift), np.roll(values, -shift)))
            continue
        same = runs[shift:] == runs[:-shift]
        most[shift:] = np.where(same, np.maximum(most[shift:], values[:-shift]), most[shift:])
        most[:-shift] = np.where(same, np.maximum(most[:-shift], values[shift:]), most[:-shift])
    return np.asarray(stiffness * np.where(most > 1.0, np.clip(most**-0.7, 0.5, 0.95), 1.0))


def concerned(layout: Layout, stiffness: FloatArray, changed: BoolArray) -> IntArray | None:
    """Return the intervals of windows about changed ones, or None where solving the whole is as good."""
    if len(layout) <= _WINDOWED:
        return None
    chosen = np.flatnonzero(_reached(layout, stiffness, changed))
    return chosen if len(chosen) < _NARROWER * len(layout) else None


def _reached(layout: Layout, stiffness: FloatArray, hot: BoolArray) -> BoolArray:
    """Return the intervals that a change of stiffness at hot ones can reach noticeably.

    The influence of a change decays with the integral of ds / l; what is within 5 of a hot interval is kept, and 16
    intervals in any case.
    """
    depth = np.cumsum(layout.h / stiffness)
    total = depth[-1]
    depth = depth + (total + 10.0) * layout.piece
    places = depth[hot]
    before = np.maximum.accumulate(np.where(hot, depth, places[-1] - total if layout.periodic else -np.inf))
    after = np.where(hot, depth, places[0] + total if layout.periodic else np.inf)
    after = np.minimum.accumulate(after[::-1])[::-1]
    return (np.minimum(depth - before, after - depth) <= _REACH) | spread(layout, hot, _LEAST_REACH)


def window_core(layout: Layout, chosen: IntArray, runs: IntArray) -> BoolArray:
    """Return the intervals of windows far enough from held neighbours to be judged."""
    index = np.arange(len(chosen))
    starts = np.concatenate([[0], 1 + np.flatnonzero(np.diff(runs))])
    stops = np.append(starts[1:], len(chosen)) - 1
    at_start = (layout.local[chosen[starts]] == 0) & (not layout.periodic)
    at_stop = (layout.local[chosen[stops]] == layout.counts[layout.piece[chosen[stops]]] - 1) & (not layout.periodic)
    behind = np.where(at_start, len(layout), 0)[runs] + index - starts[runs]
    ahead = np.where(at_stop, len(layout), 0)[runs] + stops[runs] - index
    return np.minimum(behind, ahead) >= _MARGIN


def spread(layout: Layout, flags: BoolArray, reach: int) -> BoolArray:
    """Return flags spread to neighbours at most `reach` intervals away in the same piece."""
    return near(flags, layout.piece, reach, layout.periodic)
