"""Hold a fit in the tolerance band: measure both directions, soften and draw corners where it is outside.

Distances here are sampled; they steer the repair. The proof is `geometry.deviation`'s.
"""

from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.layout import Layout
from geometry.fairing.samples import Sampled
from geometry.fairing.stiffness import Fit, limit_growth, spread
from geometry.fairing.system import System
from geometry.fairing.trace import Trace

__all__ = ["CORNER_SEARCH", "LIMIT", "BandCheck", "Nodes", "check_band", "repair"]

LIMIT = 0.985
_NEAR = 0.90  # a partner at the same parameter nearer than this needs no search
_SEARCH, CORNER_SEARCH = 3.0, 8.0
_ROUNDS = 12
_DRAW = 0.9


@dataclass(frozen=True, slots=True)
class Nodes:
    """Points where pieces start and end: corners, and the ends of an open profile.

    Attributes:
        points: shape (k, d); k = p on a loop, p + 1 on an open profile, 0 for a periodic piece.
        own: arc length of the trace at each.
        fixed: nodes that must not move (open ends).
        closed: whether the last piece ends at the first node.
    """

    points: FloatArray
    own: FloatArray
    fixed: BoolArray
    closed: bool

    @property
    def pins(self) -> FloatArray | None:
        """Start and end point of every piece, shape (p, 2, d)."""
        if not len(self.points):
            return None
        if self.closed:
            return np.stack([self.points, np.roll(self.points, -1, axis=0)], axis=1)
        return np.stack([self.points[:-1], self.points[1:]], axis=1)

    def moved(self, points: FloatArray) -> "Nodes":
        """Return the nodes at other places."""
        return Nodes(points, self.own, self.fixed, self.closed)


@dataclass(frozen=True, slots=True)
class BandCheck:
    """Sampled distances both ways, in tolerances.

    Attributes:
        curve: distance of the curve's samples to the trace, shape (m, q).
        trace: distance of the trace's vertices to the curve, shape (v,).
        trace_own: arc length of those vertices, shape (v,).
        trace_interval: the interval of the fit beside each, shape (v,).
        corners: distance of the nodes to the trace, shape (k,).
        worst: the largest of all.
    """

    curve: FloatArray
    trace: FloatArray
    trace_own: FloatArray
    trace_interval: IntArray
    corners: FloatArray

    @property
    def worst(self) -> float:
        """The largest of all distances."""
        return max(float(values.max(initial=0.0)) for values in (self.curve, self.trace, self.corners))


def check_band(trace: Trace, fit: Fit, nodes: Nodes) -> BandCheck:
    """Measure how far the fit and the trace lie apart, both ways."""
    sampled, layout = fit.sampled, fit.sampled.layout
    x = layout.at_samples(fit.coefficients)
    gap = sampled.points - x
    curve = np.sqrt((gap * gap).sum(axis=-1))
    far = curve > _NEAR
    if far.any():
        curve[far] = trace.distance(x[far], sampled.own[far], _SEARCH)
    corners = trace.distance(nodes.points, nodes.own, CORNER_SEARCH) if len(nodes.points) else np.zeros(0)
    own = trace.alongs[:-1] if trace.closed else trace.alongs
    own = np.where(own < sampled.bounds[0], own + trace.length, own) if trace.closed else own
    position = sampled.position_of(own)
    piece = np.clip(np.searchsorted(layout.offsets, position, side="right") - 1, 0, len(layout.lengths) - 1)
    interval, t = layout.locate(piece, position - layout.offsets[piece])
    vertices = trace.at(own)
    gap = vertices - layout.evaluate(fit.coefficients, interval, t)
    distance = np.sqrt((gap * gap).sum(axis=-1))
    far = distance > _NEAR
    if far.any():
        drawn, start = _drawn(sampled, x, nodes)
        distance[far] = drawn.distance(vertices[far], position[far] - start, _SEARCH)
    return BandCheck(curve, distance, own, interval, corners)


def _drawn(sampled: Sampled, x: FloatArray, nodes: Nodes) -> tuple[Trace, float]:
    """Return the curve through its samples and nodes as a polyline whose arc lengths are the fit's parameters."""
    layout = sampled.layout
    position = (layout.sample_positions() + layout.offsets[layout.piece][:, None]).ravel()
    points = x.reshape(-1, x.shape[-1])
    if len(nodes.points):
        ends = np.append(layout.offsets, layout.offsets[-1] + layout.lengths[-1])
        node_points = np.vstack([nodes.points, nodes.points[:1]]) if nodes.closed else nodes.points
        order = np.argsort(np.concatenate([position, ends]), kind="stable")
        position = np.concatenate([position, ends])[order]
        points = np.concatenate([points, node_points])[order]
        start = 0.0
    else:
        start = float(position[0])
        position, points = np.append(position, position[0] + layout.lengths[0]), np.vstack([points, points[:1]])
    drawn = Trace(points, nodes.closed)
    drawn.alongs = position - start
    drawn.length = float(drawn.alongs[-1])
    return drawn, start


