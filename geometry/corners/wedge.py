"""Local models of a corner, fitted to many places of an outline at once.

Two models, both in a frame of their own (lengths in the outline's scale):
- a wedge: a tip and two sides, each a parabola through the tip; optionally rounded by a fillet of given radius;
- a chain: two tips joined by a straight, with a parabola leaving each.
All fits are weighted Gauss-Newton on the offset of samples from the model, solved for all places in one batch.
"""

from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray

__all__ = [
    "Chain",
    "Samples",
    "Wedge",
    "fillet_radius",
    "fit_chain",
    "fit_wedge",
    "meeting_point",
    "moved_out",
    "residual_sum",
    "start_line",
    "wrap_angle",
]

_ANGLE_STEP, _CURVATURE_STEP, _CURVATURE_MOST = 0.4, 0.15, 0.4
_TIP = 0.7  # samples nearer than this to a tip weigh half: the trace rounds the tip


@dataclass(frozen=True, slots=True)
class Samples:
    """Samples about n places: `points` of shape (n, m, 2); `weight` of shape (n, m), 0 outside a place's window."""

    points: FloatArray
    weight: FloatArray

    def only(self, index: IntArray | BoolArray) -> "Samples":
        """Return the samples of some places."""
        return Samples(self.points[index], self.weight[index])


@dataclass(frozen=True, slots=True)
class Wedge:
    """n wedges: tip (n, 2); directions of travel a1 before and a2 after the tip, curvatures k1, k2, each (n,)."""

    tip: FloatArray
    a1: FloatArray
    k1: FloatArray
    a2: FloatArray
    k2: FloatArray

    @property
    def turn(self) -> FloatArray:
        """Turn at the tip, radians, left positive."""
        return wrap_angle(self.a2 - self.a1)

    def only(self, index: IntArray | BoolArray) -> "Wedge":
        """Return some of the wedges."""
        return Wedge(self.tip[index], self.a1[index], self.k1[index], self.a2[index], self.k2[index])


@dataclass(frozen=True, slots=True)
class Chain:
    """n chains: tips p1, p2 of shape (n, 2), outer directions a1, a2 and curvatures k1, k2 of shape (n,)."""

    p1: FloatArray
    p2: FloatArray
    a1: FloatArray
    k1: FloatArray
    a2: FloatArray
    k2: FloatArray

    @property
    def middle(self) -> FloatArray:
        """Direction of the straight between the tips, radians."""
        return np.arctan2(self.p2[:, 1] - self.p1[:, 1], self.p2[:, 0] - self.p1[:, 0])

    @property
    def turns(self) -> tuple[FloatArray, FloatArray]:
        """Turns at the two tips, radians, left positive."""
        return wrap_angle(self.middle - self.a1), wrap_angle(self.a2 - self.middle)

    @property
    def gap(self) -> FloatArray:
        """Distance between the tips."""
        return np.hypot(self.p2[:, 0] - self.p1[:, 0], self.p2[:, 1] - self.p1[:, 1])


def wrap_angle(angle: FloatArray) -> FloatArray:
    """Return angles brought into (-pi, pi]."""
    return np.pi - np.mod(np.pi - angle, 2.0 * np.pi)


def start_line(samples: Samples, offset: FloatArray, low: float, high: float) -> tuple[FloatArray, FloatArray]:
    """Fit a straight line to part of every window by total least squares.

    Args:
        samples: samples about n places.
        offset: signed arc length of every sample from its place, shape (n, m).
        low, high: range of the offset that is used; where no sample lies in it, all on that side of 0 are.

    Returns:
        A point of every line, shape (n, 2), and its direction of travel, radians, shape (n,).
    """
    use = samples.weight * ((offset >= low) & (offset <= high))
    beside = samples.weight * ((offset < 0.0) if high <= 0.0 else (offset > 0.0))
    use = np.where((use > 0.0).sum(axis=1, keepdims=True) > 1, use, beside)
    total = np.maximum(use.sum(axis=1), 1e-12)
    centre = np.matmul(use[:, None], samples.points)[:, 0] / total[:, None]
    x, y = samples.points[..., 0] - centre[:, :1], samples.points[..., 1] - centre[:, 1:]
    along = offset - (use * offset).sum(axis=1, keepdims=True) / total[:, None]
    xx, xy, yy = (use * x * x).sum(axis=1), (use * x * y).sum(axis=1), (use * y * y).sum(axis=1)
    angle = 0.5 * np.arctan2(2.0 * xy, xx - yy)
    drift = (use * along * (x * np.cos(angle)[:, None] + y * np.sin(angle)[:, None])).sum(axis=1)
    return centre, np.where(drift < 0.0, angle + np.pi, angle)


