"""Where the knots of a fitted spline go: a spacing field from coarse fits, then removal of one knot after another.

Ratios are distances over the distance allowed at the same sample; 1 is just allowed.
"""

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dptsv

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.spline_fit import Basis, Bend, Fit, measure, solve
from geometry.economy.spline_shape import Guard, Verdict
from geometry.economy.spline_source import Source

__all__ = ["State", "add_where_over", "bent", "level", "place", "refit", "remove", "smoothed", "spacing", "uniform"]

_SLIDE = 1e-3  # share of a tangential residual that counts once parameters follow the foot points
_LEVELLINGS = 2  # refits with levelled weights before knots are put back
_HOPELESS = 4.0  # ratio over which levelling is not tried
SPARE = 0.3
BARREN = 6
DIST, DIST2 = 5, 8
_REACH = 5  # knots taken out farther than this from what went wrong, in knots, are not blamed for it
_SLIDE_FIRST = 0.05  # the same while parameters are still those of the source


@dataclass(frozen=True, eq=False)
class State:
    """A fit with the foot parameters, weights and ratios of all samples, each of shape (n,)."""

    fit: Fit
    u: FloatArray
    weight: FloatArray
    ratio: FloatArray

    @property
    def inner(self) -> FloatArray:
        """Interior knots of the fit."""
        return self.fit.basis.inner


def refit(
    source: Source, basis: Basis, u: FloatArray, weight: FloatArray, allowed: FloatArray, bend: Bend | None = None
) -> State | None:
    """Fit once and move the parameters one step on."""
    fit = solve(source, basis, u, weight, _SLIDE, bend)
    if fit is None:
        return None
    new, distance = measure(source, fit, u)
    return State(fit, new, weight, distance / allowed)


def level(source: Source, state: State, allowed: FloatArray) -> State | None:
    """Put more weight where the ratio is large, less where it is small, and fit again."""
    span, t = state.fit.basis.locate(state.u)
    half = 2 * span + (t > 0.5)
    runs = np.flatnonzero(np.diff(half, prepend=-1))
    peak = np.maximum.reduceat(state.ratio, runs)
    wide = peak.copy()
    wide[1:] = np.maximum(wide[1:], peak[:-1])
    wide[:-1] = np.maximum(wide[:-1], peak[1:])
    counts = np.diff(np.append(runs, len(half)))
    factor = np.repeat((0.15 + np.minimum(wide, 2.0)) ** 1.5, counts)
    weight = np.clip(state.weight * factor, 0.01 * source.step, 30.0 * source.step)
    return refit(source, state.fit.basis, state.u, np.maximum(weight, 1e-300), allowed)


def bent(source: Source, state: State, allowed: FloatArray, pieces: BoolArray, share: float) -> State | None:
    """Fit again with even weights in some pieces, and second derivatives there that follow the source's curvature.

    Args:
        share: of the square of a span that a residual of the second derivative is multiplied by.
    """
    basis, here = state.fit.basis, pieces[source.piece]
    after: State | None = state
    for _ in range(3):
        if after is None:
            break
        span, t = basis.locate(after.u)
        slope = after.fit.at(span, t, 1)[1]
        weight = np.where(here, source.step, after.weight)
        height = share * basis.width[span] ** 2
        bend = Bend(np.where(here, weight * height**2, 0.0), np.sqrt((slope * slope).sum(axis=0)))
        after = refit(source, basis, after.u, weight, allowed, bend)
    return after


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
        fit = solve(source, basis, source.along, source.step, _SLIDE_FIRST)
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


