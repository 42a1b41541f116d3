"""Take out needless inflections: stiffen small lobes of curvature where the band and the size still hold.

A lobe is a run of curvature of one sign within a piece. Its height is how far it stands off its chord; a lobe whose
height is below half the tolerance is not supported by the evidence.
"""

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.layout import Layout
from geometry.fairing.samples import normal_offsets
from geometry.fairing.stiffness import BAND, MEAN_4, MEAN_8, Fit, concerned, local_means, spread, window_core, worst_of
from geometry.fairing.system import System
from geometry.fairing.trace import ragged_ranges

__all__ = ["remove_lobes"]

_FLAT = 0.001  # curvature that is not counted, per tolerance
_HEIGHT = 0.5
_STIFFER, _STIFFEST = 1.5, 60.0
_STRAIGHT, _STRAIGHTER = 0.25, 1.4  # share of a lobe's length to begin with, and growth from round to round
_ROUNDS = 12


def remove_lobes(fit: Fit, pins: FloatArray | None) -> Fit:
    """Return the fit with small lobes of curvature flattened; a 3-D one, whose curvature has no sign, as it is.

    Lobes are stiffened first, with a margin on either side; those that this leaves are then drawn straight.
    """
    if fit.sampled.points.shape[-1] != 2:
        return fit
    work = _Flattening(fit, pins)
    allowed = np.maximum(work.excess + 1e-9, 1.0)
    best = fit
    for straighten in (False, True):
        frozen = np.zeros(len(work.layout), dtype=np.bool_)
        for _ in range(_ROUNDS):
            chosen = work.straighten(frozen) if straighten else work.stiffen(frozen)
            if not chosen.any():
                break
            work.solve(chosen)
            for reach, factor in ((7, 1.0), (16, 1.02), (64, 1.02)):  # give back what breaks a limit, wider each time
                broken = work.excess > factor * allowed
                if not broken.any():
                    break
                back = spread(work.layout, broken, reach)
                if straighten:
                    work.straightness = np.where(back, fit.straightness, work.straightness)
                else:
                    work.stiffness = np.where(back, fit.stiffness, work.stiffness)
                frozen |= back
                work.solve(back)
        if (work.excess > 1.02 * allowed).any():
            break
        best = Fit(fit.sampled, work.coefficients, work.stiffness, work.straightness)
    return best


