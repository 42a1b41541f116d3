"""Smooth pieces that the evidence allows to be lines and arcs, as most machined profiles are.

A spline that knows nothing of arcs bows a little on every straight side of a slot and lets the curvature of its ends
wander. Where a chain of few lines and arcs with common tangents explains the trace as well as the fair curve does, with
half its freedom or less, the piece is drawn as that chain, its jumps of curvature eased over a few tolerances.

Neighbouring stretches are merged as long as one circle explains both (algebraic circle fits: G. Taubin, IEEE Trans.
Pattern Analysis and Machine Intelligence 13, 1991); the chain is then fitted as a whole, and lines, common radii and
dispensable segments are tried by the Bayesian information criterion (G. Schwarz, Annals of Statistics 6, 1978).
The limits are empirical, chosen on traces of known shapes.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.easing import eased
from geometry.fairing.merging import merged_stretches, squares_of
from geometry.fairing.samples import normal_offsets
from geometry.fairing.stiffness import BAND, MEAN_4, MEAN_8, Fit, local_means
from geometry.fairing.system import System
from geometry.fairing.tangent_chain import ComplexArray, Ends, Fitted, TangentChain, fit_chain
from geometry.fairing.trace import Trace

__all__ = ["drawn_as_chains"]

_LEAST_FREEDOM, _MOST_FREEDOM = 7.0, 200.0  # of the fair curve: less is no gain, more is no machined piece
_LEAST_LENGTH = 25.0
_SEGMENTS = {True: 0.42, False: 0.3}  # segments to begin with, of the freedom: on rasters, on points
_WORSE = {True: 1.3, False: 3.0}  # chi-square lost for every degree of freedom saved
_SIMPLER_AS_GOOD, _SIMPLER, _PLAINEST = 0.65, 0.5, 0.35  # freedom of a chain, of the fair curve's
_BETTER, _CLEAR = 15.0, 25.0  # gain in the criterion
_LEAST_SCATTER, _STEPPED_SCATTER = 0.03, 0.2  # sides along a raster's lines show none, its arcs do
_ALIKE, _SHORT = 2.5, 10.0  # standard errors; tolerances
_HOPELESS, _PROMISING, _ROUNDS, _OPTIONS = 30.0, 5.0, 12, 5
_ROUGHLY, _CLOSELY, _EXACTLY = (6, 1.0), (12, 0.1), (20, 0.02)  # rounds, and the gain in chi-square that ends them
_MISS = 0.01
_DENSE = 0.6  # vertices a tolerance
_SQUARE = 1e-3
_CHANCE = 5.0  # standard errors that a local mean may have by chance
_STIFFNESS = 0.4  # knots


@dataclass(frozen=True, slots=True)
class _Piece:
    """What one piece gives to go by: a point an interval, and the fair curve that explains them.

    Attributes:
        intervals: of the layout, in order of travel, shape (n,).
        points: means of the samples of each, shape (n,).
        along: parameter of each, increasing, shape (n,).
        heading: direction of the fair curve there, radians without jumps, shape (n,).
        length: parameter length.
        ends: what holds a chain.
        squares: sum of squared offsets from the fair curve.
        freedom: degrees of freedom of the fair curve.
        independent: how many of the points tell something new.
        dense: whether the trace is a raster's or as close there, not points with chords between.
        treads: whether it is a plain staircase.
    """

    intervals: IntArray
    points: ComplexArray
    along: FloatArray
    heading: FloatArray
    length: float
    ends: Ends
    squares: float
    freedom: float
    independent: float
    dense: bool
    treads: bool

    @property
    def scale(self) -> float:
        """Chi-square of a squared distance of 1: the scatter about the fair curve is the unit."""
        share = self.independent / len(self.points)
        degrees = max(self.independent - self.freedom, 0.3 * self.independent)
        return share / max(self.squares * share / degrees, (_STEPPED_SCATTER if self.treads else _LEAST_SCATTER) ** 2)

    def criterion(self, squares: float, freedom: float) -> float:
        """Return the Bayesian information criterion of an explanation: the less, the better."""
        return squares * self.scale + freedom * float(np.log(max(self.independent, 3.0)))

    def judged(self, fitted: Fitted) -> float:
        """Return the criterion of a chain."""
        return self.criterion(fitted.squares, _freedom(fitted.chain, self.ends))

    def fit(self, chain: TangentChain, segment: IntArray, rounds: int, gain: float, near: bool) -> Fitted | None:
        """Return a chain fitted to the points until chi-square falls by less than a gain, or None where it cannot be.

        `rounds` and `near` are as for `fit_chain`.
        """
        fitted = fit_chain(chain, segment, self.points, self.ends, gain / self.scale, rounds, near)
        return fitted if fitted is not None and fitted.miss <= _MISS else None

    def rolled(self, first: int) -> "_Piece":
        """Return a closed piece that begins at another of its points."""

        def turned(values: FloatArray, period: float) -> FloatArray:
            return np.concatenate([values[first:], values[:first] + period])

        whole = 2.0 * np.pi * np.round((self.heading[-1] - self.heading[0]) / (2.0 * np.pi))
        return replace(
            self,
            intervals=np.roll(self.intervals, -first),
            points=np.roll(self.points, -first),
            along=turned(self.along, self.length),
            heading=turned(self.heading, whole),
        )


def drawn_as_chains(trace: Trace, fit: Fit, pins: FloatArray | None) -> Fit:
    """Return the fit with the pieces redrawn that are lines and arcs; the same object where there are none.

    Args:
        trace: the outline.
        fit: fair pieces.
        pins: points where pieces start and end, shape (p, 2, d); None for a periodic piece.
    """
    sampled, layout = fit.sampled, fit.sampled.layout
    if sampled.points.shape[-1] != 2:
        return fit
    pieces = list(_candidates(trace, fit, pins))
    if not pieces:
        return fit
    points, stiffness, straightness = sampled.points.copy(), fit.stiffness.copy(), fit.straightness.copy()
    dead, taken = sampled.dead.copy(), np.zeros(len(layout), dtype=np.bool_)
    owner = np.repeat(np.arange(len(pieces)), [len(piece.points) for piece in pieces])
    starts = merged_stretches(
        np.concatenate([piece.points for piece in pieces]), owner, np.array([piece.scale for piece in pieces])
    )
    for k, piece in enumerate(pieces):
        own = starts[owner[starts] == k] - int(np.searchsorted(owner, k))
        if len(own) > _SEGMENTS[piece.dense] * piece.freedom + 0.5:
            continue
        if piece.ends.closed:
            if len(own) < 2:
                continue
            piece, own = _from_joint(piece, own)
        fitted = _search(piece, own)
        if fitted is None or not _explained(fit, piece, fitted):
            continue
        inside = np.flatnonzero(layout.piece == layout.piece[piece.intervals[0]])
        knot = float(layout.h[inside[0]])
        curve, feet = eased(fitted, piece.points, piece.ends, _EXACTLY[1] / piece.scale, knot)
        points[inside] = curve.at(_along_chain(piece, curve.length, feet, layout.sample_positions()[inside]))
        stiffness[inside], straightness[inside] = _STIFFNESS * knot, 0.0
        dead[layout.piece[inside[0]]] = 0.0
        taken[inside] = True
    if not taken.any():
        return fit
    sampled = replace(sampled, points=points, dead=dead)
    whole = System(layout, points, sampled.live, pins).solve(stiffness, None, straightness)
    coefficients = fit.coefficients.copy()
    for a in range(layout.degree + 1):  # pieces share no coefficients: the others stay as they were
        coefficients[layout.first[taken] + a] = whole[layout.first[taken] + a]
    return Fit(sampled, coefficients, stiffness, straightness)


def _along_chain(piece: _Piece, length: float, feet: FloatArray, position: FloatArray) -> FloatArray:
    """Return where along a chain parameters of the piece lie: at a steady rate, so that nothing but the chain shows."""
    rate = length / piece.length
    if not piece.ends.closed:
        return rate * position
    lead = float(np.median(feet - rate * piece.along))  # joints slide, the first one too
    return np.asarray(np.mod(rate * position + lead, length))


def _candidates(trace: Trace, fit: Fit, pins: FloatArray | None) -> Iterator[_Piece]:
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
        ends = Ends(closed=True) if pins is None else Ends(pins=(complex(*pins[index, 0]), complex(*pins[index, 1])))
        yield _Piece(
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
    """Tell whether nearly all edges go straight on or turn by a right angle."""
    unit = trace.edges / np.maximum(trace.edge_lengths, 1e-300)[:, None]
    ahead = np.abs((unit[1:] * unit[:-1]).sum(axis=1))
    return bool(((ahead < _SQUARE) | (ahead > 1.0 - _SQUARE)).mean() > 0.95)


def _vertices(trace: Trace, start: float, stop: float) -> int:
    """Return how many vertices the trace has between two arc lengths, which may pass its seam."""
    inside = np.searchsorted(trace.alongs, np.array([start, min(stop, trace.length)]))
    over = np.searchsorted(trace.alongs, stop - trace.length) if stop > trace.length else 0
    return int(inside[1] - inside[0] + over)


def _search(piece: _Piece, starts: IntArray) -> Fitted | None:
    """Return the chain with the least criterion that simplifying steps lead to, if it beats the fair curve clearly."""
    fair = piece.criterion(piece.squares, piece.freedom)
    least = piece.criterion(squares_of(piece.points, starts), 3 + 2 * len(starts) - piece.ends.held)
    if least > fair - _BETTER:
        return None
    best = piece.fit(*_first_chain(piece, starts), *_ROUGHLY, near=False)
    if best is None or piece.judged(best) > fair + _HOPELESS:
        return None
    best = piece.fit(best.chain, best.segment, *_CLOSELY, near=True) or best
    score = piece.judged(best)
    if score > fair - _PROMISING:
        return None
    for _ in range(_ROUNDS):
        for chain, segment in _simpler(piece, best):
            trial = piece.fit(chain, segment, *_CLOSELY, near=True)
            if trial is not None and piece.judged(trial) < score - 1e-6:
                best, score = trial, piece.judged(trial)
                break
        else:
            break
    best = piece.fit(best.chain, best.segment, *_EXACTLY, near=False) or best  # joints may not have come to rest yet
    score = piece.judged(best)
    return best if _preferred(piece, _freedom(best.chain, piece.ends), _lost(piece, best), fair - score) else None


def _preferred(piece: _Piece, freedom: float, lost: float, gain: float) -> bool:
    """Tell whether a chain is so much simpler than the fair curve that what it loses by that counts less."""
    share = freedom / piece.freedom
    if lost <= 0.0:
        return share <= _SIMPLER_AS_GOOD and gain >= _BETTER
    if share <= _PLAINEST and gain >= _CLEAR:
        return True
    return share <= _SIMPLER and gain >= _BETTER and lost <= _WORSE[piece.dense] * (piece.freedom - freedom)


def _lost(piece: _Piece, fitted: Fitted) -> float:
    """Return by how much chi-square is above that of the fair curve."""
    return (fitted.squares - piece.squares) * piece.scale


def _from_joint(piece: _Piece, starts: IntArray) -> tuple[_Piece, IntArray]:
    """Return a closed piece rolled to begin where the curvature changes most, and its stretches."""
    bend = _first_chain(piece, starts)[0].curvatures
    k = int(np.argmax(np.abs(bend - np.roll(bend, 1))))
    count, first = len(piece.points), int(starts[k])
    return piece.rolled(first), np.roll(np.mod(starts - first, count), -k)


def _first_chain(piece: _Piece, starts: IntArray) -> tuple[TangentChain, IntArray]:
    """Return a chain with joints at given points whose headings follow the fair curve's, and the segments of points."""
    count, along = len(starts), piece.along
    begin = float(along[0]) if piece.ends.closed else 0.0
    cuts = np.concatenate([[begin], along[starts[1:]], [begin + piece.length]])
    segment = np.clip(np.searchsorted(starts, np.arange(len(along)), side="right") - 1, 0, count - 1)
    t = (along - cuts[segment]) / (cuts[segment + 1] - cuts[segment])
    rows = np.zeros((len(along), count + 1))
    rows[np.arange(len(along)), segment] = 1.0 - t
    rows[np.arange(len(along)), segment + 1] += t
    heading = piece.heading
    if piece.ends.closed:
        whole = 2.0 * np.pi * np.round((heading[-1] - heading[0]) / (2.0 * np.pi))
        heading = heading - whole * rows[:, -1]
        rows[:, 0] += rows[:, -1]
        solved = np.linalg.lstsq(rows[:, :-1], heading, rcond=None)[0]
        solved = np.append(solved, solved[0] + whole)
    else:
        solved = np.linalg.lstsq(rows, heading, rcond=None)[0]
    lengths = np.diff(cuts)
    start = piece.ends.pins[0] if piece.ends.pins is not None else complex(piece.points[0])
    line = np.zeros(count, dtype=np.bool_)
    return TangentChain(start, float(solved[0]), lengths, np.diff(solved) / lengths, line), segment


