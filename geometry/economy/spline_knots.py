"""Fits with foot parameters and levelled weights, and their knots: added, removed one after another, laid anew.

Ratios are distances over the distance allowed at the same sample; 1 is just allowed.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.spline_fit import Basis, Bend, Fit, measure, solve
from geometry.economy.spline_shape import Guard, Verdict
from geometry.economy.spline_source import Source, runs_of
from geometry.economy.spline_spacing import least_spans, place_number

__all__ = ["State", "add_where_over", "bent", "halved", "level", "pieces_at", "refit", "remove", "respaced"]

_SLIDE = 1e-3  # share of a tangential residual that counts once parameters follow the foot points
_LEVELLINGS = 2  # refits with levelled weights before knots are put back
_HOPELESS = 4.0  # ratio over which levelling is not tried
_SPARE = 0.3  # spans more than errors alike would need, when knots are laid anew
_LONG = 200  # knots a piece from which on all fairness lost is put down to the nearest knot taken out
_BARREN = 8  # rounds in a row without a knot removed after which removal ends
_APART, _LATER_APART = 5, 8  # knots between those taken out in one round, at first and after six rounds
_REACH = 5  # knots taken out farther than this from what went wrong, in knots, are not blamed for it


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
    runs = runs_of(half)
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


def respaced(source: Source, state: State, allowed: FloatArray, guard: Guard) -> State | None:
    """Lay the knots anew so that all spans err alike, with fewer of them where the errors leave room.

    The error of a span goes with its width to the power degree + 1, so pieces whose spans err by ratios r need
    sum r^(1 / (degree + 1)) spans. Pieces that come out over or less fair keep their knots.
    Returns None if nothing was gained.
    """
    order = 1.0 / (source.degree + 1)
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
    new_kept, old_kept = good[pieces_at(source, trial.inner)], ~good[pieces_at(source, old.inner)]
    inner = np.sort(np.concatenate([trial.inner[new_kept], old.inner[old_kept]]))
    here = good[source.piece]
    return refit(
        source, Basis(source, inner), np.where(here, trial.u, old.u), np.where(here, trial.weight, old.weight), allowed
    )


def pieces_at(source: Source, u: FloatArray) -> IntArray:
    """Return the piece of every parameter."""
    return np.maximum(np.searchsorted(source.low, u, side="right") - 1, 0)


def number_of_spans(source: Source, state: State) -> IntArray:
    """Return how many spans every piece of a fit has."""
    if source.periodic:
        return np.array([len(state.inner)])
    return 1 + np.bincount(pieces_at(source, state.inner), minlength=len(source.low))


def _need(source: Source, state: State, order: float) -> tuple[FloatArray, IntArray]:
    """Return the spacing that would make all spans of a fit err by just what is allowed, and the spans it takes."""
    basis = state.fit.basis
    span, _ = basis.locate(state.u)
    runs = runs_of(span)
    peak = np.full(len(basis.start), 1e-4)
    peak[span[runs]] = np.maximum(np.maximum.reduceat(state.ratio, runs), 1e-4)
    share = np.clip(peak, 0.02, 50.0) ** order
    a, b = basis.inside
    number = np.bincount(basis.piece[a:b], weights=share[a:b], minlength=len(source.low))
    return (basis.width / share)[span], np.ceil(number + _SPARE).astype(np.intp)


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


def remove(
    source: Source, state: State, allowed: FloatArray, guard: Guard, strict: bool = False, rounds: int = 40
) -> State:
    """Take out knots one here and one there, as long as the fit stays within what is allowed and fair.

    Every round removes the least significant knots, several spans apart, and puts back those near which the refit
    is over or less fair than the source; a knot put back is left alone until a close neighbour goes. Accepting and
    refusing are local, so the number of rounds does not grow with the length of the profile; unless it is strict, a
    little fairness may be lost on the way, for which no knot can be blamed.
    """
    strict = strict or len(state.inner) > _LONG * len(source.low)
    frozen = np.zeros(len(state.inner), dtype=bool)
    verdict = guard.check(state.fit, state.u)
    least = source.degree + 2 if source.periodic else 0
    barren = 0
    for turn in range(rounds):
        inner = state.inner
        if frozen.all() or len(inner) <= least:
            break
        piece = np.maximum(np.searchsorted(source.low, inner, side="right") - 1, 0)
        distance = _APART if turn < 6 else _LATER_APART
        value = np.where(frozen, np.inf, significance(state))
        out = _apart(value, np.arange(len(inner)) + distance * piece, distance)
        if source.periodic and len(inner) - out.sum() < least:
            out[np.flatnonzero(out)[len(inner) - least :]] = False
        if not out.any():
            break
        tried = out.copy()
        good = _without(source, state, out, allowed, guard, verdict, strict)
        if good is None:
            frozen |= tried
            barren += 1
            if barren == _BARREN:
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
    source: Source, state: State, out: BoolArray, allowed: FloatArray, guard: Guard, base: Verdict, strict: bool
) -> tuple[State, Verdict] | None:
    """Refit without some knots; `out` loses those that have to stay. None if all have to.

    Args:
        base: fairness of the state, which is let pass.
        strict: whether a loss of fairness that no removed knot is near to is blamed on the nearest all the same.

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
        over = trial.ratio > 1.0
        blamed = _blamed(inner, out, state.u[over])
        if strict and not blamed.any() and (over & (state.ratio <= 1.0)).any():
            blamed = _nearest(inner, out, state.u[over & (state.ratio <= 1.0)])
        if not blamed.any():
            verdict = guard.check(trial.fit, trial.u, base)
            wrong = state.u[verdict.where]
            blamed = _blamed(inner, out, wrong)
            if strict and not blamed.any() and verdict.worse.any():
                blamed = _nearest(inner, out, wrong)
            if not blamed.any():
                return trial, verdict
        out[blamed] = False
        if not out.any():
            break
    return None


def _nearest(inner: FloatArray, out: BoolArray, wrong: FloatArray) -> BoolArray:
    """Return the knots of `out` that lie nearest to wrong places."""
    taken = np.flatnonzero(out)
    blamed = np.zeros(len(inner), dtype=bool)
    between = 0.5 * (inner[taken][1:] + inner[taken][:-1])
    blamed[taken[np.searchsorted(between, wrong)]] = True
    return blamed


def _blamed(inner: FloatArray, out: BoolArray, wrong: FloatArray, reach: int = _REACH) -> BoolArray:
    """Tell which of the knots taken out are nearest to places that went wrong, if within a few knots of them.

    Args:
        wrong: parameters of those places, ascending.
    """
    blamed = np.zeros(len(inner), dtype=bool)
    gone = np.flatnonzero(out)
    if gone.size and wrong.size:
        middle = 0.5 * (inner[gone[1:]] + inner[gone[:-1]])
        nearest = gone[np.searchsorted(middle, wrong)]
        blamed[nearest[np.abs(np.searchsorted(inner, wrong) - nearest) <= reach]] = True
    return blamed
