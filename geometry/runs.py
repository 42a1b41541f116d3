"""Runs of chords taken as one chord each, with proven errors: a rough likeness of a curve of very many pieces.

Why the error holds. Let h be the largest distance from the inner vertices of a run to the chord over it. Distance to
the chord, a convex set, is convex along each edge of the run, and 0 at both ends, so no point of the run is farther
than h from the chord. And the plane square to the chord through a point x of it parts the ends of the run, which
therefore passes through it somewhere, at q say; the point of the chord nearest to q is x, so that x is within h of the
run. The run's own chords are within e of their pieces of curve, both ways, so pieces and chord are within h + e. This
says nothing about order of travel, which distances between sets do not need.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.chords import Chords

__all__ = ["RUN", "Runs", "runs"]

RUN = 16
"""Chords of a run."""


@dataclass(frozen=True, slots=True, eq=False)
class Runs:
    """Chords over runs of a curve's chords.

    Attributes:
        chords: one for every run, and the others as they are; `element`, `low` and `high` are those of the first chord
            of a run and say nothing about its end, so that these chords are not to be split.
        first: index of the first chord of each, with the number of all at the end, shape (m + 1,).
    """

    chords: Chords
    first: IntArray

    def members(self, index: IntArray) -> IntArray:
        """Return the indices of the chords that make up runs given in rising order."""
        count = self.first[index + 1] - self.first[index]
        before = np.cumsum(count) - count
        rows: IntArray = np.repeat(self.first[index] - before, count) + np.arange(int(count.sum()))
        return rows


def runs(chords: Chords, error: float, spare: float) -> Runs:
    """Take every sixteen chords that follow one another as one, where that keeps an error.

    Args:
        chords: all chords of a curve, in order.
        error: largest error of a run, drawing units.
        spare: added to computed errors for rounding, drawing units.
    """
    blocks = len(chords) // RUN
    whole = blocks * RUN
    shape = (blocks, RUN, chords.start.shape[1])
    start, end = chords.start[:whole].reshape(shape), chords.end[:whole].reshape(shape)
    apart = _apart(start[:, 1:], start[:, 0], end[:, -1]) + chords.error[:whole].reshape(shape[:2]).max(axis=1) + spare
    good = (apart <= error) & (start[:, 1:] == end[:, :-1]).all(axis=(1, 2))
    is_first = np.ones(len(chords), dtype=np.bool_)
    is_first[:whole].reshape(shape[:2])[good, 1:] = False
    first = np.append(np.flatnonzero(is_first), len(chords))
    last = first[1:] - 1
    taken = chords.error[first[:-1]]
    taken[last > first[:-1]] = apart[good]
    low, high = chords.low[first[:-1]], chords.high[first[:-1]]
    merged = Chords(
        chords.elements, chords.element[first[:-1]], low, high, chords.start[first[:-1]], chords.end[last], taken
    )
    return Runs(merged, first)


def _apart(inner: FloatArray, start: FloatArray, end: FloatArray) -> FloatArray:
    """Return the largest distance from points, shape (n, k, d), to the segments from start to end, shape (n, d)."""
    along = end - start
    square = np.add.reduce(along * along, axis=1)
    inverse = np.divide(1.0, square, out=np.zeros_like(square), where=square > 1e-200)
    offset = inner - start[:, None]
    t = np.einsum("nkd,nd->nk", offset, along) * inverse[:, None]
    offset -= np.clip(t, 0.0, 1.0)[:, :, None] * along[:, None]
    largest: FloatArray = np.sqrt(np.einsum("nkd,nkd->nk", offset, offset).max(axis=1, initial=0.0))
    return largest