def _simpler(piece: _Piece, fitted: Fitted) -> Iterator[tuple[TangentChain, IntArray]]:
    """Yield chains with fewer numbers to try, the most promising first."""
    chain, segment = fitted.chain, fitted.segment
    error = fitted.spread / np.sqrt(piece.scale)
    bent = np.abs(chain.curvatures) / error
    bent[chain.line] = np.inf
    both = chain.line[1:] & chain.line[:-1]
    error = np.where(chain.line, 0.0, error)
    unlike = np.abs(np.diff(chain.curvatures)) / np.maximum(np.hypot(error[1:], error[:-1]), 1e-12)
    unlike[both] = 0.0
    straight = bent < _ALIKE
    if np.count_nonzero(straight) > 1:
        yield _with_lines(chain, straight), segment
    alike = np.flatnonzero(unlike < _ALIKE)
    alike = alike[np.diff(alike, prepend=-2) > 1]
    if len(alike) > 1:
        yield _merged(chain, segment, alike)
    options: list[tuple[float, int, int]] = []
    options += [(float(bent[k]), 0, int(k)) for k in np.flatnonzero(bent < 4.0 * _ALIKE)]
    options += [(float(unlike[k]), 1, int(k)) for k in np.flatnonzero(unlike < 4.0 * _ALIKE)]
    if len(chain) > 2:
        options += [(float(chain.lengths[k]) / 3.0, 2, int(k)) for k in np.flatnonzero(chain.lengths < _SHORT)]
    for _, what, k in sorted(options)[:_OPTIONS]:
        if what == 0:
            yield _with_lines(chain, np.arange(len(chain)) == k), segment
        elif what == 1:
            yield _merged(chain, segment, np.array([k]))
        else:
            yield _without(chain, segment, k)