def repair(trace: Trace, fit: Fit, nodes: Nodes) -> tuple[Fit, Nodes, BandCheck]:
    """Soften the fit and draw corners until the band holds; return the best fit seen.

    Raises:
        numpy.linalg.LinAlgError: a piece has nothing left to hold it.
    """
    check = check_band(trace, fit, nodes)
    best = (fit, nodes, check)
    stiffness, straightness, dead = fit.stiffness, fit.straightness, fit.sampled.dead.copy()
    layout = fit.sampled.layout
    for turn in range(_ROUNDS):
        if check.worst <= LIMIT:
            break
        out_trace = check.trace > LIMIT
        out: BoolArray = np.any(check.curve > LIMIT, axis=1)
        out[check.trace_interval[out_trace]] = True
        if len(nodes.points):
            bad = check.corners > LIMIT
            _flag_nodes(layout.starts, layout.counts, bad, nodes.closed, out)
            nodes = _drawn_corners(trace, fit, nodes, check, turn)
            dead = _shrunk(fit.sampled, dead, out)
        soft = spread(layout, out, 4)
        stiffness = np.where(soft, np.minimum(0.6 * stiffness, 4.0 * 0.8**turn), stiffness)
        stiffness = np.maximum(limit_growth(layout, stiffness, 0.5), 0.3)
        straightness = np.where(soft, 0.0, straightness)
        old = fit.sampled
        sampled = replace(old, dead=dead)
        system = System(layout, old.targets, sampled.live, nodes.pins)
        fit = Fit(sampled, system.solve(stiffness, None, straightness), stiffness, straightness)
        check = check_band(trace, fit, nodes)
        if check.worst < best[2].worst:
            best = (fit, nodes, check)
    return best


def _flag_nodes(starts: IntArray, counts: IntArray, bad: BoolArray, closed: bool, out: BoolArray) -> None:
    """Flag the intervals on both sides of nodes."""
    index = np.flatnonzero(bad)
    pieces = len(starts)
    after = index % pieces if closed else index[index < pieces]
    before = (index - 1) % pieces if closed else index[index > 0] - 1
    out[starts[after]] = True
    out[starts[before] + counts[before] - 1] = True


def _shrunk(sampled: Sampled, dead: FloatArray, out: BoolArray) -> FloatArray:
    """Halve the dead zones within 4 tolerances of a place outside; below a tenth they vanish."""
    layout = sampled.layout
    position = layout.position - layout.offsets[layout.piece]
    dead = dead.copy()
    for side, away in ((0, position), (1, layout.lengths[layout.piece] - position)):
        touched = np.zeros(len(dead), dtype=bool)
        touched[layout.piece[out & (away < 4.0)]] = True
        dead[:, side] = np.where(touched, 0.5 * dead[:, side], dead[:, side])
    dead[dead < 0.1] = 0.0
    return dead


def _drawn_corners(trace: Trace, fit: Fit, nodes: Nodes, check: BandCheck, turn: int) -> Nodes:
    """Draw corners towards points of the trace that the curve misses; late, put them on the trace."""
    points = nodes.points.copy()
    layout = fit.sampled.layout
    total = trace.length if nodes.closed else np.inf
    for k in np.flatnonzero(~nodes.fixed).tolist():
        gap = np.abs(check.trace_own - nodes.own[k])
        gap = np.minimum(gap, np.abs(total - gap))
        missed = np.flatnonzero((gap < 4.0) & (check.trace > LIMIT))
        if missed.size:
            worst = missed[np.argmax(check.trace[missed])]
            target = trace.at(check.trace_own[worst : worst + 1])[0]
            off = points[k] - target
            size = float(np.sqrt(off @ off))
            most = _DRAW * LIMIT
            if size > most:
                points[k] = target + off * (most / size)
        pieces = len(layout.starts)
        beside = {k % pieces, (k - 1) % pieces} if nodes.closed else {min(k, pieces - 1), max(k - 1, 0)}
        off_curve = any(_out_beside(layout, check, piece, piece == k % pieces) for piece in beside)
        if turn >= 4 and (off_curve or check.corners[k] > LIMIT):
            points[k] = trace.at(nodes.own[k : k + 1])[0]
    return nodes.moved(points)


def _out_beside(layout: Layout, check: BandCheck, piece: int, at_start: bool) -> bool:
    start, count = int(layout.starts[piece]), int(layout.counts[piece])
    span = min(4, count)
    part = check.curve[start : start + span] if at_start else check.curve[start + count - span : start + count]
    return bool((part > LIMIT).any())
