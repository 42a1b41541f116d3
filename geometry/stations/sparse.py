"""Too few stations for the curvature seen, and where one more would help most."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.dense.measure import SplineMeasure
from geometry.stations.sprung import intervals_of

__all__ = ["Sparse", "sparse_spans"]

MOST_TURN = 1.0
"""Radians that a curve may turn from one station to the next: about a sixth of a circle."""


@dataclass(frozen=True, slots=True)
class Sparse:
    """A piece between two stations that turns too far to be known from them.

    Attributes:
        row: the station it begins at; it ends at the next one.
        turn: by how much the curve turns there, radians.
        where: point of the curve at which one more station would help most, shape (d,).
        along: arc length from the start of the curve to that point, drawing units.
    """

    row: int
    turn: float
    where: FloatArray
    along: float


def sparse_spans(spline: Spline, parameters: FloatArray, most_turn: float = MOST_TURN) -> list[Sparse]:
    """Return the pieces between stations that turn farther than is safe, the worst one first.

    What happens between two stations is inferred from their neighbours; the error of a cubic grows with the fourth
    power of the turn between stations. One more station helps most where half of the turn is done.

    Args:
        spline: sprung through the stations, degree 2 or 3 (degree 1 has no turn between stations).
        parameters: of the stations, as for `geometry.stations.overshoots`.
        most_turn: turn from one station to the next that is still trusted, radians. Empirical: a circle through six
            evenly spaced stations is within 1 % of its radius.
    """
    if spline.degree == 1:
        return []
    parts = intervals_of(spline, parameters)
    out = []
    rows = np.flatnonzero(parts.turns > most_turn)
    for row in rows[np.argsort(-parts.turns[rows], kind="stable")].tolist():
        done = np.cumsum(parts.turning[row])
        sample = int(np.searchsorted(done, 0.5 * done[-1])) + 1
        u = float(parts.parameters[row, sample])
        inside = spline.breaks[(spline.breaks > spline.breaks[0]) & (spline.breaks < u)]
        along = SplineMeasure(spline).lengths(np.concatenate([spline.breaks[:1], inside, [u]])).sum()
        out.append(Sparse(row, float(done[-1]), parts.points[row, sample], float(along)))
    return out