def _with_lines(chain: TangentChain, which: BoolArray) -> TangentChain:
    return replace(chain, curvatures=np.where(which, 0.0, chain.curvatures), line=chain.line | which)


def _merged(chain: TangentChain, segment: IntArray, at: IntArray) -> tuple[TangentChain, IntArray]:
    """Return the chain with each of the segments `at` and the one after it made one, no two of them neighbours."""
    turns = chain.curvatures * chain.lengths
    into = np.arange(len(chain)) - np.searchsorted(at, np.arange(len(chain)))
    lengths: FloatArray = np.bincount(into, chain.lengths).astype(np.float64)
    line = np.bincount(into, ~chain.line) == 0
    curvatures = np.where(line, 0.0, np.bincount(into, turns) / lengths)
    return replace(chain, lengths=lengths, curvatures=curvatures, line=line), into[segment]


def _without(chain: TangentChain, segment: IntArray, k: int) -> tuple[TangentChain, IntArray]:
    """Return the chain without a segment, whose length and turn go to its neighbours."""
    lengths, turns = chain.lengths.copy(), chain.curvatures * chain.lengths
    beside = np.array([j for j in (k - 1, k + 1) if 0 <= j < len(chain)])
    lengths[beside] += lengths[k] / len(beside)
    bending = beside[~chain.line[beside]]
    line = chain.line.copy()
    if not len(bending):  # two lines with nothing between: one of them bends
        bending = beside[:1]
        line[bending] = False
    turns[bending] += turns[k] / len(bending)
    keep = np.arange(len(chain)) != k
    curvatures = np.where(line, 0.0, turns / lengths)
    moved = np.maximum(np.where(segment >= k, segment - 1, segment), 0)
    return replace(chain, lengths=lengths[keep], curvatures=curvatures[keep], line=line[keep]), moved


