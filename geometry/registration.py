"""Registration: the rigid move that lays one set of curves onto another, unmoved by a region that has changed.

The new curves are sampled evenly. From many starting turns (and from where they lie) the samples are drawn onto the
nearest places of the old curves, first roughly, then the best few to the end: iterated closest points with residuals
across the old curve, weighted by Geman and McClure's function, whose scale follows the median residual down. What has
changed lies farther off than that and loses all weight, so that unchanged curves end where rounding ends. Nothing here
is a proven optimum.

Sources: P. J. Besl, N. D. McKay, "A method for registration of 3-D shapes", IEEE Transactions on Pattern Analysis and
Machine Intelligence 14 (1992); Y. Chen, G. Medioni, "Object modelling by registration of multiple range images", Image
and Vision Computing 10 (1992), for residuals across the surface; S. Geman, D. E. McClure, "Statistical methods for
tomographic image reconstruction", Bulletin of the International Statistical Institute 52 (1987), for the weights (all
from memory).
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.curve import Curve
from geometry.errors import GeometryError, TooFewPointsError
from geometry.nearest import SegmentSearch
from geometry.polyline import Polyline

__all__ = ["Move", "moved_curve", "rigid_move"]

_FLATTENING = 1e-8  # of the size
_DRAWN = 10.0 * _FLATTENING  # of the size: residuals that differ by less differ by flattening alone
_ROUGH, _MIDDLE, _FINE = 160, 800, 4000  # samples
_ROUGH_CHORDS = 1500  # about as many of the old curves while starts are tried
_TURNS = 72  # starting turns all round
_ROUGH_STEPS, _STEPS = 8, 60
_FINALISTS = 8
_APART = 0.02  # of the size, and radians: states nearer than this come to the same
_STRETCHES, _LEFT_OUT = 8, 0.375  # stretches left out in turn, and their share of the samples
_COOLING = 0.5  # by which the least scale falls from step to step
_NEAR = 1e-3  # of the size: from here on distances count as far when the best is chosen
_AT_REST = 1e-13  # of the size
_CAP = 0.02  # of the size: from here on distances count as far when starts are compared
_MEDIANS = 3.0 * 1.4826  # standard deviations of normal residuals, read off their median, within which weights are high
_LEAST_SCALE = 1e-9  # of the size
_EQUAL = 1e-3  # costs that differ by less than this share are equal, and the smaller turn is taken
_SINGULAR = 1e-6  # of the largest singular value: moves that change no residual by more are not made
_MOST_SIZED = 1.5  # times larger or smaller than both sides' spreads tell
_SCALE_GAIN = 0.8  # of the residual of the nearer half: a change of size must bring it below this to be better


@dataclass(frozen=True, slots=True)
class Move:
    """A rigid move in the plane: a turn about a centre, then a shift.

    Attributes:
        dx, dy: the shift, drawing units.
        angle: the turn, radians, anticlockwise, in (-pi, pi].
        centre: what it turns about, drawing units.
        scale: factor by which the curves would fit better still if they were made larger or smaller about their
            centre; 1 where none is clearly better. `apply` does not use it.
    """

    dx: float
    dy: float
    angle: float
    centre: tuple[float, float] = (0.0, 0.0)
    scale: float = 1.0

    def apply(self, points: FloatArray) -> FloatArray:
        """Return moved points, shape (n, 2)."""
        c, s = np.cos(self.angle), np.sin(self.angle)
        x, y = points[:, 0] - self.centre[0], points[:, 1] - self.centre[1]
        shift = self.centre[0] + self.dx, self.centre[1] + self.dy
        return np.stack([c * x - s * y + shift[0], s * x + c * y + shift[1]], axis=1)


def moved_curve(move: Move, curve: Polyline | ArcChain | Spline) -> Polyline | ArcChain | Spline:
    """Return a planar curve moved as a rigid body, exactly but for rounding."""
    if isinstance(curve, Spline):
        return replace(curve, control=move.apply(curve.control))
    return replace(curve, points=move.apply(curve.points))


def rigid_move(old: Sequence[Curve], new: Sequence[Curve]) -> Move:
    """Return the rigid move that lays new curves onto old ones best.

    Curves need not correspond one to one. Of equally good moves of a symmetric shape the one with the smallest turn is
    taken; a circle is not turned. Nothing is mirrored.

    Args:
        old, new: polylines, arc chains or splines in the plane, finite, drawing units.

    Raises:
        TooFewPointsError: one of the sides has no curves.
        GeometryError: a curve is not planar, or one of the sides has no length.
    """
    if not old or not new:
        raise TooFewPointsError(0, 1)
    if any(curve.dimension != 2 for curve in (*old, *new)):
        raise GeometryError("only planar curves are laid onto one another; give their plan")
    size = max(_size(old), _size(new))
    paths = [[curve.flatten(max(_FLATTENING * size, 1e-300)) for curve in group] for group in (old, new)]
    if any(sum(path.length() for path in group) <= 0.0 for group in paths):
        raise GeometryError("curves of no length cannot be laid onto one another; leave them out")
    rough = [_samples(group, _ROUGH) for group in paths]
    centre = rough[1].mean(axis=0)
    coarse = [_Target(_thinned(group), size) for group in paths]
    starts = _starts(rough[0].mean(axis=0) - centre)
    states = coarse[0].drawn(rough[1], starts, centre, _ROUGH_STEPS)
    far = _CAP * size
    costs = coarse[0].costs(_placed(rough[1], states, centre), far)
    costs += coarse[1].costs(_taken(rough[0], states, centre), far)
    target, samples = _Target(paths[0], size), _samples(paths[1], _MIDDLE)
    states = target.drawn(samples, states[_distinct(states, costs, size)], centre, _STEPS)
    states = np.vstack([states, _without_a_stretch(target, samples, states, centre)])
    # first what lays most of it on best, which no change can spoil; of these the one that lays on best what is left
    rest = target.unchanged(_placed(samples, states, centre))
    states = states[rest <= 1.05 * rest.min() + _DRAWN * size]  # chords tell no better
    costs = target.costs(_placed(samples, states, centre), _NEAR * size)
    back = _Target(paths[1], size)
    costs += back.costs(_taken(_samples(paths[0], _MIDDLE), states, centre), _NEAR * size)
    equal = states[costs <= (1.0 + _EQUAL) * costs.min() + (_DRAWN / _NEAR) ** 2]
    best = equal[np.lexsort([np.hypot(equal[:, 0], equal[:, 1]), np.round(np.abs(equal[:, 2]), 6)])[:1]]
    samples = _samples(paths[1], _FINE)
    best = target.drawn(samples, best, centre, _STEPS, _NEAR**2)
    factor = _spread(rough[0]) / _spread(rough[1])
    sized = np.column_stack([starts, np.full(len(starts), factor)])
    sized = _sizeable(coarse[0].drawn(rough[1], sized, centre, _ROUGH_STEPS), factor)
    if len(sized):
        sized = sized[_distinct(sized, coarse[0].costs(_placed(rough[1], sized, centre), far), size)]
    scale = target.scale(samples, sized, best, centre, factor)
    dx, dy, angle = best[0].tolist()
    return Move(dx, dy, angle, (float(centre[0]), float(centre[1])), scale)


def _without_a_stretch(target: "_Target", samples: FloatArray, states: FloatArray, centre: FloatArray) -> FloatArray:
    """Return the best state drawn on anew by all samples but those of one stretch or another, which may be changed."""
    best = states[[int(np.argmin(target.unchanged(_placed(samples, states, centre))))]]
    count = len(samples)
    out = []
    for first in range(0, count, max(1, count // _STRETCHES)):
        left_out = (np.arange(count) - first) % count < _LEFT_OUT * count
        drawn = target.drawn(samples[~left_out], best, centre, _STEPS)
        out.append(target.drawn(samples, drawn, centre, _STEPS, _NEAR**2))
    return np.vstack(out)


def _size(curves: Sequence[Curve]) -> float:
    ends = np.stack([np.stack(curve.bounds()) for curve in curves])
    return float(np.linalg.norm(ends[:, 1].max(axis=0) - ends[:, 0].min(axis=0)))


def _samples(paths: Sequence[Polyline], count: int) -> FloatArray:
    """Return points evenly along all paths together, shape (about count, 2)."""
    lengths = np.array([path.length() for path in paths])
    shares = np.maximum(np.rint(count * lengths / lengths.sum()), 1).astype(int)
    return np.concatenate(
        [
            path.at(
                (np.arange(share) + 0.5) * (length / share)
                if path.closed
                else np.linspace(
                    0.0, length, share + 2
                )  # the ends too: they alone tell how far an arc lies along itself
            )
            for path, share, length in zip(paths, shares, lengths, strict=True)
            if length > 0.0
        ]
    )


def _thinned(paths: Sequence[Polyline]) -> list[Polyline]:
    """Return paths with about as many chords as are wanted while starts are tried."""
    total = sum(path.length() for path in paths)
    out = []
    for path in paths:
        count = max(3, round(_ROUGH_CHORDS * path.length() / total))
        if len(path.points) > count:
            stops = np.linspace(0.0, path.length(), count + 1)
            path = Polyline(path.at(stops[:-1] if path.closed else stops), path.closed)
        out.append(path)
    return out


def _spread(points: FloatArray) -> float:
    return float(np.sqrt(points.var(axis=0).sum()))


def _starts(shift: FloatArray) -> FloatArray:
    """Return states to start from, rows of dx, dy, angle: as it lies, and all round with the middles on one another."""
    angles = (2.0 * np.pi * np.arange(_TURNS) / _TURNS + np.pi) % (2.0 * np.pi) - np.pi
    return np.vstack([np.zeros(3), np.column_stack([np.tile(shift, (_TURNS, 1)), angles])])


def _distinct(states: FloatArray, costs: FloatArray, size: float) -> list[int]:
    """Return the rows of the best few that differ from one another, and of the least turn among those as good."""
    rows: list[int] = []
    for k in np.argsort(costs, kind="stable").tolist():
        turns = np.abs(np.angle(np.exp(1j * (states[rows, 2] - states[k, 2]))))
        apart = np.linalg.norm(states[rows, :2] - states[k, :2], axis=1) / size + turns
        if not rows or apart.min() > _APART:
            rows.append(k)
        if len(rows) == _FINALISTS:
            break
    good = np.flatnonzero(costs <= 1.05 * costs.min() + 1e-9)
    least = int(good[np.argmin(np.abs(states[good, 2]))])
    return rows if least in rows else [*rows, least]


def _sizeable(states: FloatArray, factor: float) -> FloatArray:
    """Return the sized states near a factor of size; shrunk to a point, anything would lie on anything."""
    return states[np.abs(np.log(np.maximum(states[:, 3], 1e-300) / factor)) <= np.log(_MOST_SIZED)]


def _placed(points: FloatArray, states: FloatArray, centre: FloatArray) -> FloatArray:
    """Return points moved by every state, shape (k, n, 2); a fourth column of the states is a factor of size."""
    size = states[:, 3:4] if states.shape[1] > 3 else 1.0
    c, s = size * np.cos(states[:, 2:3]), size * np.sin(states[:, 2:3])
    x, y = (points - centre).T
    shift = states[:, None, :2] + centre
    return np.stack([c * x - s * y, s * x + c * y], axis=2) + shift


def _taken(points: FloatArray, states: FloatArray, centre: FloatArray) -> FloatArray:
    """Return points moved the opposite way by every state, shape (k, n, 2)."""
    c, s = np.cos(states[:, 2:3]), np.sin(states[:, 2:3])
    x, y = np.moveaxis(points - centre - states[:, None, :2], 2, 0)
    return np.stack([c * x + s * y, c * y - s * x], axis=2) + centre


class _Target:
    """Curves that samples are drawn onto."""

    def __init__(self, paths: Sequence[Polyline], size: float) -> None:
        drawn = [path.path() for path in paths]
        start = np.concatenate([path[:-1] for path in drawn])
        end = np.concatenate([path[1:] for path in drawn])
        kept = (start != end).any(axis=1)
        self._search = SegmentSearch(start[kept].T.copy(), end[kept].T.copy())
        along = self._search.along / np.linalg.norm(self._search.along, axis=0)
        self._normal = np.stack([-along[1], along[0]])
        self._size = size

    def _residuals(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return directions of the residuals, shape (2, ...), and their lengths along them, of points (..., 2)."""
        local = np.ascontiguousarray(points.reshape(-1, 2).T)
        index, distance = self._search.near(local)
        foot = self._search.foot(local, index)
        offset = local - self._search.start[:, index] - foot * self._search.along[:, index]
        normal = self._normal[:, index].copy()
        at_end = ((foot <= 0.0) | (foot >= 1.0)) & (distance > 1e-12 * self._size)
        normal[:, at_end] = offset[:, at_end] / distance[at_end]
        shape = points.shape[:-1]
        return normal.reshape(2, *shape), (normal * offset).sum(axis=0).reshape(shape)

    def drawn(
        self, samples: FloatArray, states: FloatArray, centre: FloatArray, steps: int, warm: float = _CAP
    ) -> FloatArray:
        """Return the states that draw the samples onto the curves.

        The scale of the weights follows the median residual down, but slowly: what is small and decides where the rest
        is symmetric (a key in a disc) must have drawn the curves round before it would count as changed.

        Args:
            samples: shape (n, 2).
            states: to start from, rows of dx, dy, angle, and of the factor of size where that may change too; samples
                are made larger about the centre before they are moved.
            centre: that they turn about, shape (2,).
            steps: at most.
            warm: share of the size that the scale is not under in the first step.
        """
        states = states.copy()
        scale = np.full(len(states), np.inf)
        live = np.arange(len(states))
        for k in range(steps):
            cool = warm * _COOLING**k * self._size
            now = states[live]
            points = _placed(samples, now, centre)
            normal, off = self._residuals(points)
            middle = np.median(np.abs(off), axis=1)
            scale[live] = np.minimum(scale[live], np.maximum(_MEDIANS * middle, _LEAST_SCALE * self._size))
            wide = np.maximum(scale[live, None], cool)
            root = wide**2 / (wide**2 + off**2)  # the square root of the weight
            arm = np.moveaxis(points - centre - now[:, None, :2], 2, 0) / self._size
            columns = [normal[0], normal[1], normal[1] * arm[0] - normal[0] * arm[1]]
            if states.shape[1] > 3:
                columns.append((normal * arm).sum(axis=0))
            matrix = np.stack(columns, axis=2) * root[:, :, None]
            step = (np.linalg.pinv(matrix, rcond=_SINGULAR) @ -(off * root)[:, :, None])[:, :, 0]
            states[live, :2] += step[:, :2]
            states[live, 2] = np.angle(np.exp(1j * (now[:, 2] + step[:, 2] / self._size)))
            if states.shape[1] > 3:
                states[live, 3] *= 1.0 + step[:, 3] / self._size
            live = live[(np.abs(step).max(axis=1) >= _AT_REST * self._size) | (cool > scale[live])]
            if not live.size:
                break
        return states

    def costs(self, points: FloatArray, far: float) -> FloatArray:
        """Return how badly sets of points, shape (k, n, 2), lie on the curves: the mean of d^2 / (d^2 + far^2)."""
        _, off = self._residuals(points)
        return np.asarray(np.mean(off**2 / (off**2 + far**2), axis=1))

    def scale(
        self, samples: FloatArray, starts: FloatArray, state: FloatArray, centre: FloatArray, factor: float
    ) -> float:
        """Return the change of size with which the samples fit clearly better; 1 where there is none.

        Args:
            samples: shape (n, 2).
            starts: sized states to start from.
            state: the rigid one, shape (1, 3).
            centre: that they turn about, shape (2,).
            factor: about which the change of size is looked for.
        """
        before = float(self.unchanged(_placed(samples, state, centre))[0])
        if before <= _LEAST_SCALE * self._size:
            return 1.0
        sized = self.drawn(samples, np.vstack([starts, np.append(state[0], 1.0)]), centre, _STEPS)
        sized = _sizeable(sized, factor)
        if not len(sized):
            return 1.0
        after = self.unchanged(_placed(samples, sized, centre))
        return float(sized[int(np.argmin(after)), 3]) if min(after) < _SCALE_GAIN * before else 1.0

    def unchanged(self, points: FloatArray) -> FloatArray:
        """Return the root mean square residual of the nearer half of sets of points, shape (k, n, 2)."""
        size = np.sort(np.abs(self._residuals(points)[1]), axis=1)
        return np.asarray(np.sqrt(np.mean(size[:, : (size.shape[1] + 1) // 2] ** 2, axis=1)))