def respaced(source: Source, state: State, allowed: FloatArray, guard: Guard) -> State | None:
    """Lay the knots anew so that all spans err alike, with fewer of them where the errors leave room.

    The error of a span goes with its width to the power degree + 1, so pieces whose spans err by ratios r need
    sum r^(1 / (degree + 1)) spans. Pieces that come out over or less fair keep their knots.
    Returns None if nothing was gained.
    """
    order = 1.0 / (source.degree + 1)
    pieces = len(source.low)
    old, trial = state, state
    before = number_of_spans(source, state)
    need, number = _need(source, state, order)
    number = np.minimum(number, before - 1)
    if np.all(number < least_spans(source)):
        return None
    number = np.maximum(number, least_spans(source))
    for turn in range(3):
        again = refit(source, Basis(source, place_number(source, need, number)), trial.u, source.step, allowed)
        for _ in range(2):
            again = None if again is None else level(source, again, allowed)
        if again is None:
            return None
        trial = again
        peak = np.maximum.reduceat(trial.ratio, source.first[:-1])
        if np.all((peak <= 1.0) | (peak > 3.0)) or turn == 2:
            break
        need, _ = _need(source, trial, order)
    good = (peak <= 1.0) & (number < before) & ~guard.check(trial.fit, trial.u).worse
    if not good.any():
        return None
    if good.all():
        return trial
    inner = np.sort(np.concatenate([trial.inner[good[_pieces(source, trial.inner)]], old.inner[~good[_pieces(source, old.inner)]]]))
    here = good[source.piece]
    return refit(source, Basis(source, inner), np.where(here, trial.u, old.u), np.where(here, trial.weight, old.weight), allowed)


def _pieces(source: Source, u: FloatArray) -> IntArray:
    return np.maximum(np.searchsorted(source.low, u, side="right") - 1, 0)


def least_spans(source: Source) -> int:
    """Return the fewest spans that a piece can have."""
    return source.degree + 2 if source.periodic else 1


def number_of_spans(source: Source, state: State) -> IntArray:
    """Return how many spans every piece of a fit has."""
    if source.periodic:
        return np.array([len(state.inner)])
    return 1 + np.bincount(_pieces(source, state.inner), minlength=len(source.low))


def _need(source: Source, state: State, order: float) -> tuple[FloatArray, IntArray]:
    """Return the spacing that would make all spans of a fit err by just what is allowed, and the spans it takes."""
    basis = state.fit.basis
    span, _ = basis.locate(state.u)
    runs = np.flatnonzero(np.diff(span, prepend=-1))
    peak = np.full(len(basis.start), 1e-4)
    peak[span[runs]] = np.maximum(np.maximum.reduceat(state.ratio, runs), 1e-4)
    share = np.clip(peak, 0.02, 50.0) ** order
    a, b = basis.inside
    number = np.bincount(basis.piece[a:b], weights=share[a:b], minlength=len(source.low))
    return (basis.width / share)[span], np.ceil(number + SPARE).astype(np.intp)


def add_where_over(source: Source, state: State, closest: FloatArray) -> FloatArray | None:
    """Return interior knots with every span halved that holds a ratio over 1; None if nothing can be added.

    Args:
        closest: least width of a span for every piece, shape (pieces,).
    """
    basis = state.fit.basis
    span, _ = basis.locate(state.u)
    over = np.zeros(len(basis.start), dtype=bool)
    over[span[state.ratio > 1.0]] = True
    return halved(source, basis, over, closest)


def halved(source: Source, basis: Basis, which: BoolArray, closest: FloatArray) -> FloatArray | None:
    """Return interior knots with the given spans halved where that leaves them wide enough, else None."""
    which = which & (basis.width >= 2.0 * closest[basis.piece])
    middle = basis.start[which] + 0.5 * basis.width[which]
    if source.periodic:
        middle = np.mod(middle, source.high[0])
    if not middle.size:
        return None
    merged = np.unique(np.concatenate([basis.inner, middle]))
    if source.periodic:
        merged = merged[np.diff(np.append(merged, merged[0] + source.high[0])) > 1e-9 * source.high[0]]
    return merged


def significance(state: State) -> FloatArray:
    """Return how much each interior knot matters: the jump of the highest derivative times a power of the widths."""
    basis = state.fit.basis
    p = state.fit.coefficients.shape[0] - 1
    top = state.fit.coefficients[p] / basis.width**p
    jump = np.linalg.norm(np.diff(top, axis=1), axis=0)
    left, right = basis.width[:-1], basis.width[1:]
    value = jump * (left * right / (left + right)) ** p
    a, b = basis.inside
    if len(basis.fixed):
        return value[basis.piece[1:] == basis.piece[:-1]]
    return value[a - 1 : b - 1]


