"""Lines and arcs joined without a kink, fitted to points by least squares.

A chain starts at a point with a heading and runs through segments of a length and a curvature each, so that neighbours
share their tangent whatever the numbers are. Points and directions are complex numbers here; lengths are tolerances.
"""

from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray

__all__ = ["ComplexArray", "Ends", "Fitted", "TangentChain", "fit_chain"]

ComplexArray = np.ndarray[tuple[int, ...], np.dtype[np.complex128]]

_TRIES = 6
_CLOSE_AT_FIRST, _CLOSE_NEAR, _CLOSE_FASTER, _CLOSE_AT_LAST = 30.0, 1e3, 3.0, 1e4  # weight of the ends, in points
_HEADING = 10.0  # weight of the closing angle, radians against tolerances
_CLOSED = 3e-3
_SHORTEST = 0.05
_FLAT = 1e-9


@dataclass(frozen=True, slots=True)
class TangentChain:
    """Segments end to end.

    Attributes:
        start: first point.
        heading: direction of travel there, radians.
        lengths: of the segments, shape (k,).
        curvatures: left positive, shape (k,); 0 for lines.
        line: segments that are lines and stay so, shape (k,).
    """

    start: complex
    heading: float
    lengths: FloatArray
    curvatures: FloatArray
    line: BoolArray

    def __len__(self) -> int:
        return len(self.lengths)

    def joints(self) -> tuple[ComplexArray, FloatArray]:
        """Return the points where segments begin, and the last end, with the headings there, shapes (k + 1,)."""
        turns = self.curvatures * self.lengths
        heading = self.heading + np.concatenate([[0.0], np.cumsum(turns)])
        steps = np.exp(1j * heading[:-1]) * _chord(self.curvatures, self.lengths)
        return self.start + np.concatenate([[0.0], np.cumsum(steps)]), heading

    def offsets(self, points: ComplexArray, segment: IntArray) -> FloatArray:
        """Return the signed distances of points to the line or circle of their segment, right of travel positive."""
        joints, headings = self.joints()
        v = (points - joints[segment]) * np.exp(-1j * headings[segment])
        return _signed(v, self.curvatures[segment])[0]

    def feet(self, points: ComplexArray, segment: IntArray) -> FloatArray:
        """Return the arc length from the start to the foot of points on their segment, shape (n,)."""
        joints, headings = self.joints()
        before = np.concatenate([[0.0], np.cumsum(self.lengths)])
        return before[segment] + _foot(self, joints, headings, points, segment)


@dataclass(frozen=True, slots=True)
class Ends:
    """What holds a chain: it runs between two points, or it closes."""

    pins: tuple[complex, complex] | None = None

    @property
    def held(self) -> int:
        """Number of conditions."""
        return 3 if self.pins is None else 4

    def misses(self, joints: ComplexArray, headings: FloatArray) -> FloatArray:
        """Return by how much the conditions are missed, shape (held,)."""
        if self.pins is None:
            gap, turn = joints[-1] - joints[0], headings[-1] - headings[0]
            return np.array([gap.real, gap.imag, _HEADING * (turn - 2.0 * np.pi * np.round(turn / (2.0 * np.pi)))])
        first, last = joints[0] - self.pins[0], joints[-1] - self.pins[1]
        return np.array([first.real, first.imag, last.real, last.imag])

    def slopes(self, by_joint: ComplexArray, by_heading: FloatArray) -> FloatArray:
        """Return the derivatives of `misses` by the numbers of a chain, shape (held, 3 + 2 k)."""
        if self.pins is None:
            gap, turn = by_joint[-1] - by_joint[0], by_heading[-1] - by_heading[0]
            return np.array([gap.real, gap.imag, _HEADING * turn])
        return np.array([by_joint[0].real, by_joint[0].imag, by_joint[-1].real, by_joint[-1].imag])


@dataclass(frozen=True, slots=True)
class Fitted:
    """A chain fitted to points.

    Attributes:
        chain: the chain.
        segment: segment of every point, not decreasing, shape (n,).
        offsets: distance of every point, right of travel positive, shape (n,).
        miss: largest condition missed at the ends.
        spread: standard error of the curvatures for points that scatter by 1, to first order before the last step,
            infinite for lines, shape (k,).
    """

    chain: TangentChain
    segment: IntArray
    offsets: FloatArray
    miss: float
    spread: FloatArray

    @property
    def squares(self) -> float:
        """Sum of the squared offsets."""
        return float(self.offsets @ self.offsets)


@dataclass(frozen=True, slots=True)
class _State:
    chain: TangentChain
    segment: IntArray
    joints: ComplexArray
    headings: FloatArray
    local: ComplexArray
    offsets: FloatArray
    root: FloatArray
    misses: FloatArray

    def cost(self, hold: float) -> float:
        return float(self.offsets @ self.offsets + hold * (self.misses @ self.misses))


