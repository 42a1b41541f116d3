"""Where arcs begin: how many a smooth piece asks for and where their joints first stand."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.economy.track import ComplexArray, Track

__all__ = ["Chain", "arc_demand", "start_chain"]

ARC_FACTOR = 0.2002  # least arcs per length are this times (|k'| / e)^(1/3)
PER_ARC = 24  # stations an arc
PER_PIECE = 400  # stations a piece at least
QUIET = 0.25  # share of an arc over which the range of curvature is taken


@dataclass(frozen=True, eq=False)
class Chain:
    """A chain of arcs along one smooth piece: an open one has n arcs and n + 1 joints, a closed one n and n.

    Attributes:
        piece: the smooth piece of the track.
        joint: joints, complex.
        angle: tangent angle at every joint, unwrapped, radians.
        s: arc length on the track that belongs to every joint, increasing.
        held: curvature that an arc is held at (0: a line), NaN where it is free, shape (n,).
        closed: whether the last arc ends at the first joint.
    """

    piece: int
    joint: ComplexArray
    angle: FloatArray
    s: FloatArray
    held: FloatArray
    closed: bool

    @property
    def count(self) -> int:
        """Number of arcs."""
        return len(self.held)

    @property
    def line(self) -> BoolArray:
        """Whether an arc is held straight, shape (n,)."""
        return self.held == 0.0


def arc_demand(track: Track, piece: int, chord_error: float) -> tuple[FloatArray, FloatArray]:
    """Return stations along a piece and the running number of arcs asked for up to each of them.

    The density is 0.2002 (R / (w e))^(1/3) with R the range of curvature over a window of width w, as wide as a
    quarter arc at the most: wiggles of curvature shorter than that ask for no arcs, and a jump of curvature asks for
    part of one.

    Args:
        track: the curve.
        piece: index of the smooth piece.
        chord_error: drawing units.
    """
    a, b = int(track.first[piece]), int(track.last[piece])
    s, bend = track.s[a : b + 1], track.curvature[a : b + 1]
    factor = ARC_FACTOR / np.cbrt(chord_error)
    length = s[-1] - s[0]
    steps = np.diff(s)
    crowd = (PER_ARC * factor * np.cbrt(np.abs(np.diff(bend)) / steps) + PER_PIECE / length) * steps
    running = np.concatenate([[0.0], np.cumsum(crowd)])
    stations = np.interp(np.linspace(0.0, running[-1], int(np.ceil(running[-1])) + 1), running, s)
    stations[-1] = s[-1]
    density = _windowed(stations, np.interp(stations, s, bend), factor, track.closed)
    area = 0.5 * (density[1:] + density[:-1]) * np.diff(stations)
    return stations, np.concatenate([[0.0], np.cumsum(area)])


def _windowed(s: FloatArray, bend: FloatArray, factor: float, closed: bool) -> FloatArray:
    n = len(s)
    if closed:  # one period on each side
        period = s[-1] - s[0]
        s = np.concatenate([s[:-1] - period, s, s[1:] + period])
        bend = np.concatenate([bend[:-1], bend, bend[1:]])
    size, reach = len(s), 1
    high, low = bend, bend  # over `reach` / 2 ... cells from every station on
    at = np.arange(size)
    density = np.zeros(size)
    high, low = _paired(high, low, 1)
    while True:
        back, ahead = np.maximum(at - reach, 0), np.minimum(at + reach, size - 1)
        spread = np.maximum(high[back], high) - np.minimum(low[back], low)
        width = s[ahead] - s[back]
        tried = factor * np.cbrt(spread / width)
        quiet = width * tried <= QUIET
        density = np.where(quiet | (reach == 1), tried, density)
        reach *= 2
        if not quiet.any() or reach >= size:
            break
        high, low = _paired(high, low, reach // 2)
    return density[n - 1 : 2 * n - 1] if closed else density


def _paired(high: FloatArray, low: FloatArray, shift: int) -> tuple[FloatArray, FloatArray]:
    """Return extremes over windows lengthened by `shift` cells."""
    return (
        np.maximum(high, np.concatenate([high[shift:], np.full(min(shift, len(high)), high[-1])])),
        np.minimum(low, np.concatenate([low[shift:], np.full(min(shift, len(low)), low[-1])])),
    )


def start_chain(track: Track, piece: int, demand: tuple[FloatArray, FloatArray], count: int, phase: float) -> Chain:
    """Return a chain of `count` arcs with its joints on the curve at equal shares of the demand."""
    stations, running = demand
    length = stations[-1] - stations[0]
    rising = running + 1e-6 * max(float(running[-1]), 1.0) * (stations - stations[0]) / length
    share = (np.arange(count) + phase) / count if track.closed else np.arange(count + 1) / count
    s = np.interp(share * rising[-1], rising, stations)
    if not track.closed:
        s[0], s[-1] = stations[0], stations[-1]
    joint, angle, _ = track.frames(s)
    return Chain(piece, joint, angle, s, np.full(count, np.nan), track.closed)
