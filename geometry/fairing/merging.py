"""Stretches of points that one circle explains, found by merging neighbours."""

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.fairing.tangent_chain import ComplexArray

__all__ = ["merged_stretches", "squares_of"]

_FIRST = 4  # points in a stretch to begin with
_PENALTY = 20.0  # gain in chi-square that keeps two stretches apart: a circle more has three numbers
_NEWTON = 8


def merged_stretches(points: ComplexArray, piece: IntArray, scale: FloatArray) -> IntArray:
    """Return where stretches start that one circle or line explains each, shape (k,).

    Neighbours are merged where that costs least, many at a time, until every merger would cost too much. Only sums over
    stretches are kept, so that a round takes as long as there are stretches.

    Args:
        points: in order of travel, shape (n,).
        piece: piece of every point, not decreasing, shape (n,); no stretch reaches over two.
        scale: chi-square of a squared distance of 1 in each piece, shape (p,).
    """
    first = np.searchsorted(piece, np.arange(len(scale)))
    rank = np.arange(len(points)) - first[piece]
    size = np.bincount(piece, minlength=len(scale))[piece]
    starts = np.flatnonzero((rank % _FIRST == 0) & ((rank == 0) | (rank + _FIRST // 2 < size)))
    sums = _sums(points, starts)
    alone = _squares(sums)
    while len(starts) > 1:
        same = piece[starts[1:]] == piece[starts[:-1]]
        both = _joined(sums[:, :-1], sums[:, 1:])
        together = _squares(both)
        cost = np.where(same, (together - alone[:-1] - alone[1:]) * scale[piece[starts[:-1]]], np.inf)
        merging = np.flatnonzero(_least_of_neighbours(cost) & (cost < _PENALTY))
        if not len(merging):
            break
        sums[:, merging], alone[merging] = both[:, merging], together[merging]
        starts, alone = np.delete(starts, merging + 1), np.delete(alone, merging + 1)
        sums = np.delete(sums, merging + 1, axis=1)
    return starts


def squares_of(points: ComplexArray, starts: IntArray) -> float:
    """Return about the least sum of squared distances that stretches have from circles of their own."""
    return float(_squares(_sums(points, starts)).sum())


def _least_of_neighbours(cost: FloatArray) -> BoolArray:
    before, after = np.append(np.inf, cost[:-1]), np.append(cost[1:], np.inf)
    return (cost <= before) & (cost < after)


def _sums(points: ComplexArray, starts: IntArray) -> FloatArray:
    """Return counts, centres x and y, and sums of xx, xy, yy, xz, yz, zz about the centres, z = xx + yy, (9, k)."""
    counts = np.diff(np.append(starts, len(points)))
    centre = np.add.reduceat(points, starts) / counts
    off = points - np.repeat(centre, counts)
    x, y = off.real, off.imag
    z = x * x + y * y
    rows = np.stack([x * x, x * y, y * y, x * z, y * z, z * z])
    return np.vstack([counts, centre.real, centre.imag, np.add.reduceat(rows, starts, axis=1)])


def _joined(left: FloatArray, right: FloatArray) -> FloatArray:
    """Return the sums over two stretches each about their common centre."""
    count = left[0] + right[0]
    centre = (left[0] * left[1:3] + right[0] * right[1:3]) / count
    total = np.zeros((6, left.shape[1]))
    for part in (left, right):
        n, (a, b), (xx, xy, yy, xz, yz, zz) = part[0], part[1:3] - centre, part[3:]
        z, c = xx + yy, a * a + b * b
        total += [
            xx + n * a * a,
            xy + n * a * b,
            yy + n * b * b,
            xz + 2.0 * (a * xx + b * xy) + a * z + n * a * c,
            yz + 2.0 * (a * xy + b * yy) + b * z + n * b * c,
            zz + 4.0 * (a * a * xx + b * b * yy + 2.0 * a * b * xy + a * xz + b * yz) + 2.0 * c * z + n * c * c,
        ]
    return np.vstack([count, centre, total])


def _squares(sums: FloatArray) -> FloatArray:
    """Return about the sum of squared distances of stretches from their circles, by Taubin's method, shape (k,).

    The least root of its characteristic polynomial is the mean of (z - ...)^2 over the mean of the squared gradient, to
    first order the mean squared distance; it is found by Newton's method from 0 (from memory).
    """
    xx, xy, yy, xz, yz, zz = sums[3:] / sums[0]
    z = xx + yy
    cross = xx * yy - xy * xy
    variance = zz - z * z
    a3, a2 = 4.0 * z, -3.0 * z * z - zz
    a1 = variance * z + 4.0 * cross * z - xz * xz - yz * yz
    a0 = xz * (xz * yy - yz * xy) + yz * (yz * xx - xz * xy) - variance * cross
    root = np.zeros_like(z)
    for _ in range(_NEWTON):
        value = a0 + root * (a1 + root * (a2 + root * a3))
        slope = a1 + root * (2.0 * a2 + 3.0 * root * a3)
        root = root - value / np.where(np.abs(slope) > 1e-300, slope, 1e-300)
    return np.asarray(np.maximum(root, 0.0) * sums[0])