def _apart(value: FloatArray, slot: IntArray, distance: int) -> BoolArray:
    """Choose small values no two of which stand within `distance` slots; infinite ones are never chosen."""
    row = np.full(int(slot[-1]) + 1 + 2 * distance, np.inf)
    row[slot + distance] = value
    chosen = np.zeros(len(row), dtype=bool)
    size = len(row)
    for _ in range(3):
        least = row.copy()
        for k in range(1, distance + 1):
            np.minimum(least[k:], row[: size - k], out=least[k:])
            np.minimum(least[:-k], row[k:], out=least[:-k])
        now = (row == least) & np.isfinite(row)
        if not now.any():
            break
        chosen |= now
        taken = now.copy()
        for k in range(1, distance + 1):
            taken[k:] |= now[: size - k]
            taken[:-k] |= now[k:]
        row[taken] = np.inf
    return chosen[slot + distance]


def remove(source: Source, state: State, allowed: FloatArray, guard: Guard, rounds: int = 40) -> State:
    """Take out knots one here and one there, as long as the fit stays within what is allowed and fair.

    Every round removes the least significant knots, several spans apart, and puts back those near which the refit
    is over or less fair than the source; a knot put back is left alone until a close neighbour goes. Accepting and
    refusing are local, so the number of rounds does not grow with the length of the profile.
    """
    frozen = np.zeros(len(state.inner), dtype=bool)
    verdict = guard.check(state.fit, state.u)
    least = source.degree + 2 if source.periodic else 0
    barren = 0
    for turn in range(rounds):
        inner = state.inner
        if frozen.all() or len(inner) <= least:
            break
        piece = np.maximum(np.searchsorted(source.low, inner, side="right") - 1, 0)
        distance = DIST if turn < 6 else DIST2
        value = np.where(frozen, np.inf, significance(state))
        out = _apart(value, np.arange(len(inner)) + distance * piece, distance)
        if source.periodic and len(inner) - out.sum() < least:
            out[np.flatnonzero(out)[len(inner) - least :]] = False
        if not out.any():
            break
        tried = out.copy()
        good = _without(source, state, out, allowed, guard, verdict)
        if good is None:
            frozen |= tried
            barren += 1
            if barren == BARREN:
                break
            continue
        barren = 0
        state, verdict = good
        frozen |= tried & ~out
        if turn < 30:
            near = out.copy()
            for k in (1, 2):
                near[k:] |= out[:-k]
                near[:-k] |= out[k:]
            frozen &= ~near
        frozen = frozen[~out]
    return state


def _without(
    source: Source, state: State, out: BoolArray, allowed: FloatArray, guard: Guard, base: Verdict
) -> tuple[State, Verdict] | None:
    """Refit without some knots; `out` loses those that have to stay. None if all have to.

    Args:
        base: fairness of the state, which is let pass.

    Returns:
        The new state and its fairness.
    """
    inner = state.inner
    for _ in range(5):
        trial = refit(source, Basis(source, inner[~out]), state.u, state.weight, allowed)
        if trial is None:
            return None
        for _ in range(_LEVELLINGS):
            if trial.ratio.max() <= 1.0 or trial.ratio.max() > _HOPELESS:
                break
            trial = level(source, trial, allowed) or trial
        blamed = _blamed(inner, out, state.u[trial.ratio > 1.0])
        if not blamed.any():
            verdict = guard.check(trial.fit, trial.u, base)
            blamed = _blamed(inner, out, state.u[verdict.where])
            if not blamed.any():
                return trial, verdict
        out[blamed] = False
        if not out.any():
            break
    return None


def _blamed(inner: FloatArray, out: BoolArray, wrong: FloatArray) -> BoolArray:
    """Tell which of the knots taken out are nearest to places that went wrong, if within a few knots of them.

    Args:
        wrong: parameters of those places, ascending.
    """
    blamed = np.zeros(len(inner), dtype=bool)
    gone = np.flatnonzero(out)
    if gone.size and wrong.size:
        middle = 0.5 * (inner[gone[1:]] + inner[gone[:-1]])
        nearest = gone[np.searchsorted(middle, wrong)]
        blamed[nearest[np.abs(np.searchsorted(inner, wrong) - nearest) <= _REACH]] = True
    return blamed