def _freedom(chain: TangentChain, ends: Ends) -> int:
    """Return how many numbers of a chain are free."""
    return 3 + 2 * len(chain) - int(np.count_nonzero(chain.line)) - ends.held


def _explained(fit: Fit, piece: _Piece, fitted: Fitted) -> bool:
    """Tell whether every sample keeps the band about a chain, and the local means stay small."""
    sampled = fit.sampled
    samples, live = sampled.points[piece.intervals], sampled.live[piece.intervals]
    flat = (samples[..., 0] + 1j * samples[..., 1]).ravel()
    offsets = fitted.chain.offsets(flat, np.repeat(fitted.segment, samples.shape[1])).reshape(live.shape)
    offsets = np.where(live, offsets, 0.0)
    if np.abs(offsets).max() > BAND:
        return False
    runs = np.zeros(len(live), dtype=np.intp)
    density = piece.independent / piece.length
    scatter = np.sqrt(piece.independent / len(piece.points) / piece.scale)
    for width, most in ((4.0, MEAN_4), (8.0, MEAN_8)):
        by_chance = _CHANCE * scatter / np.sqrt(width * np.sqrt(4.0 * np.pi) * density)
        means = local_means(runs, piece.ends.closed, offsets[..., None], live, width)
        if float(means.max()) > max(most, by_chance):
            return False
    return True
