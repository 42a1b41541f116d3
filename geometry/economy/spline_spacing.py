"""How far apart the knots of a fitted spline may stand, from coarse fits, and knots laid by that."""

import numpy as np
from scipy.linalg.lapack import dptsv

from geometry.arrays import FloatArray, IntArray
from geometry.economy.spline_fit import Basis, solve
from geometry.economy.spline_source import Source, runs_of

__all__ = [
    "bend_knots",
    "filled",
    "least_spans",
    "place",
    "place_number",
    "sampled",
    "smoothed",
    "spacing",
    "sparse",
    "uniform",
]

_COARSE = 16  # samples a span of coarse fits
_FILL = 0.9  # knots between bends for every one that the spacing asks for
_GRADE = 4.0  # times that a span between bends may be as long as its neighbour
_SLIDE = 0.05  # share of a tangential residual that counts while parameters are still those of the source


def _span_peaks(basis: Basis, span: IntArray, ratio: FloatArray) -> FloatArray:
    """Return the largest ratio over each span and its neighbours in the same piece, shape (s,)."""
    runs = runs_of(span)
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


def spacing(source: Source, allowed: float) -> FloatArray:
    """Return the knot spacing that the curve needs at every sample, shape (n,), drawing units.

    Uniform fits, each twice as fine as the one before; a sample takes its spacing from the first that is good
    enough around it, corrected by the order of the error. Nothing is differentiated, and features smaller than
    what is allowed ask for no knots.

    Args:
        allowed: distance, drawing units.
    """
    need = np.zeros(len(source.along))
    least = source.degree + 3 if source.periodic else 1
    number, finest = np.full(len(source.low), least), np.maximum(source.spans, least)
    smallest = source.lengths / source.spans
    active = np.arange(len(source.low))
    while active.size:
        part = source if len(active) == len(source.low) else source.only(np.isin(np.arange(len(source.low)), active))
        few = part.few(_COARSE * int(number[active].max()))
        found = _good(part.picked(few), number[active], allowed)
        at = np.flatnonzero(np.isin(source.piece, active))
        now = np.repeat(found, np.diff(np.append(few, len(at))))
        fresh = need[at] == 0.0
        need[at] = np.where(fresh, now, need[at])
        still = np.maximum.reduceat((need[at] == 0.0).astype(np.int8), part.first[:-1]) > 0
        active = active[still & (number[active] < finest[active])]
        number[active] = np.minimum(2 * number[active], finest[active])
    return np.maximum(need, smallest[source.piece])


def _good(source: Source, number: IntArray, allowed: float) -> FloatArray:
    """Return the spacing needed at samples about which a uniform fit is good enough, 0 elsewhere, shape (n,)."""
    basis = Basis(source, uniform(source, number))
    fit = solve(source, basis, source.along, source.step, _SLIDE)
    if fit is None:
        return np.zeros(len(source.along))
    span, t = basis.locate(source.along)
    r = fit.at(span, t, 0)[0] - source.point
    r -= (r * source.tangent).sum(axis=0) * source.tangent
    peaks = _span_peaks(basis, span, np.sqrt((r * r).sum(axis=0)) / allowed)[span]
    width = (source.lengths / number)[source.piece]
    order = 1.0 / (source.degree + 1)
    return np.where(peaks <= 1.0, width * np.clip(np.maximum(peaks, 1e-12) ** -order, 0.5, 2.0), 0.0)


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


def sparse(source: Source, need: FloatArray, per_span: int) -> IntArray:
    """Return samples of which about `per_span` lie on every span of knots that a spacing field asks for."""
    f = per_span * _coordinate(source, need)
    step = np.floor(f)
    chosen = np.diff(step, prepend=-1.0) != 0.0
    chosen[source.first[:-1]] = chosen[source.first[1:] - 1] = True
    return np.flatnonzero(chosen)


def sampled(source: Source, inner: FloatArray, per_span: int) -> Source:
    """Return the source with some of its samples only, about `per_span` to a span between given interior knots."""
    edges = np.unique(np.concatenate([inner, source.low, source.high]))
    step = np.floor(per_span * np.interp(source.along, edges, np.arange(len(edges), dtype=np.float64)))
    chosen = np.diff(step, prepend=-1.0) != 0.0
    chosen[source.first[:-1]] = chosen[source.first[1:] - 1] = True
    return source.picked(np.flatnonzero(chosen))


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