def fit_chain(
    chain: TangentChain, segment: IntArray, points: ComplexArray, ends: Ends, settled: float, rounds: int, near: bool
) -> Fitted | None:
    """Return the chain of as many segments that lies nearest to points in the sense of least squares.

    Levenberg-Marquardt steps (from memory) on start, heading, lengths and turns, with the exact derivatives of the
    signed distances; points change segment as joints slide. The conditions at the ends are held by a penalty that
    grows from round to round.

    Args:
        chain: where to begin.
        segment: segment of every point to begin with, not decreasing, shape (n,).
        points: in order of travel, shape (n,), tolerances.
        ends: conditions.
        settled: gain in the sum of squares below which the search ends.
        rounds: steps at most.
        near: whether the chain begins near the answer, its ends held.

    Returns:
        The best chain that the steps led to; None where the numbers of the chain depend on one another.
    """
    state = _state(chain, segment, points, ends)
    damping = 1e-3
    normal, free = np.zeros((0, 0)), np.zeros(0, dtype=np.intp)
    for turn in range(rounds):
        hold = min(_CLOSE_AT_LAST, (_CLOSE_NEAR if near else _CLOSE_AT_FIRST) * _CLOSE_FASTER**turn)
        cost = state.cost(hold)
        normal, right, held = _equations(state, ends)
        free = np.flatnonzero(np.concatenate([np.ones(3 + len(chain), dtype=np.bool_), ~chain.line]))
        normal, held = normal[np.ix_(free, free)], held[:, free]
        normal = normal + hold * (held.T @ held)
        right = -(right[free] + hold * (held.T @ state.misses))
        diagonal = np.diag(normal)
        gained = -1.0
        for _ in range(_TRIES):
            try:
                damped = normal + np.diag((damping + 1e-10) * diagonal + 1e-12)
                step = np.asarray(np.linalg.solve(damped, right), dtype=np.float64)
            except np.linalg.LinAlgError:
                damping *= 10.0
                continue
            trial = _state(_moved(state.chain, step, free), state.segment, points, ends)
            trial_cost = trial.cost(hold)
            if trial_cost <= cost * (1.0 + 1e-9):
                gained, state, damping = cost - trial_cost, trial, max(0.2 * damping, 1e-6)
                break
            damping *= 8.0
        if gained < 0.0 or (gained < settled and np.abs(state.misses).max(initial=0.0) < _CLOSED):
            break
    try:
        damped = normal + np.diag(1e-10 * np.diag(normal) + 1e-12)
        inverse = np.asarray(np.linalg.inv(damped), dtype=np.float64)
    except np.linalg.LinAlgError:
        return None
    miss = float(np.abs(state.misses).max(initial=0.0))
    return Fitted(state.chain, state.segment, state.offsets, miss, _spread(state.chain, inverse))


def _spread(chain: TangentChain, covariance: FloatArray) -> FloatArray:
    """Return the standard errors of the curvatures, turn over length, from the covariance of all free numbers."""
    count = len(chain)
    bent = np.flatnonzero(~chain.line)
    turn, length = 3 + count + np.arange(len(bent)), 3 + bent
    k, s = chain.curvatures[bent], chain.lengths[bent]
    square = covariance[turn, turn] - 2.0 * k * covariance[turn, length] + k * k * covariance[length, length]
    out = np.full(count, np.inf)
    out[bent] = np.sqrt(np.maximum(square, 0.0)) / s
    return out


def _moved(chain: TangentChain, step: FloatArray, free: IntArray) -> TangentChain:
    count = len(chain)
    whole = np.zeros(3 + 2 * count)
    whole[free] = step
    lengths = np.maximum(chain.lengths + whole[3 : 3 + count], _SHORTEST)
    return replace(
        chain,
        start=chain.start + complex(whole[0], whole[1]),
        heading=chain.heading + float(whole[2]),
        lengths=lengths,
        curvatures=(chain.curvatures * chain.lengths + whole[3 + count :]) / lengths,
    )


def _state(chain: TangentChain, segment: IntArray, points: ComplexArray, ends: Ends) -> _State:
    joints, headings = chain.joints()
    segment = _assigned(chain, joints, headings, points, segment)
    local = (points - joints[segment]) * np.exp(-1j * headings[segment])
    offsets, root = _signed(local, chain.curvatures[segment])
    return _State(chain, segment, joints, headings, local, offsets, root, ends.misses(joints, headings))


def _assigned(
    chain: TangentChain, joints: ComplexArray, headings: FloatArray, points: ComplexArray, segment: IntArray
) -> IntArray:
    """Return the segments of points whose foot lies beyond the end of theirs moved on, in order of travel."""
    for _ in range(3):
        foot = _foot(chain, joints, headings, points, segment)
        beyond = (foot > chain.lengths[segment]).astype(np.intp) - (foot < 0.0).astype(np.intp)
        moved = np.maximum.accumulate(np.clip(segment + beyond, 0, len(chain) - 1))
        if np.array_equal(moved, segment):
            break
        segment = moved
    return segment