def meeting_point(
    before: tuple[FloatArray, FloatArray], after: tuple[FloatArray, FloatArray], otherwise: FloatArray
) -> FloatArray:
    """Return where lines (point, direction) meet, shape (n, 2); `otherwise` where they are nearly parallel."""
    (p, a1), (q, a2) = before, after
    sine = np.sin(a2 - a1)
    gap = q - p
    ahead = (gap[:, 0] * np.sin(a2) - gap[:, 1] * np.cos(a2)) / np.where(np.abs(sine) < 0.2, 1.0, sine)
    met = p + ahead[:, None] * np.stack([np.cos(a1), np.sin(a1)], axis=1)
    return np.where(np.abs(sine)[:, None] < 0.2, otherwise, met)


def fit_wedge(
    samples: Samples,
    start: Wedge,
    steps: int,
    *,
    radius: FloatArray | None = None,
    ridge: float = 60.0,
    halve: bool = True,
    tip_step: float = 1.5,
) -> Wedge:
    """Improve wedges by Gauss-Newton steps.

    Args:
        samples: samples about n places.
        start: n wedges.
        steps: number of steps.
        radius: fillet radius of every wedge, shape (n,); None for sharp ones.
        ridge: weight on the squares of the curvatures, which holds short sides straight.
        halve: whether samples near the tip weigh half.
        tip_step: largest move of the tip in one step.
    """
    wedge = start
    damping = np.array([1e-3, 1e-3, 1e-3, ridge, 1e-3, ridge])
    for _ in range(steps):
        e, rows = _wedge_rows(samples.points, wedge, radius)
        weight = samples.weight
        if halve:
            v = samples.points - wedge.tip[:, None]
            weight = weight * np.where(v[..., 0] ** 2 + v[..., 1] ** 2 < _TIP * _TIP, 0.5, 1.0)
        move = _solve(weight, e, rows, damping, np.stack([wedge.k1, wedge.k2], axis=1), ridge)
        wedge = Wedge(
            wedge.tip + _held(move[:, :2], tip_step),
            wedge.a1 + np.clip(move[:, 2], -_ANGLE_STEP, _ANGLE_STEP),
            _curvature(wedge.k1, move[:, 3]),
            wedge.a2 + np.clip(move[:, 4], -_ANGLE_STEP, _ANGLE_STEP),
            _curvature(wedge.k2, move[:, 5]),
        )
    return wedge


def fit_chain(samples: Samples, start: Chain, steps: int, ridge: float = 60.0, tip_step: float = 1.2) -> Chain:
    """Improve chains by Gauss-Newton steps; arguments as for `fit_wedge`."""
    chain = start
    damping = np.array([1e-3] * 4 + [1e-3, ridge, 1e-3, ridge])
    for _ in range(steps):
        e, rows = _chain_rows(samples.points, chain)
        move = _solve(samples.weight, e, rows, damping, np.stack([chain.k1, chain.k2], axis=1), ridge)
        chain = Chain(
            chain.p1 + _held(move[:, :2], tip_step),
            chain.p2 + _held(move[:, 2:4], tip_step),
            chain.a1 + np.clip(move[:, 4], -_ANGLE_STEP, _ANGLE_STEP),
            _curvature(chain.k1, move[:, 5]),
            chain.a2 + np.clip(move[:, 6], -_ANGLE_STEP, _ANGLE_STEP),
            _curvature(chain.k2, move[:, 7]),
        )
    return chain


def residual_sum(samples: Samples, model: Wedge | Chain, radius: FloatArray | None = None) -> FloatArray:
    """Return the weighted sum of squared offsets from every model, shape (n,)."""
    if isinstance(model, Chain):
        e, _ = _chain_rows(samples.points, model)
    else:
        e, _ = _wedge_rows(samples.points, model, radius)
    return (samples.weight * e * e).sum(axis=1)