def filled(source: Source, need: FloatArray, breaks: FloatArray) -> FloatArray:
    """Return interior knots with more laid between them where a spacing field asks for that."""
    at, f = source.along, _coordinate(source, need)
    if source.periodic:
        at = np.append(at, source.high[0])
        f = np.append(f, f[-1] + (source.high[0] - source.along[-1]) / need[-1])
    else:
        f = f + np.append(0.0, np.cumsum(f[source.first[1:-1] - 1]))[source.piece]
    edges = np.unique(np.concatenate([breaks, source.low, source.high]))
    ends = np.interp(edges, at, f)
    number = np.maximum(np.ceil(_FILL * np.diff(ends)), 1.0).astype(np.intp)
    interval = np.repeat(np.arange(len(number)), number - 1)
    order = np.arange(len(interval)) - (np.cumsum(number - 1) - (number - 1))[interval] + 1
    more = ends[interval] + np.diff(ends)[interval] * (order / number[interval])
    return np.unique(np.concatenate([breaks, np.interp(more, f, at)]))


def bend_knots(source: Source, within: FloatArray, limit: float, graded: bool) -> FloatArray:
    """Return interior knots between which the curvature vector is nearly linear, as it is on a span of a cubic.

    Stretches are cut where the vector is farthest from the chord of its own values until none is farther than
    allowed, so that knots fall on the places where curvature begins and ends to change.

    Args:
        within: largest distance from linear for every piece, 1 / drawing units, positive, shape (pieces,).
        limit: curvature from which on the vector is cut off, 1 / drawing units.
    """
    size = np.sqrt((source.bend * source.bend).sum(axis=0))
    value = source.bend * np.minimum(1.0, limit / np.maximum(size, 1e-300))
    at, piece, n = source.along, source.piece, len(source.along)
    if source.periodic:
        at, value, piece = np.append(at, source.high[0]), np.append(value, value[:, :1], axis=1), np.append(piece, 0)
        breaks = np.arange(9) * n // 8
    else:
        breaks = np.stack([source.first[:-1], source.first[1:] - 1], axis=1).ravel()
    ends = np.array([n]) if source.periodic else breaks
    share = within[piece]
    while True:
        size = np.diff(breaks)
        a, b = np.repeat(breaks[:-1], size), np.repeat(breaks[1:], size)
        i = np.arange(breaks[0], breaks[-1])
        x = (at[i] - at[a]) / np.maximum(at[b] - at[a], 1e-300)
        off = value[:, i] - value[:, a] - x * (value[:, b] - value[:, a])
        ratio = np.where(piece[a] == piece[b], np.sqrt((off * off).sum(axis=0)) / share[i], 0.0)
        worst = np.repeat(np.maximum.reduceat(ratio, breaks[:-1]), size)
        hit = i[(ratio == worst) & (ratio > 1.0) & (i > a)]
        more = np.union1d(breaks, hit)
        if len(more) == len(breaks):
            break
        breaks = more
    if graded:
        breaks = _graded(breaks, at, piece)
    return np.asarray(at[np.setdiff1d(breaks, ends)])


def _graded(breaks: IntArray, at: FloatArray, piece: IntArray) -> IntArray:
    """Return breaks with more among them, so that none is followed by a stretch many times as long as the last."""
    while True:
        width = np.diff(at[breaks])
        inside = piece[breaks[1:]] == piece[breaks[:-1]]
        before = np.where(np.append(False, inside[:-1]), np.append(0.0, width[:-1]), np.inf)
        after = np.where(np.append(inside[1:], False), np.append(width[1:], 0.0), np.inf)
        long = inside & (width > _GRADE * np.minimum(before, after)) & (np.diff(breaks) > 1)
        if not long.any():
            return breaks
        breaks = np.union1d(breaks, (breaks[:-1][long] + breaks[1:][long]) // 2)
