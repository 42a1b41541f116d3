"""Ordinates of a curve: its points at stated places along x, as in a table of offsets."""

from typing import Literal

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.errors import GeometryError

__all__ = ["Spacing", "ordinates"]

Spacing = Literal["even", "cosine"]
_HALVINGS = 60
_NOTHING = 1e-9  # of the extent: a branch that is narrower in x stands upright


def ordinates(spline: Spline, count: int, spacing: Spacing = "even") -> list[FloatArray]:
    """Return the points of a curve at places along x, one array for every branch on which x rises or falls throughout.

    Cosine spacing puts places at x_k = (1 - cos(pi k / (count - 1))) / 2 of the branch, close together at its ends
    where profiles are round. A closed curve whose start lies within a branch has that branch in one piece.

    Args:
        spline: degree 1 to 3, d = 2 or 3.
        count: of places on a branch, ends included; 2 or more.
        spacing: even or cosine.

    Returns:
        Branches in order of travel, each of shape (count, d); upright stretches have none. A curve that is upright
        throughout gives no branch.

    Raises:
        GeometryError: fewer than two places or no such spacing.
    """
    if count < 2:
        raise GeometryError(f"{count} ordinates are too few; ask for 2 or more")
    if spacing not in ("even", "cosine"):
        raise GeometryError(f"there is no spacing {spacing!r}; use even or cosine")
    share = np.linspace(0.0, 1.0, count)
    if spacing == "cosine":
        share = 0.5 * (1.0 - np.cos(np.pi * share))
    cuts = _cuts(spline)
    x = spline.evaluate(cuts)[:, 0]
    extent = float(np.ptp(spline.control, axis=0).max())
    out = []
    for intervals in _branches(x, spline.closed):
        low, high = x[intervals[0]], x[intervals[-1] + 1]
        if abs(high - low) <= _NOTHING * extent:
            continue
        places = low + (high - low) * share
        places[-1] = high
        sense = np.sign(high - low)
        begins = sense * x[intervals]
        at = intervals[np.clip(np.searchsorted(begins, sense * places, side="right") - 1, 0, len(intervals) - 1)]
        points = spline.evaluate(_solved(spline, places, cuts[at], cuts[at + 1], sense))
        points[:, 0] = places
        out.append(points)
    return out


def _cuts(spline: Spline) -> FloatArray:
    """Return the parameters between which x rises or falls throughout: knots and turning points in x."""
    b = spline.beziers[:, :, 0]
    steps = np.diff(b, axis=1)  # x' / degree in Bernstein form
    if spline.degree == 1:
        return spline.breaks
    if spline.degree == 2:
        c0, c1, c2 = steps[:, 0], steps[:, 1] - steps[:, 0], np.zeros(len(b))
    else:
        c0, c1, c2 = steps[:, 0], 2.0 * (steps[:, 1] - steps[:, 0]), steps[:, 0] - 2.0 * steps[:, 1] + steps[:, 2]
    # roots of c0 + c1 t + c2 t^2 without cancellation
    q = -0.5 * (c1 + np.copysign(np.sqrt(np.maximum(c1 * c1 - 4.0 * c0 * c2, 0.0)), c1))
    roots = []
    for top, bottom in ((q, c2), (c0, q)):
        usable = np.abs(bottom) > 1e-300
        t = np.divide(top, bottom, out=np.full(len(b), -1.0), where=usable & (np.abs(top) < np.abs(bottom)))
        inside = (t > 0.0) & (t < 1.0)
        roots.append((spline.breaks[:-1] + t * np.diff(spline.breaks))[inside])
    return np.unique(np.concatenate([spline.breaks, *roots]))


def _branches(x: FloatArray, closed: bool) -> list[np.ndarray[tuple[int], np.dtype[np.intp]]]:
    """Return the intervals between cuts that follow one another with x in one sense."""
    sense = np.sign(np.diff(x))
    moving = np.flatnonzero(sense)
    if not moving.size:
        return []
    turns = np.flatnonzero(np.diff(sense[moving])) + 1
    groups = np.split(moving, turns)
    if closed and len(groups) > 1 and sense[groups[0][0]] == sense[groups[-1][0]]:
        groups = [np.concatenate([groups[-1], groups[0]]), *groups[1:-1]]
    return groups


def _solved(spline: Spline, places: FloatArray, low: FloatArray, high: FloatArray, sense: float) -> FloatArray:
    """Return the parameters at which x takes places, each in an interval in which x does not turn, by halving it."""
    low, high = low.copy(), high.copy()
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        before = sense * (spline.evaluate(middle)[:, 0] - places) < 0.0
        low, high = np.where(before, middle, low), np.where(before, high, middle)
    return np.asarray(0.5 * (low + high))