def _foot(
    chain: TangentChain, joints: ComplexArray, headings: FloatArray, points: ComplexArray, segment: IntArray
) -> FloatArray:
    """Return the arc length from the start of a segment to the foot of points on its line or circle."""
    local = (points - joints[segment]) * np.exp(-1j * headings[segment])
    curvature = chain.curvatures[segment]
    flat = np.abs(curvature) < _FLAT
    bent = np.where(flat, 1.0, curvature)
    foot = np.angle(1.0 + 1j * curvature * local) / bent
    round_trip = 2.0 * np.pi / np.abs(bent)
    foot = foot - round_trip * np.round((foot - 0.5 * chain.lengths[segment]) / round_trip)
    return np.where(flat, local.real, foot)


def _signed(local: ComplexArray, curvature: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return signed distances to circles that leave the origin eastwards, and the root that their slopes share.

    With a = k |v|^2 - 2 Im v the distance is a / (1 + sqrt(1 + k a)): no radius appears, so lines are not special.
    """
    a = curvature * (local.real**2 + local.imag**2) - 2.0 * local.imag
    root = np.sqrt(np.maximum(1.0 + curvature * a, 1e-6))
    return a / (1.0 + root), root


def _chord(curvature: FloatArray, length: FloatArray) -> ComplexArray:
    """Return where arcs that leave the origin eastwards end: (exp(i k s) - 1) / (i k)."""
    turn = curvature * length
    small = np.abs(turn) < 1e-3
    series = length * (1.0 + 0.5j * turn - turn * turn / 6.0 - 1j * turn**3 / 24.0)
    return np.where(small, series, (np.exp(1j * turn) - 1.0) / (1j * np.where(small, 1.0, curvature)))


def _chord_slope(curvature: FloatArray, length: FloatArray) -> ComplexArray:
    """Return the derivative of `_chord` by the curvature."""
    turn = curvature * length
    small = np.abs(turn) < 1e-3
    series = length * length * (0.5j - turn / 3.0 - 1j * turn * turn / 8.0)
    bent = np.where(small, 1.0, curvature)
    return np.where(small, series, (length * np.exp(1j * turn) - _chord(curvature, length)) / bent)


def _equations(state: _State, ends: Ends) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the normal matrix of the offsets, their product with the offsets, and the derivatives of the misses.

    The numbers of a chain are start x, y, heading, lengths and turns, 3 + 2 k. An offset depends on them through the
    joint where its segment begins, the heading there, and the segment's own curvature only: sums over the points of a
    segment of products of these four derivatives are all that is needed of them.
    """
    chain, joints, headings = state.chain, state.joints, state.headings
    count = len(chain)
    direction = np.exp(1j * headings)
    later = np.tril(np.ones((count + 1, count)), -1)  # joint i depends on the segments before it
    arm = joints[:, None] - joints[None, 1:]
    # a turn bends the segment at a curvature of turn over length: lengthening one with its turn kept flattens it
    bend = direction[:-1] * _chord_slope(chain.curvatures, chain.lengths) / chain.lengths
    by_turn = (bend + 1j * arm) * later
    by_length = (direction[1:] - chain.curvatures * bend) * later
    shift = np.broadcast_to(np.array([1.0, 1.0j]), (count + 1, 2))
    by_joint = np.concatenate([shift, 1j * (joints - joints[0])[:, None], by_length, by_turn], axis=1)
    by_heading = np.concatenate([np.zeros((count + 1, 2)), np.ones((count + 1, 1)), 0.0 * later, later], axis=1)
    own = np.zeros((count, 3 + 2 * count))
    every = np.arange(count)
    own[every, 3 + count + every] = 1.0 / chain.lengths
    own[every, 3 + every] = -chain.curvatures / chain.lengths
    through = np.stack([by_joint.real[:-1], by_joint.imag[:-1], by_heading[:-1], own], axis=1)

    segment, v, root = state.segment, state.local, state.root
    back = np.exp(-1j * headings)[segment]
    bent = chain.curvatures[segment] * np.conj(v) * back
    square = v.real**2 + v.imag**2 - state.offsets**2
    slopes = np.stack([back.imag - bent.real, back.real + bent.imag, v.real, 0.5 * square]) / root
    sums = np.empty((count, 4, 4))
    for a in range(4):
        for b in range(a, 4):
            sums[:, a, b] = sums[:, b, a] = np.bincount(segment, slopes[a] * slopes[b], count)
    right = np.stack([np.bincount(segment, slopes[a] * state.offsets, count) for a in range(4)], axis=1)
    flat = through.reshape(4 * count, -1)
    normal = flat.T @ (sums @ through).reshape(4 * count, -1)
    return normal, right.reshape(-1) @ flat, ends.slopes(by_joint, by_heading)
