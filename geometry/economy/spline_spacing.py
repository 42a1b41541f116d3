"""How far apart the knots of a fitted spline may stand, from coarse fits, and knots laid by that."""

import numpy as np
from scipy.linalg.lapack import dptsv

from geometry.arrays import FloatArray, IntArray
from geometry.economy.spline_fit import Basis, solve
from geometry.economy.spline_source import Source

__all__ = ["least_spans", "place", "place_number", "smoothed", "spacing", "uniform"]

_SLIDE = 0.05  # share of a tangential residual that counts while parameters are still those of the source


def _span_peaks(basis: Basis, span: IntArray, ratio: FloatArray) -> FloatArray:
    """Return the largest ratio over each span and its neighbours in the same piece, shape (s,)."""
    runs = np.flatnonzero(np.diff(span, prepend=-1))
    peak = np.zeros(len(basis.start))
    peak[span[runs]] = np.maximum.reduceat(ratio, runs)
    same = basis.piece[1:] == basis.piece[:-1]
    wide = peak.copy()
    wide[1:] = np.maximum(wide[1:], np.where(same, peak[:-1], 0.0))
    wide[:-1] = np.maximum(wide[:-1], np.where(same, peak[1:], 0.0))
    return wide


def uniform(source: Source, number: IntArray) -> FloatArray:
    """Return interior knots that cut piece i into number[i] equal spans."""
    if source.periodic:
        return np.arange(number[0]) * (source.high[0] / number[0])
    piece = np.repeat(np.arange(len(number)), number - 1)
    before = np.cumsum(number - 1) - (number - 1)
    index = np.arange(len(piece)) - before[piece] + 1
    return source.low[piece] + index * (source.lengths / number)[piece]


def spacing(source: Source, allowed: FloatArray) -> FloatArray:
    """Return the knot spacing that the curve needs at every sample, shape (n,), drawing units.

    Uniform fits, each twice as fine as the one before; a sample takes its spacing from the first that is good
    enough around it, corrected by the order of the error. Nothing is differentiated, and features smaller than
    what is allowed ask for no knots.
    """
    order = 1.0 / (source.degree + 1)
    need = np.full(len(source.along), np.nan)
    least = source.degree + 3 if source.periodic else 1
    number = np.full(len(source.low), least)
    finest = np.maximum(source.spans, least)
    open_ = np.ones(len(need), dtype=bool)
    while True:
        basis = Basis(source, uniform(source, number))
        fit = solve(source, basis, source.along, source.step, _SLIDE)
        if fit is not None:
            span, t = basis.locate(source.along)
            r = fit.at(span, t, 0)[0] - source.point
            r -= (r * source.tangent).sum(axis=0) * source.tangent
            ratio = np.sqrt((r * r).sum(axis=0)) / allowed
            peaks = _span_peaks(basis, span, ratio)[span]
            good = open_ & (peaks <= 1.0)
            width = (source.lengths / number)[source.piece]
            need[good] = (width * np.clip(np.maximum(peaks, 1e-12) ** -order, 0.5, 2.0))[good]
            open_ &= ~good
        finer = np.zeros(len(number), dtype=bool)
        finer[source.piece[open_]] = True
        finer &= number < finest
        if not finer.any():
            break
        number = np.where(finer, np.minimum(2 * number, finest), number)
    smallest = (source.lengths / source.spans)[source.piece]
    return np.maximum(np.where(open_, smallest, need), smallest)


def _coordinate(source: Source, need: FloatArray) -> FloatArray:
    """Return the integral of dx / spacing within each piece at every sample, shape (n,)."""
    dx = np.where(source.piece[1:] == source.piece[:-1], np.diff(source.along), 0.0)
    steps = 0.5 * dx * (1.0 / need[1:] + 1.0 / need[:-1])
    total = np.concatenate([[0.0], np.cumsum(steps)])
    return total - total[source.first[:-1]][source.piece]


def smoothed(source: Source, need: FloatArray, reach: float) -> FloatArray:
    """Smooth the logarithm of the spacing over about `reach` spans within each piece, in linear time.

    Minimises the integral of (y - log spacing)^2 + reach^2 (dy / dF)^2 over the knot coordinate F.
    """
    f = _coordinate(source, need)
    df = np.maximum(np.diff(f), 1e-9)
    same = source.piece[1:] == source.piece[:-1]
    tie = np.where(same, reach**2 / df, 0.0)
    mass = np.zeros(len(f))
    mass[1:] += np.where(same, 0.5 * df, 0.0)
    mass[:-1] += np.where(same, 0.5 * df, 0.0)
    mass = np.maximum(mass, 1e-12)
    diagonal = mass.copy()
    diagonal[1:] += tie
    diagonal[:-1] += tie
    _, _, y, info = dptsv(diagonal, -tie, mass * np.log(need))
    return need if info else np.exp(y)


def place(source: Source, need: FloatArray, share: float) -> FloatArray:
    """Return interior knots at equal steps of the knot coordinate, `share` times as many as the field asks for."""
    total = _coordinate(source, need)[source.first[1:] - 1]
    if source.periodic:
        total = total + (source.high[0] - source.along[-1]) / need[-1]
    least = least_spans(source)
    number = np.clip(np.ceil(total * share - 1e-9).astype(np.intp), least, np.maximum(source.spans, least))
    return place_number(source, need, number)


def place_number(source: Source, need: FloatArray, number: IntArray) -> FloatArray:
    """Return interior knots at equal steps of the knot coordinate, for given numbers of spans."""
    f = _coordinate(source, need)
    total = f[source.first[1:] - 1]
    if source.periodic:
        total = total + (source.high[0] - source.along[-1]) / need[-1]
    scaled = f * (number / np.maximum(total, 1e-300))[source.piece]
    if source.periodic:
        ends = np.append(scaled, number[0])
        return np.interp(np.arange(number[0]), ends, np.append(source.along, source.high[0]))
    offset = np.cumsum(number) - number
    return np.interp(_whole(number, offset), scaled + offset[source.piece] + 1e-3 * source.piece, source.along)


def _whole(number: IntArray, offset: IntArray) -> FloatArray:
    """Return the interior whole numbers of every piece on the stretched coordinate of `place`."""
    piece = np.repeat(np.arange(len(number)), number - 1)
    before = np.cumsum(number - 1) - (number - 1)
    index = np.arange(len(piece)) - before[piece] + 1
    return offset[piece] + index + 1e-3 * piece


def least_spans(source: Source) -> int:
    """Return the fewest spans that a piece can have."""
    return source.degree + 2 if source.periodic else 1
