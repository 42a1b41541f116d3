"""Samples of the trace on a layout, and the map between the trace's own arc length and the fit's."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.layout import Layout
from geometry.fairing.trace import Trace

__all__ = ["Sampled", "by_own_length", "normal_offsets", "reparametrised"]

_DEAD, _DEAD_SHARE = 1.0, 0.3  # zones at corners that carry no weight: the trace rounds corners off
_FOOT_STEP = 0.7
_LEAST_LENGTH = 0.05  # of a piece: its two ends may have been moved onto one point


@dataclass(frozen=True)
class Sampled:
    """A layout with the samples that it is fitted to.

    Attributes:
        layout: knot intervals.
        own: arc length of the trace at every sample, shape (m, q).
        points: the trace there, shape (m, q, d).
        bounds: arc length of the trace where each piece starts, and where the last one ends, shape (p + 1,).
        own_nodes, fit_nodes: the map from the trace's arc length to the parameter counted through all pieces.
        dead: zones without weight at both ends of each piece, shape (p, 2).
        tread: longest tread of a staircase beside each interval, shape (m,).
        aims: what the curve shall follow in place of the trace, shape (m, q, d); None for the trace itself.
    """

    layout: Layout
    own: FloatArray
    points: FloatArray
    bounds: FloatArray
    own_nodes: FloatArray
    fit_nodes: FloatArray
    dead: FloatArray
    tread: FloatArray
    aims: FloatArray | None = None

    @property
    def targets(self) -> FloatArray:
        """Points that the curve is fitted to, shape (m, q, d)."""
        return self.points if self.aims is None else self.aims

    @cached_property
    def live(self) -> BoolArray:
        """Samples that count, shape (m, q)."""
        return self.layout.live(self.dead)

    def position_of(self, own: FloatArray) -> FloatArray:
        """Return the parameter, counted through all pieces, for arc lengths of the trace from the first bound on."""
        return np.interp(own, self.own_nodes, self.fit_nodes)


def _sampled(trace: Trace, layout: Layout, bounds: FloatArray, own_nodes: FloatArray, fit_nodes: FloatArray) -> Sampled:
    position = layout.sample_positions() + layout.offsets[layout.piece][:, None]
    own = np.interp(position, fit_nodes, own_nodes)
    dead = np.minimum(_DEAD, _DEAD_SHARE * layout.lengths)[:, None] * np.ones(2)
    tread = trace.tread(own.mean(axis=1))
    return Sampled(layout, own, trace.at(own), bounds, own_nodes, fit_nodes, dead, tread)


def by_own_length(trace: Trace, bounds: FloatArray, periodic: bool, degree: int) -> Sampled:
    """Lay out pieces on the trace's own arc length.

    Args:
        bounds: arc lengths that cut the trace into pieces, increasing, shape (p + 1,); on a loop the last one may
            pass the length by up to one turn.
    """
    layout = Layout(np.diff(bounds), periodic, degree, trace.knot_step)
    return _sampled(trace, layout, bounds, bounds, bounds - bounds[0])


def reparametrised(trace: Trace, sampled: Sampled, coefficients: FloatArray, pins: FloatArray | None) -> Sampled:
    """Lay out the pieces afresh on the arc length of a fit.

    Every live sample takes the arc length of its foot point on the fit (one Newton step from its own parameter); at
    piece ends the straight distance from the pin to the nearest foot point is added.

    Args:
        pins: points where pieces start and end, shape (p, 2, d); None for a periodic piece.
    """
    layout = sampled.layout
    x, dx, ddx = (layout.at_samples(coefficients, k) for k in range(3))
    gap = sampled.points - x
    square = (dx * dx).sum(axis=-1)
    bend = np.minimum((gap * ddx).sum(axis=-1), 0.5 * square)
    move = np.clip((gap * dx).sum(axis=-1) / np.maximum(square - bend, 1e-12), -_FOOT_STEP, _FOOT_STEP)
    live = sampled.live
    piece = np.broadcast_to(layout.piece[:, None], live.shape)[live]
    own = sampled.own[live]
    local = (layout.sample_positions() + move)[live]
    if layout.periodic:
        foot = np.maximum.accumulate(local)
        foot = np.minimum(foot, foot[0] + layout.lengths[0])
        interval, t = layout.locate(piece, np.mod(foot, layout.lengths[0]))
        points = layout.evaluate(coefficients, interval, t)
        step = np.sqrt((np.diff(np.concatenate([points, points[:1]]), axis=0) ** 2).sum(axis=1))
        along = np.concatenate([[0.0], np.cumsum(step)])
        own_nodes = np.append(own, own[0] + trace.length)
        fresh = Layout(np.maximum(along[-1:], _LEAST_LENGTH), True, layout.degree, trace.knot_step)
        return _sampled(trace, fresh, own_nodes[[0, -1]], own_nodes, along)
    assert pins is not None
    held = np.clip(local, 0.0, layout.lengths[piece])
    shift = layout.offsets[piece]
    foot = np.maximum.accumulate(held + shift) - shift
    interval, t = layout.locate(piece, np.maximum(foot, 0.0))
    points = layout.evaluate(coefficients, interval, t)
    # nodes of every piece: its start pin, its live samples, its end pin
    pieces = len(layout.lengths)
    owner = np.concatenate([piece, np.arange(pieces), np.arange(pieces)])
    rank = np.concatenate([np.ones(len(piece)), np.zeros(pieces), np.full(pieces, 2.0)])
    order = np.lexsort((np.arange(len(owner)), rank, owner))
    nodes = np.concatenate([points, pins[:, 0], pins[:, 1]])[order]
    own_nodes = np.concatenate([own, sampled.bounds[:-1], sampled.bounds[1:]])[order]
    step = np.sqrt((np.diff(nodes, axis=0) ** 2).sum(axis=1))
    step[np.diff(owner[order]) > 0] = 0.0  # from one piece's end pin to the next one's start pin
    along = np.concatenate([[0.0], np.cumsum(step)])
    ends = np.flatnonzero(rank[order] == 2.0)
    lengths = np.maximum(np.diff(np.concatenate([[0.0], along[ends]])), _LEAST_LENGTH)
    fresh = Layout(lengths, False, layout.degree, trace.knot_step)
    return _sampled(trace, fresh, sampled.bounds, own_nodes, along)


def normal_offsets(sampled: Sampled, coefficients: FloatArray, intervals: IntArray | None = None) -> FloatArray:
    """Return the offsets of samples across the fit, 0 for those that do not count.

    Args:
        sampled: samples and layout.
        coefficients: of the fit.
        intervals: the intervals wanted; None for all.

    Returns:
        Signed, left positive, shape (m, q, 1); in 3-D vectors, shape (m, q, 3).
    """
    layout = sampled.layout
    x, dx = layout.at_samples(coefficients, 0, intervals), layout.at_samples(coefficients, 1, intervals)
    points, live = sampled.points, sampled.live
    if intervals is not None:
        points, live = points[intervals], live[intervals]
    if points.shape[-1] == 2:
        gx, gy = points[..., 0] - x[..., 0], points[..., 1] - x[..., 1]
        tx, ty = dx[..., 0], dx[..., 1]
        across = (tx * gy - ty * gx) / np.maximum(np.hypot(tx, ty), 1e-12)
        return np.where(live, across, 0.0)[..., None]
    gap = points - x
    unit = dx / np.maximum(np.sqrt((dx * dx).sum(axis=-1)), 1e-12)[..., None]
    return np.where(live[..., None], gap - (gap * unit).sum(axis=-1, keepdims=True) * unit, 0.0)