def _curvature(value: FloatArray, move: FloatArray) -> FloatArray:
    stepped = value + np.clip(move, -_CURVATURE_STEP, _CURVATURE_STEP)
    return np.clip(stepped, -_CURVATURE_MOST, _CURVATURE_MOST)


def _held(move: FloatArray, most: float) -> FloatArray:
    size = np.hypot(move[:, 0], move[:, 1])
    return move * np.minimum(1.0, most / np.maximum(size, 1e-12))[:, None]


def _solve(
    weight: FloatArray, e: FloatArray, rows: FloatArray, damping: FloatArray, curvatures: FloatArray, ridge: float
) -> FloatArray:
    """Return the damped Gauss-Newton step; the two curvatures stand at columns -3 and -1 and carry the ridge."""
    weighted = rows * weight[..., None]
    normal = np.matmul(weighted.transpose(0, 2, 1), rows)
    index = np.arange(len(damping))
    normal[:, index, index] += damping
    right = -np.matmul(weighted.transpose(0, 2, 1), e[..., None])[..., 0]
    right[:, -3] -= ridge * curvatures[:, 0]
    right[:, -1] -= ridge * curvatures[:, 1]
    return np.linalg.solve(normal, right[..., None])[..., 0]


def _side(points: FloatArray, tip: FloatArray, angle: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return distance ahead and to the left of a tip for a direction of travel, each of shape (n, m)."""
    v = points - tip[:, None]
    c, s = np.cos(angle)[:, None], np.sin(angle)[:, None]
    return c * v[..., 0] + s * v[..., 1], c * v[..., 1] - s * v[..., 0]


def _wedge_rows(points: FloatArray, wedge: Wedge, radius: FloatArray | None) -> tuple[FloatArray, FloatArray]:
    """Return offsets (n, m) and their derivatives by (tip x, tip y, a1, k1, a2, k2), shape (n, m, 6)."""
    a_left, b_left = _side(points, wedge.tip, wedge.a1)
    a_right, b_right = _side(points, wedge.tip, wedge.a2)
    left = a_left + a_right < 0.0
    a, b = np.where(left, a_left, a_right), np.where(left, b_left, b_right)
    k = np.where(left, wedge.k1[:, None], wedge.k2[:, None])
    angle = np.where(left, wedge.a1[:, None], wedge.a2[:, None])
    c, s = np.cos(angle), np.sin(angle)
    e = b - 0.5 * k * a * a
    by_tip = np.stack([s + k * a * c, -c + k * a * s], axis=-1)  # -n + k a d with n = (-s, c)
    by_angle, by_curvature = -a - k * a * b, -0.5 * a * a
    by_turn = None
    if radius is not None:
        e, by_tip, by_angle, by_curvature, by_turn = _fillet(
            wedge.turn[:, None], radius[:, None], left, a, b, k, c, s, e, by_tip, by_angle, by_curvature
        )
    rows = np.zeros((*e.shape, 6))
    rows[..., :2] = by_tip
    rows[..., 2] = np.where(left, by_angle, 0.0)
    rows[..., 3] = np.where(left, by_curvature, 0.0)
    rows[..., 4] = np.where(left, 0.0, by_angle)
    rows[..., 5] = np.where(left, 0.0, by_curvature)
    if by_turn is not None:
        rows[..., 2] -= by_turn
        rows[..., 4] += by_turn
    return e, rows


def _fillet(
    turn: FloatArray,
    radius: FloatArray,
    left: BoolArray,
    a: FloatArray,
    b: FloatArray,
    k: FloatArray,
    c: FloatArray,
    s: FloatArray,
    e: FloatArray,
    by_tip: FloatArray,
    by_angle: FloatArray,
    by_curvature: FloatArray,
) -> tuple[FloatArray, ...]:
    """Replace the offsets nearer the tip than the fillet's tangent points by those from the fillet's circle."""
    sign = np.where(turn < 0.0, -1.0, 1.0)
    half = np.minimum(0.5 * np.abs(turn), 1.54)
    reach = radius * np.tan(half)
    by_reach = sign * radius / (2.0 * np.cos(half) ** 2)  # of the reach by the turn
    rounded = (np.abs(a) < reach) & (radius > 0.0)
    p = a + np.where(left, reach, -reach)
    q = e - sign * radius
    distance = np.maximum(np.hypot(p, q), 1e-9)
    fp, fq = -sign * p / distance, -sign * q / distance
    # derivatives of a: -d by the tip, b by the angle; those of e are the straight wedge's
    tip = fp[..., None] * np.stack([-c, -s], axis=-1) + fq[..., None] * by_tip
    return (
        np.where(rounded, sign * (radius - distance), e),
        np.where(rounded[..., None], tip, by_tip),
        np.where(rounded, fp * b + fq * by_angle, by_angle),
        np.where(rounded, fq * by_curvature, by_curvature),
        np.where(rounded, fp * np.where(left, by_reach, -by_reach), 0.0),
    )


def _chain_rows(points: FloatArray, chain: Chain) -> tuple[FloatArray, FloatArray]:
    """Return offsets (n, m) and their derivatives by (p1, p2, a1, k1, a2, k2), shape (n, m, 8)."""
    a_left, b_left = _side(points, chain.p1, chain.a1)
    a_right, b_right = _side(points, chain.p2, chain.a2)
    a_first, b_first = _side(points, chain.p1, chain.middle)
    a_second, _ = _side(points, chain.p2, chain.middle)
    before, after = a_left + a_first < 0.0, a_right + a_second > 0.0
    gap = np.maximum(chain.gap, 1e-9)[:, None]
    both = before & after  # a hook may claim a sample for both sides: the nearer tip has it
    nearer_first = np.abs(a_left) + np.abs(b_left) < np.abs(a_right) + np.abs(b_right)
    left, right = before & (~both | nearer_first), after & (~both | ~nearer_first)
    middle = ~left & ~right
    fraction = np.clip(a_first / gap, 0.0, 1.0)
    rows = np.zeros((*left.shape, 8))
    e = np.where(middle, b_first, 0.0)
    mc, ms = np.cos(chain.middle)[:, None], np.sin(chain.middle)[:, None]
    for column, share in ((0, 1.0 - fraction), (2, fraction)):
        rows[..., column] = np.where(middle, share * ms, 0.0)
        rows[..., column + 1] = np.where(middle, -share * mc, 0.0)
    sides = ((left, a_left, b_left, chain.a1, chain.k1, 0, 4), (right, a_right, b_right, chain.a2, chain.k2, 2, 6))
    for mask, a, b, angle, curvature, tip_column, column in sides:
        c, s, k = np.cos(angle)[:, None], np.sin(angle)[:, None], curvature[:, None]
        e = np.where(mask, b - 0.5 * k * a * a, e)
        rows[..., tip_column] = np.where(mask, s + k * a * c, rows[..., tip_column])
        rows[..., tip_column + 1] = np.where(mask, -c + k * a * s, rows[..., tip_column + 1])
        rows[..., column] = np.where(mask, -a - k * a * b, 0.0)
        rows[..., column + 1] = np.where(mask, -0.5 * a * a, 0.0)
    return e, rows


def fillet_radius(wedge: Wedge, wanted: FloatArray, side: FloatArray) -> FloatArray:
    """Return fillet radii, lessened where the tangent points would lie beyond 0.95 of the shorter side, shape (n,)."""
    half = np.minimum(0.5 * np.abs(wedge.turn), 1.54)
    return np.minimum(wanted, 0.95 * side / np.maximum(np.tan(half), 1e-9))


def moved_out(wedge: Wedge, radius: FloatArray) -> Wedge:
    """Return wedges made straight, their tips moved outwards to where a fillet of given radius would have its tip."""
    out = np.stack([np.cos(wedge.a1) - np.cos(wedge.a2), np.sin(wedge.a1) - np.sin(wedge.a2)], axis=1)
    out /= np.maximum(np.hypot(out[:, 0], out[:, 1]), 1e-9)[:, None]
    half = np.minimum(0.5 * np.abs(wedge.turn), 1.4)
    zero = np.zeros_like(wedge.k1)
    return replace(wedge, tip=wedge.tip + (0.6 * radius * (1.0 / np.cos(half) - 1.0))[:, None] * out, k1=zero, k2=zero)
