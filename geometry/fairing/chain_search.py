"""The chain of lines and arcs that explains the points of a piece best, if it does so better than a fair curve.

Lines, common radii and dispensable segments are tried one after the other by the Bayesian information criterion
(G. Schwarz, Annals of Statistics 6, 1978). The limits are empirical, chosen on traces of known shapes.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.merging import squares_of
from geometry.fairing.tangent_chain import ComplexArray, Ends, Fitted, TangentChain, fit_chain

__all__ = ["Piece", "simplest_chain"]

_SEGMENTS = {True: 0.42, False: 0.3}  # segments to begin with, of the freedom: on rasters, on points
_SIMPLER_AS_GOOD, _SIMPLER, _PLAINEST = 0.65, 0.5, 0.35  # freedom of a chain, of the fair curve's
_BETTER, _CLEAR = 15.0, 25.0  # gain in the criterion
_WORSE = {True: 1.3, False: 3.0}  # chi-square lost for every degree of freedom saved
_MOST_LOST = {True: 0.15, False: 0.4}  # of the fair curve's sum of squares, whatever is saved
_LEAST_SCATTER, _STEPPED_SCATTER = 0.03, 0.2  # sides along a raster's lines show none, its arcs do
_ALIKE, _SHORT = 2.5, 10.0  # standard errors; tolerances
_HOPELESS, _PROMISING, _TRIALS, _OPTIONS = 30.0, 5.0, 20, 5
_ROUGHLY, _CLOSELY, _EXACTLY = (6, 1.0), (12, 0.1), (20, 0.02)  # rounds, and the gain in chi-square that ends them
_MISS = 0.01


@dataclass(frozen=True, slots=True)
class Piece:
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

    def rolled(self, first: int) -> "Piece":
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


def simplest_chain(piece: Piece, starts: IntArray) -> tuple[Piece, Fitted] | None:
    """Return the chain with the least criterion that simplifying steps lead to, if it beats the fair curve clearly.

    Args:
        piece: what there is to go by.
        starts: points where stretches of one circle each start, shape (k,).

    Returns:
        The piece, rolled to begin at a joint where it is closed, and the chain; None where the fair curve is better.
    """
    if len(starts) > _SEGMENTS[piece.dense] * piece.freedom + 0.5 or (piece.ends.pins is None and len(starts) < 2):
        return None
    if piece.ends.pins is None:
        piece, starts = _from_joint(piece, starts)
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
    trials = 0
    while trials < _TRIALS:
        for chain, segment in _simpler(piece, best):
            trials += 1
            trial = piece.fit(chain, segment, *_CLOSELY, near=True)
            if trial is not None and piece.judged(trial) < score - 1e-6:
                best, score = trial, piece.judged(trial)
                break
        else:
            break
    best = piece.fit(best.chain, best.segment, *_EXACTLY, near=False) or best  # joints may not have come to rest yet
    score = piece.judged(best)
    return (piece, best) if _preferred(piece, best, fair - score) else None


def _preferred(piece: Piece, fitted: Fitted, gain: float) -> bool:
    """Tell whether a chain is so much simpler than the fair curve that what it loses by that counts less."""
    freedom = _freedom(fitted.chain, piece.ends)
    share, lost = freedom / piece.freedom, _lost(piece, fitted)
    if lost <= 0.0:
        return share <= _SIMPLER_AS_GOOD and gain >= _BETTER
    if fitted.squares > (1.0 + _MOST_LOST[piece.dense]) * max(piece.squares, len(piece.points) * _LEAST_SCATTER**2):
        return False
    if share <= _PLAINEST and gain >= _CLEAR:
        return True
    return share <= _SIMPLER and gain >= _BETTER and lost <= _WORSE[piece.dense] * (piece.freedom - freedom)


def _lost(piece: Piece, fitted: Fitted) -> float:
    """Return by how much chi-square is above that of the fair curve."""
    return (fitted.squares - piece.squares) * piece.scale


def _from_joint(piece: Piece, starts: IntArray) -> tuple[Piece, IntArray]:
    """Return a closed piece rolled to begin where the curvature changes most, and its stretches."""
    bend = _first_chain(piece, starts)[0].curvatures
    k = int(np.argmax(np.abs(bend - np.roll(bend, 1))))
    count, first = len(piece.points), int(starts[k])
    return piece.rolled(first), np.roll(np.mod(starts - first, count), -k)


def _first_chain(piece: Piece, starts: IntArray) -> tuple[TangentChain, IntArray]:
    """Return a chain with joints at given points whose headings follow the fair curve's, and the segments of points."""
    count, along = len(starts), piece.along
    begin = float(along[0]) if piece.ends.pins is None else 0.0
    cuts = np.concatenate([[begin], along[starts[1:]], [begin + piece.length]])
    segment = np.clip(np.searchsorted(starts, np.arange(len(along)), side="right") - 1, 0, count - 1)
    t = (along - cuts[segment]) / (cuts[segment + 1] - cuts[segment])
    rows = np.zeros((len(along), count + 1))
    rows[np.arange(len(along)), segment] = 1.0 - t
    rows[np.arange(len(along)), segment + 1] += t
    heading = piece.heading
    if piece.ends.pins is None:
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


def _simpler(piece: Piece, fitted: Fitted) -> Iterator[tuple[TangentChain, IntArray]]:
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
