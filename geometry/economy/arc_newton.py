"""Polish chains of arcs: equal errors, sliding joints, continuous tangents, by one banded Newton method.

Unknown at every joint are its tangent angle, a shift across and a slide along. Arc i from joint i to i + 1 with chord
c, chord angle chi and half turn a = (angle_{i+1} - angle_i) / 2 is tangent at both ends when
g = angle_i + angle_{i+1} - 2 chi = 0. The p-norm of the signed distances from samples of the curve to their arcs is
lowered under these constraints, p rising, all chains at once; each step is one banded linear system. An arc may be held
at a curvature K (0: a line) by one constraint more, 2 sin a - K |c| = 0.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dgbsv

from geometry.arrays import BoolArray, FloatArray
from geometry.economy.arc_batch import SLOTS, Batch, Shape, batch_of, bulges_of, shape_of
from geometry.economy.arc_start import Chain
from geometry.economy.check import two_sided
from geometry.economy.track import ComplexArray, Track

__all__ = ["Polished", "measure_chains", "polish"]

SAMPLES = 12
_EVEN = (np.arange(SAMPLES) + 0.5) / SAMPLES
SHARES = 0.5 * (_EVEN + 0.5 * (1.0 - np.cos(np.pi * _EVEN)))  # halfway between even and Chebyshev points
POWERS = (2, 2, 3, 3, 4, 4, 6, 6, 8, 8, 8, 8, 10, 10, 10, 12, 12, 12, 16, 16, 16, 16)
PINNED = 1e14
CHECKS = 24  # samples per arc and way in the final measure


@dataclass(frozen=True, eq=False)
class Polished:
    """A polished chain.

    Attributes:
        chain: the chain, tangent continuous.
        errors: largest distance of every arc to its stretch of curve, both ways, sampled; infinite when it failed.
        defect: largest |g|, or turn by which an arc is off the curvature it is held at, radians.
    """

    chain: Chain
    errors: FloatArray
    defect: float

    @property
    def worst(self) -> float:
        """Largest error of the chain."""
        return float(self.errors.max())


def _distances(batch: Batch, shape: Shape) -> tuple[FloatArray, ComplexArray, ComplexArray]:
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
    whole = batch = batch_of(track, chains)
    joint, angle, s = whole.joint.copy(), whole.angle.copy(), whole.s.copy()  # the best seen
    score = np.full(len(chains), np.inf)
    active, rows = np.arange(len(chains)), np.arange(len(whole.joint))
    goal = np.array(goals) * chord_error
    history = np.full((len(POWERS), len(chains)), np.inf)
    for step, power in enumerate(POWERS):
        shape = shape_of(batch)
        r, points, seen = _distances(batch, shape)
        off = np.abs(r).max(axis=1)
        worst = np.maximum.reduceat(off, batch.first_arc)
        kink = np.maximum(np.abs(shape.defect), np.abs(shape.astray))
        defect = np.maximum.reduceat(kink, batch.first_arc)
        # closing a kink up moves the middle of an arc by about kink length / 8; a curvature off what it is held at may
        # move a whole end by as much as the chord is to change
        lever = np.where(np.abs(batch.held) * shape.length > 0.1, 1.0, 0.125)
        closed = np.maximum.reduceat(off + lever * kink * shape.length, batch.first_arc)
        merit = np.where(np.isfinite(worst), closed / chord_error + 10.0 * defect, np.inf)
        better = merit < score[active]
        if better.any():
            score[active[better]] = merit[better]
            mine = better[batch.owner]
            joint[rows[mine]], angle[rows[mine]], s[rows[mine]] = batch.joint[mine], batch.angle[mine], batch.s[mine]
        history[step, active] = worst
        done = (closed < goal[active]) & (defect < 1e-3)
        if step >= 9:
            done |= (worst > 1.02 * np.minimum(goal[active], chord_error)) & (history[step - 3, active] < 1.01 * worst)
        if step >= 5:
            done |= (worst > 1.3 * goal[active]) & (history[step - 2, active] < 1.1 * worst)
        done |= ~np.isfinite(merit)
        if not done.all():
            done |= _advance(batch, shape, r, points, seen, worst, goal[active], power)
        if done.any():
            active, rows = active[~done], rows[~done[batch.owner]]
            if not len(active):
                break
            batch = batch.without(done)
    whole.joint, whole.angle, whole.s = joint, angle, s
    _close_up(whole)
    return _measured(whole, [whole.chain(k) for k in range(len(chains))], chord_error)


def _advance(
    batch: Batch,
    shape: Shape,
    r: FloatArray,
    points: ComplexArray,
    seen: ComplexArray,
    worst: FloatArray,
    goal: FloatArray,
    power: int,
) -> BoolArray:
    """Take one Newton step of the p-norm in place; return the chains that broke."""
    owner = batch.arc_owner
    level = np.maximum(worst, 1e-3 * goal)
    size = np.maximum(np.abs(r) / level[owner][:, None], 0.03)
    weight = size ** (power - 2) if power > 2 else np.ones_like(size)
    total = np.add.reduceat(weight.sum(axis=1), batch.first_arc)
    count = np.bincount(owner, minlength=len(worst)) * SAMPLES
    weight *= (count / total)[owner][:, None]
    jacobian = _jacobian(batch, shape, points, seen)
    weighted = (jacobian * weight[:, None, :]) @ np.concatenate([jacobian, r[:, None, :]], axis=1).transpose(0, 2, 1)
    gram, pull = weighted[:, :, :6], weighted[:, :, 6] * min(1.0, 2.0 / power)
    near = _shorter_chord(batch, shape)
    mean = float(np.trace(gram, axis1=1, axis2=2).mean()) + 1e-300
    slide = 0.3 * SAMPLES * (np.maximum(level, goal)[batch.owner] / (0.15 * near)) ** 2
    diagonal = np.empty((len(near), 3))
    diagonal[:, 0], diagonal[:, 1], diagonal[:, 2] = 1e-9 * mean * near**2, 1e-9 * mean, slide
    return _move(batch, _solve(batch, shape, gram, pull, diagonal), near)


def _jacobian(batch: Batch, shape: Shape, points: ComplexArray, seen: ComplexArray) -> FloatArray:
    """Return the derivatives of the distances by (angle, shift, slide) of both joints, shape (n, 6, SAMPLES)."""
    z = (points - batch.joint[batch.start][:, None]) / shape.chord[:, None]
    normal = 1j - shape.bend[:, None] * seen
    normal /= np.maximum(np.abs(normal), 1e-300)
    normal = np.conj(normal)
    by_1 = normal * z
    by_0 = (normal - by_1) * np.exp(1j * (shape.angle_0 - shape.chi + shape.half))[:, None]
    by_1 *= np.exp(1j * (shape.angle_1 - shape.chi + shape.half))[:, None]
    out = np.empty((len(z), 6, SAMPLES))
    out[:, 0] = 0.5 * np.abs(z * (1.0 - z)) * shape.length[:, None]
    out[:, 1], out[:, 2], out[:, 3] = -by_0.imag, by_0.real, -out[:, 0]
    out[:, 4], out[:, 5] = -by_1.imag, by_1.real
    return out


def _shorter_chord(batch: Batch, shape: Shape) -> FloatArray:
    near = np.full(len(batch.joint), np.inf)
    near[batch.start] = shape.length
    near[batch.end] = np.minimum(near[batch.end], shape.length)
    return near


def _solve(batch: Batch, shape: Shape, gram: FloatArray, pull: FloatArray, diagonal: FloatArray) -> FloatArray:
    """Return the step (angle, shift, slide) of every joint, shape (j, 3): the constrained minimum of the model."""
    n, size, w = len(shape.length), SLOTS * len(batch.joint), batch.width
    row = np.empty((n, 6))
    for column, angle, sign in ((0, shape.angle_0, 2.0), (3, shape.angle_1, -2.0)):
        lever = sign * np.exp(1j * angle) / shape.chord
        row[:, column], row[:, column + 1], row[:, column + 2] = 1.0, lever.real, lever.imag
    fixed = batch.fixed
    kept = _held_rows(batch, shape)
    faint = np.full(n + len(fixed), -1e-10)
    idle = np.ones(2 * (len(batch.joint) - n) + n - len(fixed))
    diagonal[batch.pinned, 1:] = PINNED
    parts = (gram, row, row, kept, kept, faint, idle, diagonal)
    value = np.concatenate([part.ravel() for part in parts])
    band = np.bincount(batch.band_places, weights=value, minlength=(3 * w + 1) * size)
    b = np.bincount(batch.sides.ravel(), weights=-pull.ravel(), minlength=size)
    tangent = batch.base[batch.start] + 3
    b[tangent] = -shape.defect
    b[tangent[fixed] + 1] = -shape.astray[fixed]
    _, _, x, info = dgbsv(w, w, band.reshape(size, 3 * w + 1).T, b, overwrite_ab=True, overwrite_b=True)
    if info != 0:
        return np.full((len(batch.joint), 3), np.nan)
    return np.asarray(x[batch.own])


def _held_rows(batch: Batch, shape: Shape) -> FloatArray:
    """Return the derivatives of 2 sin(a) - K |c| of the arcs held, by the unknowns of both joints, shape (h, 6)."""
    arcs = batch.fixed
    bend, cosine = batch.held[arcs], np.cos(shape.half[arcs])
    unit = np.conj(shape.chord[arcs]) / shape.length[arcs]
    out = np.empty((len(arcs), 6))
    for column, angle, sign in ((0, shape.angle_0, -1.0), (3, shape.angle_1, 1.0)):
        along = unit * np.exp(1j * angle[arcs])
        out[:, column], out[:, column + 1], out[:, column + 2] = cosine, bend * along.imag, -bend * along.real
        out[:, column : column + 3] *= sign
    return out


def _move(batch: Batch, x: FloatArray, near: FloatArray) -> BoolArray:
    """Move the joints in place by a step, scaled per chain so that no slide leaves its neighbourhood."""
    size = np.abs(x)
    use = np.maximum(np.maximum(size[:, 2], size[:, 1]) / (0.3 * near), size[:, 0] / 0.7)
    scale = 1.0 / np.maximum(np.maximum.reduceat(use, batch.first_joint), 1.0)
    x = x * scale[batch.owner][:, None]
    x[batch.pinned, 1:] = 0.0
    broken = ~np.isfinite(np.add.reduceat(x.sum(axis=1), batch.first_joint))
    if broken.any():
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
    return np.asarray(broken | (np.minimum.reduceat(advance, batch.first_arc) <= 0.0))


def _close_up(batch: Batch) -> None:
    """Make the tangents of chains exactly continuous, in place, by the smallest moves."""
    for _ in range(6):
        shape = shape_of(batch)
        off = np.maximum(np.abs(shape.defect), np.abs(shape.astray))
        if off.max() < 1e-13:
            break
        near = _shorter_chord(batch, shape)
        diagonal = np.stack([0.01 * near**2, np.ones_like(near), np.full_like(near, 0.01)], axis=1)
        n = len(shape.length)
        _move(batch, _solve(batch, shape, np.zeros((n, 6, 6)), np.zeros((n, 6)), diagonal), near)


@np.errstate(over="ignore", invalid="ignore")
def measure_chains(track: Track, chains: list[Chain], chord_error: float) -> list[Polished]:
    """Measure chains against the curve, both ways."""
    return _measured(batch_of(track, chains), chains, chord_error)


def _measured(batch: Batch, chains: list[Chain], chord_error: float) -> list[Polished]:
    track, owner = batch.track, batch.arc_owner
    shape = shape_of(batch)
    bulges = bulges_of(batch, shape)
    s = np.stack([batch.s[batch.start], batch.s[batch.end] + batch.wrap * track.period], axis=1)
    sound = np.isfinite(bulges) & (np.abs(shape.half) < 0.5 * np.pi + 0.3) & (s[:, 1] > s[:, 0])
    good = np.logical_and.reduceat(sound, batch.first_arc)
    errors = np.full(len(owner), np.inf)
    keep = good[owner]
    if keep.any():
        start, end = batch.joint[batch.start], batch.joint[batch.end]
        parts = (start[keep], end[keep], bulges[keep], s[keep], owner[keep])
        errors[keep] = two_sided(track, *parts, chord_error, CHECKS, peaks=True)
    defects = np.maximum.reduceat(np.maximum(np.abs(shape.defect), np.abs(shape.astray)), batch.first_arc)
    per_chain = np.split(errors, batch.first_arc[1:])
    return [Polished(*values) for values in zip(chains, per_chain, defects.tolist(), strict=True)]
