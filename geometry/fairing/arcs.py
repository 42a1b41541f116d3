"""Smooth pieces that the evidence allows to be lines and arcs, as most machined profiles are.

A spline that knows nothing of arcs bows a little on every straight side of a slot and lets the curvature of its ends
wander. Where a chain of few lines and arcs with common tangents explains the trace nearly as well with a good deal less
freedom (`chain_search` says how much), the piece is drawn as that chain, its jumps of curvature eased over a few knots.

Neighbouring stretches are merged as long as one circle explains both (algebraic circle fits: G. Taubin, IEEE Trans.
Pattern Analysis and Machine Intelligence 13, 1991); the chain is then fitted as a whole and simplified. The limits are
empirical, chosen on traces of known shapes.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import FloatArray
from geometry.fairing.chain_search import Piece, simplest_chain
from geometry.fairing.easing import eased
from geometry.fairing.merging import merged_stretches
from geometry.fairing.samples import normal_offsets
from geometry.fairing.stiffness import BAND, MEAN_4, MEAN_8, Fit, local_means
from geometry.fairing.system import System
from geometry.fairing.tangent_chain import Ends
from geometry.fairing.trace import Trace

__all__ = ["Drawn", "recognised", "with_chains"]

_LEAST_FREEDOM, _MOST_FREEDOM = 7.0, 200.0  # of the fair curve: less is no gain, more is no machined piece
_LEAST_LENGTH = 25.0
_SETTLED = 0.02  # gain in chi-square
_DENSE = 0.6  # vertices a tolerance
_SQUARE, _STRAIGHT_ON = 1e-3, 1e-6
_CHANCE = {True: 4.2, False: 5.5}  # standard errors that a local mean may have: on rasters, on points
_LEAST_MEAN = 0.05
_STIFFNESS = 0.4  # knots


@dataclass(frozen=True, slots=True)
class Drawn:
    """A piece that is a chain of lines and arcs.

    Attributes:
        piece: its index.
        points: the eased chain at the samples of its intervals, shape (m, q, 2).
    """

    piece: int
    points: FloatArray


def recognised(trace: Trace, fit: Fit, pins: FloatArray | None) -> list[Drawn]:
    """Return the pieces of a planar fit that are lines and arcs; none of a fit in space.

    Args:
        trace: the outline.
        fit: fair pieces.
        pins: points where pieces start and end, shape (p, 2, d); None for a periodic piece.
    """
    layout = fit.sampled.layout
    if fit.sampled.points.shape[-1] != 2:
        return []
    pieces = list(_candidates(trace, fit, pins))
    if not pieces:
        return []
    owner = np.repeat(np.arange(len(pieces)), [len(piece.points) for piece in pieces])
    starts = merged_stretches(
        np.concatenate([piece.points for piece in pieces]), owner, np.array([piece.scale for piece in pieces])
    )
    out = []
    for k, candidate in enumerate(pieces):
        found = simplest_chain(candidate, starts[owner[starts] == k] - int(np.searchsorted(owner, k)))
        if found is None:
            continue
        piece, fitted = found
        index = int(layout.piece[piece.intervals[0]])
        inside = np.flatnonzero(layout.piece == index)
        curve, feet = eased(fitted, piece.points, piece.ends, _SETTLED / piece.scale, float(layout.h[inside[0]]))
        if _explained(fit, piece, curve.at(_along_chain(piece, curve.length, feet, _middles(fit)[piece.intervals]))):
            positions = _along_chain(piece, curve.length, feet, layout.sample_positions()[inside])
            out.append(Drawn(index, curve.at(positions)))
    return out


def with_chains(fit: Fit, drawn: list[Drawn], pins: FloatArray | None) -> Fit:
    """Return a fit with some pieces redrawn as the chains that they are; the others stay as they were."""
    if not drawn:
        return fit
    sampled, layout = fit.sampled, fit.sampled.layout
    targets, stiffness, straightness = sampled.targets.copy(), fit.stiffness.copy(), fit.straightness.copy()
    dead, taken = sampled.dead.copy(), np.zeros(len(layout), dtype=np.bool_)
    for one in drawn:
        inside = np.flatnonzero(layout.piece == one.piece)
        targets[inside] = one.points
        stiffness[inside], straightness[inside] = _STIFFNESS * layout.h[inside], 0.0
        dead[one.piece] = 0.0
        taken[inside] = True
    sampled = replace(sampled, aims=targets, dead=dead)
    whole = System(layout, targets, sampled.live, pins).solve(stiffness, None, straightness)
    coefficients = fit.coefficients.copy()
    for a in range(layout.degree + 1):  # pieces share no coefficients
        coefficients[layout.first[taken] + a] = whole[layout.first[taken] + a]
    return Fit(sampled, coefficients, stiffness, straightness)


def _middles(fit: Fit) -> FloatArray:
    """Return the parameter at the middle of every interval within its piece, shape (m,)."""
    layout = fit.sampled.layout
    return np.asarray((layout.local + 0.5) * layout.h)


def _along_chain(piece: Piece, length: float, feet: FloatArray, position: FloatArray) -> FloatArray:
    """Return where along a chain parameters of the piece lie: at a steady rate, so that nothing but the chain shows."""
    rate = length / piece.length
    if piece.ends.pins is not None:
        return rate * position
    lead = float(np.median(feet - rate * piece.along))  # joints slide, the first one too
    return np.asarray(np.mod(rate * position + lead, length))


def _candidates(trace: Trace, fit: Fit, pins: FloatArray | None) -> Iterator[Piece]:
    """Yield the pieces that could be chains: long enough, not straight already, neither stiff nor wild."""
    sampled, layout = fit.sampled, fit.sampled.layout
    count = len(layout.lengths)
    # an l^6 penalty on third derivatives leaves 1 / (3 l) degrees of freedom a unit length
    freedom = np.bincount(layout.piece, layout.h / (3.0 * fit.stiffness), count)
    straight = np.bincount(layout.piece, fit.straightness > 0.0, count) > 0
    wanted = (freedom >= _LEAST_FREEDOM) & (freedom <= _MOST_FREEDOM) & ~straight & (layout.lengths >= _LEAST_LENGTH)
    if not wanted.any():
        return
    live = sampled.live
    treads = _is_staircase(trace)
    tangent = layout.at_samples(fit.coefficients, 1).mean(axis=1)
    offsets = normal_offsets(sampled, fit.coefficients)[..., 0]
    for index in np.flatnonzero(wanted).tolist():
        first = int(layout.starts[index])
        rows = np.arange(first, first + int(layout.counts[index]))
        rows = rows[live[rows].any(axis=1)]
        weight = live[rows] / live[rows].sum(axis=1)[:, None]
        where = (weight[..., None] * sampled.points[rows]).sum(axis=1)
        heading = np.unwrap(np.arctan2(tangent[rows, 1], tangent[rows, 0]))
        length = float(layout.lengths[index])
        vertices = _vertices(trace, float(sampled.bounds[index]), float(sampled.bounds[index + 1]))
        ends = Ends() if pins is None else Ends((complex(*pins[index, 0]), complex(*pins[index, 1])))
        yield Piece(
            rows,
            where[:, 0] + 1j * where[:, 1],
            (layout.local[rows] + 0.5) * layout.h[rows],
            heading,
            length,
            ends,
            float(((weight * offsets[rows]).sum(axis=1) ** 2).sum()),
            float(freedom[index]) + (0.0 if pins is None else 1.0),
            min(length, float(vertices)),
            treads or vertices > _DENSE * length,
            treads,
        )


def _is_staircase(trace: Trace) -> bool:
    """Tell whether edges go straight on or turn by a right angle, nearly all of them, and many by a right angle."""
    unit = trace.edges / np.maximum(trace.edge_lengths, 1e-300)[:, None]
    ahead = np.abs((unit[1:] * unit[:-1]).sum(axis=1))
    square, straight = ahead < _SQUARE, ahead > 1.0 - _STRAIGHT_ON
    return bool((square | straight).mean() > 0.95 and square.mean() > 0.1)


def _vertices(trace: Trace, start: float, stop: float) -> int:
    """Return how many vertices the trace has between two arc lengths, which may pass its seam."""
    inside = np.searchsorted(trace.alongs, np.array([start, min(stop, trace.length)]))
    over = np.searchsorted(trace.alongs, stop - trace.length) if stop > trace.length else 0
    return int(inside[1] - inside[0] + over)


def _explained(fit: Fit, piece: Piece, curve: FloatArray) -> bool:
    """Tell whether every sample keeps the band about an eased chain, and the local means stay small.

    Args:
        curve: points of the chain beside the middles of the piece's intervals, shape (n, 2).
    """
    sampled = fit.sampled
    samples, live = sampled.points[piece.intervals], sampled.live[piece.intervals]
    ahead = np.roll(curve, -1, axis=0) - np.roll(curve, 1, axis=0)
    if piece.ends.pins is not None:
        ahead[0], ahead[-1] = curve[1] - curve[0], curve[-1] - curve[-2]
    ahead /= np.maximum(np.linalg.norm(ahead, axis=1), 1e-12)[:, None]
    gap = samples - curve[:, None]
    offsets = np.where(live, ahead[:, None, 0] * gap[..., 1] - ahead[:, None, 1] * gap[..., 0], 0.0)
    bend = _bend(curve, piece.ends.pins is None)
    along = (ahead[:, None] * gap).sum(axis=-1)
    offsets = np.where(live, offsets - 0.5 * bend[:, None] * along**2, 0.0)  # from the curve, not from its tangent
    if np.abs(offsets).max() > BAND:
        return False
    runs = np.zeros(len(live), dtype=np.intp)
    density = piece.independent / piece.length
    scatter = np.sqrt(piece.independent / len(piece.points) / piece.scale)
    for width, most in ((4.0, MEAN_4), (8.0, MEAN_8)):
        by_chance = _CHANCE[piece.dense] * scatter / np.sqrt(width * np.sqrt(4.0 * np.pi) * density)
        means = local_means(runs, piece.ends.pins is None, offsets[..., None], live, width)
        if float(means.max()) > max(min(by_chance, most if piece.dense else np.inf), _LEAST_MEAN):
            return False
    return True


def _bend(curve: FloatArray, closed: bool) -> FloatArray:
    """Return the curvature at points of a curve, left positive, shape (n,); 0 at open ends."""
    before, after = curve - np.roll(curve, 1, axis=0), np.roll(curve, -1, axis=0) - curve
    turn = np.arctan2(before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0], (before * after).sum(axis=1))
    length = 0.5 * (np.linalg.norm(before, axis=1) + np.linalg.norm(after, axis=1))
    bend = turn / np.maximum(length, 1e-12)
    if not closed:
        bend[0] = bend[-1] = 0.0
    return np.asarray(bend)
