"""Polish chains of arcs: equal errors, sliding joints, continuous tangents, by one banded Newton method.

Unknown at every joint are its tangent angle, a shift across and a slide along. Arc i from joint i to i + 1 with chord
c, chord angle chi and half turn a = (angle_{i+1} - angle_i) / 2 is tangent at both ends when
g = angle_i + angle_{i+1} - 2 chi = 0. The p-norm of the signed distances from samples of the curve to their arcs is
lowered under these constraints, p rising, all chains at once; each step is one banded linear system.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dgbsv

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.arc_start import Chain
from geometry.economy.check import two_sided
from geometry.economy.track import ComplexArray, Track

__all__ = ["Polished", "chain_bulges", "measure_chains", "polish"]

SAMPLES = 12
_EVEN = (np.arange(SAMPLES) + 0.5) / SAMPLES
SHARES = 0.5 * (_EVEN + 0.5 * (1.0 - np.cos(np.pi * _EVEN)))  # halfway between even and Chebyshev points
POWERS = (2, 2, 3, 3, 4, 4, 6, 6, 8, 8, 8, 8, 10, 10, 10, 12, 12, 12, 16, 16, 16, 16)
SLOTS = 5  # per joint: angle, shift, slide, multiplier of the arc behind it, multiplier of its being a line
PINNED = 1e14
CHECKS = 24  # samples per arc and way in the final measure
LARGE = np.inf


@dataclass(frozen=True, eq=False)
class Polished:
    """A polished chain.

    Attributes:
        chain: the chain, tangent continuous.
        errors: largest distance of every arc to its stretch of curve, both ways, sampled; infinite when it failed.
        defect: largest |g|, radians.
    """

    chain: Chain
    errors: FloatArray
    defect: float

    @property
    def worst(self) -> float:
        """Largest error of the chain."""
        return float(self.errors.max())


@dataclass(eq=False)
class _Batch:
    """Chains laid end to end as flat arrays: j joints, n arcs, c chains."""

    track: Track
    piece: IntArray  # piece of every chain
    joint: ComplexArray
    angle: FloatArray
    s: FloatArray
    line: BoolArray
    owner: IntArray  # chain of every joint
    start: IntArray  # joint at the start of every arc
    end: IntArray  # joint at its end
    wrap: FloatArray  # 1 where the arc runs through the seam of a closed chain
    pinned: BoolArray
    place: IntArray  # place of every joint in the linear system
    width: int  # half band width of that system

    @property
    def arc_owner(self) -> IntArray:
        return self.owner[self.start]


def _batch(track: Track, chains: list[Chain]) -> _Batch:
    sizes = np.array([len(chain.joint) for chain in chains])
    owner = np.repeat(np.arange(len(chains)), sizes)
    n = len(owner)
    pinned = np.zeros(n, dtype=np.bool_)
    if track.closed:  # one chain: fold it, so that neighbours stay near each other
        start, end = np.arange(n), np.append(np.arange(1, n), 0)
        wrap = (end == 0).astype(np.float64)
        half = (n + 1) // 2
        place = np.where(np.arange(n) < half, 2 * np.arange(n), 2 * (n - 1 - np.arange(n)) + 1)
        width = 14
    else:
        ends = np.cumsum(sizes) - 1
        start = np.delete(np.arange(n), ends)
        end, wrap = start + 1, np.zeros(len(start))
        pinned[ends] = pinned[ends - sizes + 1] = True
        place, width = np.arange(n), 7
    joint, angle, s = (np.concatenate([getattr(chain, name) for chain in chains]) for name in ("joint", "angle", "s"))
    line = np.concatenate([chain.line for chain in chains])
    piece = np.array([chain.piece for chain in chains], dtype=np.intp)
    return _Batch(track, piece, joint, angle, s, line, owner, start, end, wrap, pinned, place, width)


@dataclass(frozen=True, eq=False)
class _Shape:
    """Geometry of every arc of a batch: shapes (n,)."""

    chord: ComplexArray
    length: FloatArray
    chi: FloatArray
    half: FloatArray  # half the turn
    bend: FloatArray  # curvature
    defect: FloatArray  # g
    angle_0: FloatArray
    angle_1: FloatArray


def _shape(batch: _Batch) -> _Shape:
    angle_0 = batch.angle[batch.start]
    angle_1 = batch.angle[batch.end] + batch.wrap * batch.track.turn
    chord = batch.joint[batch.end] - batch.joint[batch.start]
    chord = np.where(chord == 0.0, 1e-150, chord)
    length = np.abs(chord)
    middle = 0.5 * (angle_0 + angle_1)
    turned = chord * np.exp(-1j * middle)
    off = np.arctan2(turned.imag, turned.real)
    half = 0.5 * (angle_1 - angle_0)
    return _Shape(chord, length, middle + off, half, 2.0 * np.sin(half) / length, -2.0 * off, angle_0, angle_1)


def _distances(batch: _Batch, shape: _Shape) -> tuple[FloatArray, ComplexArray, ComplexArray]:
    """Return the signed distances of the samples (+ when the arc is on their left), the samples, and them seen
    from the start of their arc along its start tangent; shapes (n, SAMPLES)."""
    s_0 = batch.s[batch.start]
    s_1 = batch.s[batch.end] + batch.wrap * batch.track.period
    points = batch.track.points(s_0[:, None] + (s_1 - s_0)[:, None] * SHARES)
    seen = (points - batch.joint[batch.start][:, None]) * np.exp(-1j * (shape.chi - shape.half))[:, None]
    bend = shape.bend[:, None]
    a = bend * (seen.real**2 + seen.imag**2) - 2.0 * seen.imag
    return a / (1.0 + np.sqrt(np.maximum(1.0 + bend * a, 0.0))), points, seen


@np.errstate(over="ignore", invalid="ignore")  # a chain that runs away is dropped
def polish(track: Track, chord_error: float, chains: list[Chain], goals: list[float]) -> list[Polished]:
    """Lower the largest error of chains, make their tangents continuous and measure them.

    Args:
        track: the curve.
        chord_error: drawing units.
        chains: starting chains in order of their pieces; an open track may have many, a closed track has one.
        goals: a chain is left as soon as its error is this share of the chord error, shape (c,).
    """
    best: list[Chain] = list(chains)
    score = np.full(len(chains), np.inf)
    active = np.arange(len(chains))
    batch = _batch(track, chains)
    goal = np.array(goals) * chord_error
    history = np.full((len(POWERS), len(chains)), np.inf)
    for step, power in enumerate(POWERS):
        shape = _shape(batch)
        r, points, seen = _distances(batch, shape)
        owner = batch.arc_owner
        first = np.searchsorted(owner, np.arange(len(active)))
        worst = np.maximum.reduceat(np.abs(r).max(axis=1), first)
        defect = np.maximum.reduceat(np.abs(shape.defect), first)
        merit = np.where(np.isfinite(worst), worst / chord_error + 10.0 * defect, np.inf)
        for index in np.flatnonzero(merit < score[active]).tolist():
            score[active[index]] = merit[index]
            best[active[index]] = _chain(batch, index)
        history[step, active] = worst
        done = (worst < goal[active]) & (defect < 1e-3)
        if step >= 9:
            done |= (worst > 1.02 * np.minimum(goal[active], chord_error)) & (history[step - 3, active] < 1.01 * worst)
        broken = _advance(batch, shape, r, points, seen, worst, goal[active], power)
        done |= broken | ~np.isfinite(merit)
        if done.any():
            active = active[~done]
            if not len(active):
                break
            batch = _batch(track, [_chain(batch, k) for k in np.flatnonzero(~done).tolist()])
    return measure_chains(track, _closed_up(track, best), chord_error)


def _chain(batch: _Batch, index: int) -> Chain:
    mine = batch.owner == index
    arcs = batch.arc_owner == index
    return Chain(
        int(batch.piece[index]),
        batch.joint[mine],
        batch.angle[mine],
        batch.s[mine],
        batch.line[arcs],
        batch.track.closed,
    )


def _advance(
    batch: _Batch,
    shape: _Shape,
    r: FloatArray,
    points: ComplexArray,
    seen: ComplexArray,
    worst: FloatArray,
    goal: FloatArray,
    power: int,
) -> BoolArray:
    """Take one Newton step of the p-norm in place; return the chains that broke."""
    owner = batch.arc_owner
    chains = len(worst)
    level = np.maximum(worst, 1e-3 * goal)
    size = np.maximum(np.abs(r) / level[owner][:, None], 0.03)
    weight = size ** (power - 2) if power > 2 else np.ones_like(size)
    total = np.bincount(owner, weights=weight.sum(axis=1), minlength=chains)
    count = np.bincount(owner, minlength=chains) * SAMPLES
    weight *= (count / total)[owner][:, None]
    jacobian = _jacobian(batch, shape, points, seen)
    weighted = jacobian * weight[..., None]
    block = np.zeros((len(owner), 8, 8))
    inner = np.array([0, 1, 2, 5, 6, 7])
    gram = np.matmul(weighted.transpose(0, 2, 1), jacobian)
    block[:, inner[:, None], inner] = gram
    pull = np.matmul(weighted.transpose(0, 2, 1), r[..., None])[..., 0] * min(1.0, 2.0 / power)
    near = _shorter_chord(batch, shape)
    mean = float(np.trace(gram, axis1=1, axis2=2).mean()) + 1e-300
    slide = 0.3 * SAMPLES * (np.maximum(level, goal)[batch.owner] / (0.15 * near)) ** 2
    diagonal = np.stack([1e-9 * mean * near**2, np.full(len(near), 1e-9 * mean), slide], axis=1)
    x = _solve(batch, shape, block, pull, diagonal)
    return _move(batch, x, near)


def _jacobian(batch: _Batch, shape: _Shape, points: ComplexArray, seen: ComplexArray) -> FloatArray:
    """Return the derivatives of the distances by (angle, shift, slide) of both joints, shape (n, SAMPLES, 6)."""
    z = (points - batch.joint[batch.start][:, None]) / shape.chord[:, None]
    normal = 1j - shape.bend[:, None] * seen
    normal *= (np.exp(1j * (shape.chi - shape.half)))[:, None] / np.maximum(np.abs(normal), 1e-300)
    normal = np.conj(normal)
    by_0 = normal * (1.0 - z) * np.exp(1j * shape.angle_0)[:, None]
    by_1 = normal * z * np.exp(1j * shape.angle_1)[:, None]
    lever = 0.5 * np.abs(z) * np.abs(1.0 - z) * shape.length[:, None]
    return np.stack([lever, -by_0.imag, by_0.real, -lever, -by_1.imag, by_1.real], axis=-1)


def _shorter_chord(batch: _Batch, shape: _Shape) -> FloatArray:
    near = np.full(len(batch.joint), np.inf)
    np.minimum.at(near, batch.start, shape.length)
    np.minimum.at(near, batch.end, shape.length)
    return near


def _solve(batch: _Batch, shape: _Shape, block: FloatArray, pull: FloatArray, diagonal: FloatArray) -> FloatArray:
    """Return the step (angle, shift, slide) of every joint, shape (j, 3): the constrained minimum of the model."""
    n, joints = len(shape.length), len(batch.joint)
    size = SLOTS * joints
    row = np.empty((n, 6))
    for column, angle, sign in ((0, shape.angle_0, 2.0), (3, shape.angle_1, -2.0)):
        lever = sign * np.exp(1j * angle) / shape.chord
        row[:, column], row[:, column + 1], row[:, column + 2] = 1.0, lever.real, lever.imag
    held = np.where(batch.line, 1.0, 0.0)
    inner = np.array([0, 1, 2, 5, 6, 7])
    block[:, 3, inner] = block[:, inner, 3] = row
    block[:, 4, 0] = block[:, 0, 4] = -held
    block[:, 4, 5] = block[:, 5, 4] = held
    block[:, 3, 3] = -1e-10
    block[:, 4, 4] = np.where(batch.line, -1e-10, 1.0)
    base = SLOTS * batch.place
    index = np.concatenate([base[batch.start][:, None] + np.arange(5), base[batch.end][:, None] + np.arange(3)], axis=1)
    free = diagonal.copy()
    free[batch.pinned, 1:] = PINNED
    own = (base[:, None] + np.arange(3)).ravel()
    idle = np.setdiff1d(base, base[batch.start])  # joints without an arc behind them have idle multipliers
    idle = np.concatenate([idle + 3, idle + 4])
    w = batch.width
    place = (w + w + index[:, :, None] - index[:, None, :]) * size + index[:, None, :]
    flat = np.concatenate([place.ravel(), 2 * w * size + own, 2 * w * size + idle])
    value = np.concatenate([block.ravel(), free.ravel(), np.ones(len(idle))])
    band = np.bincount(flat, weights=value, minlength=(3 * w + 1) * size).reshape(3 * w + 1, size)
    right = np.zeros((n, 8))
    right[:, inner] = -pull
    right[:, 3] = -shape.defect
    right[:, 4] = np.where(batch.line, -2.0 * shape.half, 0.0)
    b = np.bincount(index.ravel(), weights=right.ravel(), minlength=size)
    _, _, x, info = dgbsv(w, w, band, b, overwrite_ab=True, overwrite_b=True)
    if info != 0:
        return np.full((joints, 3), np.nan)
    return np.asarray(x[own].reshape(joints, 3))


def _move(batch: _Batch, x: FloatArray, near: FloatArray) -> BoolArray:
    """Move the joints in place by a step, scaled per chain so that no slide leaves its neighbourhood."""
    chains = int(batch.owner[-1]) + 1
    starts = np.searchsorted(batch.owner, np.arange(chains))
    with np.errstate(invalid="ignore"):
        use = np.maximum(np.maximum(np.abs(x[:, 2]), np.abs(x[:, 1])) / (0.3 * near), np.abs(x[:, 0]) / 0.7)
    scale = 1.0 / np.maximum(np.maximum.reduceat(use, starts), 1.0)
    x = x * scale[batch.owner][:, None]
    x[batch.pinned, 1:] = 0.0
    broken = ~np.isfinite(np.add.reduceat(x.sum(axis=1), starts))
    x[broken[batch.owner]] = 0.0
    batch.joint = batch.joint + (1j * x[:, 1] + x[:, 2]) * np.exp(1j * batch.angle)
    batch.angle = batch.angle + x[:, 0]
    centre, slope, bend = batch.track.motion(batch.s)
    q, squared = batch.joint - centre, slope.real**2 + slope.imag**2
    down = squared - q.real * bend.real - q.imag * bend.imag
    ahead = q.real * slope.real + q.imag * slope.imag
    foot = batch.s + ahead / np.maximum(down, 0.2 * squared + 1e-30)
    batch.s = np.where(batch.pinned, batch.s, foot)
    advance = batch.s[batch.end] + batch.wrap * batch.track.period - batch.s[batch.start]
    stuck = np.minimum.reduceat(advance, np.searchsorted(batch.arc_owner, np.arange(chains))) <= 0.0
    return np.asarray(broken | stuck)


def _closed_up(track: Track, chains: list[Chain]) -> list[Chain]:
    """Make the tangents of chains exactly continuous by the smallest moves."""
    batch = _batch(track, chains)
    for _ in range(6):
        shape = _shape(batch)
        off = np.maximum(np.abs(shape.defect), np.where(batch.line, np.abs(shape.half), 0.0))
        if off.max() < 1e-13:
            break
        near = _shorter_chord(batch, shape)
        block = np.zeros((len(shape.length), 8, 8))
        diagonal = np.stack([0.01 * near**2, np.ones_like(near), np.full_like(near, 0.01)], axis=1)
        _move(batch, _solve(batch, shape, block, np.zeros((len(shape.length), 6)), diagonal), near)
    return [_chain(batch, k) for k in range(len(chains))]


def chain_bulges(track: Track, chain: Chain) -> tuple[ComplexArray, FloatArray, FloatArray]:
    """Return all joints in order with the last one, the bulges, and |g| of every arc."""
    shape = _shape(_batch(track, [chain]))
    bulges = np.where(chain.line, 0.0, np.tan(0.5 * shape.half))
    joints = np.append(chain.joint, chain.joint[0]) if chain.closed else chain.joint
    return joints, bulges, np.abs(shape.defect)


@np.errstate(over="ignore", invalid="ignore")
def measure_chains(track: Track, chains: list[Chain], chord_error: float) -> list[Polished]:
    """Measure chains against the curve, both ways."""
    batch = _batch(track, chains)
    shape = _shape(batch)
    bulges = np.where(batch.line, 0.0, np.tan(0.5 * shape.half))
    s = np.stack([batch.s[batch.start], batch.s[batch.end] + batch.wrap * track.period], axis=1)
    owner = batch.arc_owner
    sound = np.isfinite(bulges) & (np.abs(shape.half) < 0.5 * np.pi + 0.3) & (s[:, 1] > s[:, 0])
    good = np.bincount(owner, weights=~sound, minlength=len(chains)) == 0.0
    errors = np.full(len(owner), LARGE)
    keep = good[owner]
    if keep.any():
        start, end = batch.joint[batch.start], batch.joint[batch.end]
        errors[keep] = two_sided(track, start[keep], end[keep], bulges[keep], s[keep], owner[keep], chord_error, CHECKS)
    out = []
    for k, chain in enumerate(chains):
        mine = owner == k
        out.append(Polished(chain, errors[mine], float(np.abs(shape.defect[mine]).max())))
    return out
