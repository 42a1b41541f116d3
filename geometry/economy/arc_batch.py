"""Chains of arcs laid end to end as flat arrays, their geometry, and where they stand in the banded system."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.arc_start import Chain
from geometry.economy.track import ComplexArray, Track

__all__ = ["SLOTS", "Batch", "Shape", "batch_of", "bulges_of", "chain_bulges", "shape_of"]

# places a joint has in the linear system: angle, shift, slide; and of the arc behind it the multipliers of its being
# tangent at both ends and of its keeping the curvature that it is held at
SLOTS = 5


@dataclass(eq=False)
class Batch:
    """Chains laid end to end as flat arrays: j joints, n arcs, c chains."""

    track: Track
    piece: IntArray  # piece of every chain
    joint: ComplexArray
    angle: FloatArray
    s: FloatArray
    held: FloatArray  # curvature of every arc that is held, else NaN
    owner: IntArray  # chain of every joint

    def __post_init__(self) -> None:
        n = len(self.owner)
        self.first_joint = np.searchsorted(self.owner, np.arange(len(self.piece)))
        self.pinned = np.zeros(n, dtype=np.bool_)
        if self.track.closed:  # one chain: fold it, so that neighbours stay near each other
            self.start, self.end = np.arange(n), np.append(np.arange(1, n), 0)
            half = (n + 1) // 2
            place = np.where(np.arange(n) < half, 2 * np.arange(n), 2 * (n - 1 - np.arange(n)) + 1)
            self.width = 14  # half band width of the linear system
        else:
            ends = np.append(self.first_joint[1:], n) - 1
            self.start = np.delete(np.arange(n), ends)
            self.end = self.start + 1
            self.pinned[ends] = self.pinned[self.first_joint] = True
            place, self.width = np.arange(n), 7
        self.base = SLOTS * place  # first place of every joint in the linear system
        self.wrap = (self.end < self.start).astype(np.float64)  # 1 where the arc runs through the seam
        self.arc_owner = self.owner[self.start]
        self.first_arc = np.searchsorted(self.arc_owner, np.arange(len(self.piece)))

    @cached_property
    def fixed(self) -> IntArray:
        """The arcs that are held."""
        return np.flatnonzero(~np.isnan(self.held))

    @cached_property
    def own(self) -> IntArray:
        """Places of the unknowns of every joint, shape (j, 3)."""
        return self.base[:, None] + np.arange(3)

    @cached_property
    def sides(self) -> IntArray:
        """Places of the unknowns of the joints at both ends of every arc, shape (n, 6)."""
        return np.concatenate([self.own[self.start], self.own[self.end]], axis=1)

    @cached_property
    def band_places(self) -> IntArray:
        """Places, in the band matrix by columns, of what the solver puts there, in its order."""
        tangent, bent, fixed = self.base[self.start] + 3, self.base[self.start] + 4, self.fixed
        behind = np.ones(len(self.base), dtype=np.bool_)
        behind[self.start] = False  # joints without an arc behind them have idle multipliers
        idle = np.concatenate([self.base[behind] + 3, self.base[behind] + 4, np.delete(bent, fixed)])
        bent, ends = bent[fixed], self.sides[fixed]
        rows = [np.repeat(self.sides, 6, axis=1), np.repeat(tangent, 6), self.sides, np.repeat(bent, 6), ends]
        columns = [np.tile(self.sides, (1, 6)), self.sides, np.repeat(tangent, 6), ends, np.repeat(bent, 6)]
        diagonal = [tangent, bent, idle, self.own]
        row = np.concatenate([part.ravel() for part in rows + diagonal])
        column = np.concatenate([part.ravel() for part in columns + diagonal])
        return np.asarray(2 * self.width + row - column + (3 * self.width + 1) * column)

    def without(self, gone: BoolArray) -> "Batch":
        """Return the batch without some chains."""
        keep, kept_arcs = ~gone[self.owner], ~gone[self.arc_owner]
        number = np.cumsum(~gone) - 1
        return Batch(
            self.track,
            self.piece[~gone],
            self.joint[keep],
            self.angle[keep],
            self.s[keep],
            self.held[kept_arcs],
            number[self.owner[keep]],
        )

    def chain(self, index: int) -> Chain:
        """Return one chain."""
        mine, arcs = self.owner == index, self.arc_owner == index
        closed = self.track.closed
        return Chain(int(self.piece[index]), self.joint[mine], self.angle[mine], self.s[mine], self.held[arcs], closed)


def batch_of(track: Track, chains: list[Chain]) -> Batch:
    """Return chains as flat arrays; an open track may have many, a closed one has one."""
    owner = np.repeat(np.arange(len(chains)), [len(chain.joint) for chain in chains])
    joint, angle, s = (np.concatenate([getattr(chain, name) for chain in chains]) for name in ("joint", "angle", "s"))
    held = np.concatenate([chain.held for chain in chains])
    return Batch(track, np.array([chain.piece for chain in chains], dtype=np.intp), joint, angle, s, held, owner)


@dataclass(frozen=True, eq=False)
class Shape:
    """Geometry of every arc of a batch: shapes (n,)."""

    chord: ComplexArray
    length: FloatArray
    chi: FloatArray
    half: FloatArray  # half the turn
    bend: FloatArray  # curvature
    defect: FloatArray  # g
    astray: FloatArray  # length times how far the curvature is off what it is held at, 0 where free
    angle_0: FloatArray
    angle_1: FloatArray


def shape_of(batch: Batch) -> Shape:
    """Return the geometry of every arc where the joints stand now."""
    angle_0 = batch.angle[batch.start]
    angle_1 = batch.angle[batch.end] + batch.wrap * batch.track.turn
    chord = batch.joint[batch.end] - batch.joint[batch.start]
    chord = np.where(chord == 0.0, 1e-150, chord)
    length = np.abs(chord)
    middle = 0.5 * (angle_0 + angle_1)
    turned = chord * np.exp(-1j * middle)
    off = np.arctan2(turned.imag, turned.real)
    half = 0.5 * (angle_1 - angle_0)
    rise = 2.0 * np.sin(half)
    astray = np.where(np.isnan(batch.held), 0.0, rise - batch.held * length)
    return Shape(chord, length, middle + off, half, rise / length, -2.0 * off, astray, angle_0, angle_1)


def bulges_of(batch: Batch, shape: Shape) -> FloatArray:
    """Return the bulge of every arc; what is held straight, or turns by no more than rounding does, has none."""
    flat = (batch.held == 0.0) | (np.abs(shape.half) < 1e-10)
    return np.where(flat, 0.0, np.tan(0.5 * shape.half))


def chain_bulges(track: Track, chain: Chain) -> tuple[ComplexArray, FloatArray]:
    """Return all joints of a chain in order with the last one, and the bulges."""
    batch = batch_of(track, [chain])
    joints = np.append(chain.joint, chain.joint[0]) if chain.closed else chain.joint
    return joints, bulges_of(batch, shape_of(batch))
