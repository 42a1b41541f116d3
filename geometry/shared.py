"""Which pieces two curves have in common: edges, arcs or knot spans that are the same number for number."""

import numpy as np

from geometry.arcs import ArcChain
from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.bspline import Spline
from geometry.curve import Curve
from geometry.polyline import Polyline

__all__ = ["identical", "shared_pieces"]

_MIX = np.uint64(0x9E3779B97F4A7C15)  # 2^64 over the golden ratio, odd: D. E. Knuth, The Art of Computer Programming 3
_TRY_BACK = 0.5  # of the pieces: where fewer agree, the other direction of travel is tried as well


def shared_pieces(a: Curve, b: Curve) -> tuple[BoolArray, BoolArray]:
    """Tell which pieces of two curves the other one has too, travelled either way.

    Args:
        a, b: polyline, arc chain or spline, finite.

    Returns:
        For every edge, arc or non-empty knot span of a and of b whether it was found in the other; some that are there
        may not be found. Of curves of different kinds nothing is.
    """
    mine, theirs = _rows(a), _rows(b)
    if mine is None or theirs is None or type(a) is not type(b) or mine.shape[1] != theirs.shape[1]:
        count = [0 if rows is None else len(rows) for rows in (mine, theirs)]
        return np.zeros(count[0], dtype=np.bool_), np.zeros(count[1], dtype=np.bool_)
    found = _match(mine, theirs)
    if found[0].mean() < _TRY_BACK:
        assert isinstance(b, Polyline | ArcChain | Spline)
        turned = _rows(b.reversed())
        assert turned is not None
        back = _match(mine, turned)
        if back[0].sum() > found[0].sum():
            return back[0], back[1][::-1]
    return found


def identical(a: Curve, b: Curve) -> bool:
    """Tell whether two curves are the same, piece by piece and number for number, in the same order; never if empty."""
    mine, theirs = _rows(a), _rows(b)
    return type(a) is type(b) and mine is not None and theirs is not None and np.array_equal(mine, theirs)


def _rows(curve: Curve) -> FloatArray | None:
    """Return the numbers that make up every piece, shape (n, k); None where there are no pieces."""
    if isinstance(curve, Spline):
        pieces = curve.beziers
        return pieces.reshape(len(pieces), -1)
    if isinstance(curve, Polyline | ArcChain):
        path = curve.path()
        if len(path) < 2:
            return None
        bulges = [curve.bulges] if isinstance(curve, ArcChain) else []
        return np.column_stack([path[:-1], path[1:], *bulges])
    return None


def _match(mine: FloatArray, theirs: FloatArray) -> tuple[BoolArray, BoolArray]:
    """Tell which rows of either array are rows of the other; equal keys are only candidates."""
    keys, others = _keys(mine), _keys(theirs)
    order = np.argsort(others)
    at: IntArray = order[np.minimum(np.searchsorted(others[order], keys), len(order) - 1)]
    same = (mine == theirs[at]).all(axis=1)
    found = np.zeros(len(theirs), dtype=np.bool_)
    found[at[same]] = True
    return same, found


def _keys(rows: FloatArray) -> IntArray:
    """Return a number for every row, equal for equal rows."""
    whole = np.ascontiguousarray(rows + 0.0).view(np.uint64)  # 0.0 and -0.0 are equal
    key = np.zeros(len(rows), dtype=np.uint64)
    for column in whole.T:
        key = (key ^ column) * _MIX
        key ^= key >> np.uint64(29)
    return key.view(np.int64)