class _Flattening:
    """A fit whose stiffness changes here and there; only what a change can reach is solved and judged again."""

    def __init__(self, fit: Fit, pins: FloatArray | None) -> None:
        self.sampled, self.layout, self.pins = fit.sampled, fit.sampled.layout, pins
        self.system = System(self.layout, self.sampled.points, self.sampled.live, pins)
        self.coefficients, self.stiffness, self.straightness = fit.coefficients, fit.stiffness, fit.straightness
        every = np.arange(len(self.layout))
        self.excess = self._judged(None, self.layout.piece, self.layout.periodic)
        self.curvature, self.points = self._bends(every)

    def stiffen(self, frozen: BoolArray) -> BoolArray:
        """Raise the stiffness of small lobes and of a margin beside them; return where."""
        start, stop = _small_lobes(self.layout, self.curvature, self.points)
        margin = np.maximum(2, (0.7 * (stop - start)).astype(np.intp))
        chosen = _covered(self.layout, start - margin, stop + margin) & ~frozen & (self.stiffness < _STIFFEST)
        self.stiffness = np.where(chosen, np.minimum(_STIFFER * self.stiffness, _STIFFEST), self.stiffness)
        return chosen

    def straighten(self, frozen: BoolArray) -> BoolArray:
        """Raise the straightness of small lobes; return where."""
        start, stop = _small_lobes(self.layout, self.curvature, self.points)
        length = np.zeros(len(self.layout))
        owner, member, _ = ragged_ranges(start, stop)
        member = np.mod(member, len(self.layout))
        length[member] = np.maximum(1.0, _STRAIGHT * (stop - start)[owner] * self.layout.h[member])
        chosen = (length > 0.0) & ~frozen
        self.straightness = np.where(chosen, np.maximum(_STRAIGHTER * self.straightness, length), self.straightness)
        return chosen

    def solve(self, changed: BoolArray) -> None:
        """Solve again after a change, in windows about it where the profile is long."""
        layout, sampled = self.layout, self.sampled
        chosen = concerned(layout, self.stiffness, changed)
        if chosen is None:
            self.coefficients = self.system.solve(self.stiffness, None, self.straightness)
            self.excess = self._judged(None, layout.piece, layout.periodic)
            self.curvature, self.points = self._bends(np.arange(len(layout)))
            return
        window = System(layout, sampled.points, sampled.live, self.pins, chosen)
        self.coefficients = window.solve(self.stiffness, self.coefficients, self.straightness)
        core = window_core(layout, window.chosen, window.runs)
        self.excess[window.chosen[core]] = self._judged(window.chosen, window.runs, False)[core]
        self.curvature[window.chosen], self.points[window.chosen] = self._bends(window.chosen)

    def _judged(self, chosen: IntArray | None, runs: IntArray, wrap: bool) -> FloatArray:
        """Return the largest of the offsets and local means over their limits, for every interval chosen."""
        offsets = normal_offsets(self.sampled, self.coefficients, chosen)
        live = self.sampled.live if chosen is None else self.sampled.live[chosen]
        return np.maximum.reduce(
            [
                worst_of(offsets) / BAND,
                local_means(runs, wrap, offsets, live, 4.0) / MEAN_4,
                local_means(runs, wrap, offsets, live, 8.0) / MEAN_8,
            ]
        )

    def _bends(self, chosen: IntArray) -> tuple[FloatArray, FloatArray]:
        """Return curvature and points at the middle of intervals."""
        t = np.array(0.5)
        points, first, second = (self.layout.evaluate(self.coefficients, chosen, t, k) for k in range(3))
        speed = np.maximum(np.hypot(first[:, 0], first[:, 1]), 1e-9)
        return (first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]) / speed**3, points


def _small_lobes(layout: Layout, curvature: FloatArray, points: FloatArray) -> tuple[IntArray, IntArray]:
    """Return [start, stop) of the small lobes that have a neighbour lobe in their piece, in intervals.

    On a loop they may begin or end beyond the last interval.
    """
    curvature = curvature.copy()
    curvature[np.abs(curvature) < _FLAT] = 0.0
    shift = _change_of_sign(curvature) if layout.periodic else 0  # a lobe through the seam is one lobe
    curvature, points = np.roll(curvature, -shift), np.roll(points, -shift, axis=0)
    start, stop = _runs(layout, np.sign(curvature))
    chord = points[stop - 1] - points[start]
    chord = chord / np.maximum(np.hypot(chord[:, 0], chord[:, 1]), 1e-9)[:, None]
    lobe = np.repeat(np.arange(len(start)), stop - start)
    off = points - points[start][lobe]
    height = np.maximum.reduceat(np.abs(chord[lobe, 0] * off[:, 1] - chord[lobe, 1] * off[:, 0]), start)
    pieces = layout.piece[start]
    if layout.periodic:
        neighbour = np.full(len(start), len(start) > 1)
    else:
        same = pieces[1:] == pieces[:-1]
        neighbour = np.concatenate([same, [False]]) | np.concatenate([[False], same])
    small = neighbour & (height < _HEIGHT)
    return start[small] + shift, stop[small] + shift


def _change_of_sign(curvature: FloatArray) -> int:
    """Return an interval of a loop where curvature begins that has another sign than the one before, 0 for none."""
    bent = np.flatnonzero(curvature)
    signs = np.sign(curvature[bent])
    changed = np.flatnonzero(signs != np.roll(signs, 1))
    return int(bent[changed[0]]) if len(changed) else 0


def _covered(layout: Layout, start: IntArray, stop: IntArray) -> BoolArray:
    """Return the intervals in ranges [start, stop), cut at the ends of the piece that the middle of a range lies in."""
    size = len(layout)
    change = np.zeros(3 * size + 1)
    if layout.periodic:
        np.add.at(change, np.maximum(start, -size) + size, 1.0)
        np.add.at(change, np.minimum(stop, 2 * size) + size, -1.0)
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
