"""Ways to fit the pieces of a profile with few knots: equal spans, or knots laid by the curve's need and thinned."""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.economy.spline_fit import Basis
from geometry.economy.spline_knots import State, add_where_over, bent, halved, level, refit, remove, respaced
from geometry.economy.spline_shape import Guard
from geometry.economy.spline_source import Source
from geometry.economy.spline_spacing import bend_knots, filled, place, sampled, smoothed, spacing, sparse, uniform

__all__ = ["by_bends", "by_need", "evenly", "settled"]

_AIM = 0.985  # share of the chord error that the fit may use; the rest covers what lies between samples
_HOPEFUL = 4.0  # ratio up to which levelling may still bring a fit within the chord error
_BENT = (0.01, 0.03)  # pull of the source's curvature where a thinned fit is not fair
_RESPACED = 2  # times that the knots are laid anew after thinning
_DENSER = 2  # times that knots are laid a third more densely in pieces that start out unfair
_EXTRA = 1.1  # knots to begin with, over what the spacing field asks for
_SAMPLES = 16  # a span, about
_BEND_SAMPLES = 8  # a span between bends
_REPAIRS = 3  # times that knots are added where denser samples show a fit to be unfair


def evenly(
    source: Source, pieces: BoolArray, chord_error: float, number: int
) -> tuple[BoolArray, Source, State | None]:
    """Fit with a number of equal spans a piece those pieces for which that looks hopeful at the first fit."""
    pieces = pieces & (source.spans > number)
    if not pieces.any() or (source.periodic and number < source.degree + 2):
        return pieces, source, None
    part = source.only(pieces)
    part = part.picked(part.few(_SAMPLES * number))
    allowed = np.full(len(part.along), _AIM * chord_error)
    state = refit(part, Basis(part, uniform(part, np.full(len(part.low), number))), part.along, part.step, allowed)
    if state is None:
        return pieces, source, None
    hopeful = np.maximum.reduceat(state.ratio, part.first[:-1]) <= _HOPEFUL
    if not hopeful.any():
        return pieces, source, None
    if not hopeful.all():
        kept = hopeful[part.piece]
        chosen = pieces.copy()
        chosen[np.flatnonzero(pieces)[~hopeful]] = False
        pieces, part, allowed, u = chosen, part.only(hopeful), allowed[kept], state.u[kept]
        basis = Basis(part, uniform(part, np.full(len(part.low), number)))
        state = refit(part, basis, u, part.step, allowed)
    for _ in range(3):
        if state is not None and state.ratio.max() > 1.0:
            state = level(part, state, allowed)
    return pieces, part, state


def by_need(source: Source, chord_error: float, finer: float) -> tuple[Source, State | None]:
    """Lay knots as the chord error asks for them and thin them.

    Args:
        finer: part of the chord error that knots are laid for.

    Returns:
        The samples used, and the fit.
    """
    need = spacing(source, _AIM * chord_error / finer)
    chosen = sparse(source, need, _SAMPLES)
    source, need = source.picked(chosen), need[chosen]
    allowed = np.full(len(source.along), _AIM * chord_error)
    closest = 0.5 * source.lengths / source.spans
    guard = Guard(source, chord_error)
    state = _laid(source, guard, allowed, closest, smoothed(source, need, 0.75))
    if state is None:
        return source, None
    state = _mend(source, remove(source, state, allowed, guard), allowed, closest)
    for _ in range(_RESPACED):
        again = respaced(source, state, allowed, guard)
        if again is None or again.ratio.max() > 1.0:
            break
        state = again
    for share in _BENT:
        worse = guard.check(state.fit, state.u).worse
        if not worse.any():
            break
        trial = bent(source, state, allowed, worse, share)
        if trial is None or trial.ratio.max() > 1.0:
            break
        state = trial
    return source, state


def by_bends(source: Source, chord_error: float, share: float, graded: bool) -> tuple[Source, State | None]:
    """Lay knots where the curvature bends, more where the chord error asks for them, and thin them.

    Such a fit starts out fair, as a rule, where one with knots laid by distance alone swings about the bends.

    Args:
        share: of the prominence of an extremum of curvature that the curvature may differ from linear.
        graded: whether spans grow gradually; that takes more knots and leaves less to chance.

    Returns:
        The samples used, and the fit.
    """
    guard = Guard(source, chord_error)
    inner = bend_knots(source, share * guard.prominence, guard.limit, graded)
    inner = filled(source, spacing(source, _AIM * chord_error), inner)
    if len(inner) >= source.spans.sum() or (source.periodic and len(inner) < source.degree + 2):
        return source, None
    source = sampled(source, inner, _BEND_SAMPLES)
    allowed = np.full(len(source.along), _AIM * chord_error)
    closest = 0.5 * source.lengths / source.spans
    guard = Guard(source, chord_error)
    state = refit(source, Basis(source, inner), source.along, source.step, allowed)
    if state is None:
        return source, None
    state = _mend(source, state, allowed, closest)
    return source, _mend(source, remove(source, state, allowed, guard, strict=True), allowed, closest)


def _laid(source: Source, guard: Guard, allowed: FloatArray, closest: FloatArray, need: FloatArray) -> State | None:
    """Lay knots by the spacing field, some more than it asks for, and more again in pieces that come out unfair."""
    state: State | None = None
    for turn in range(_DENSER + 1):
        state = refit(source, Basis(source, place(source, need, _EXTRA)), source.along, source.step, allowed)
        if state is None:
            break
        state = _mend(source, state, allowed, closest)
        if turn == _DENSER:
            break
        worse = guard.check(state.fit, state.u).worse
        if not worse.any():
            break
        need = np.where(worse[source.piece], 0.75 * need, need)
    return state


def _mend(source: Source, state: State, allowed: FloatArray, closest: FloatArray) -> State:
    """Level, then halve spans that are over, a few times."""
    for _ in range(6):
        for _ in range(2):
            if state.ratio.max() <= 1.0:
                return state
            state = level(source, state, allowed) or state
        if state.ratio.max() <= 1.0:
            break
        more = add_where_over(source, state, closest)
        if more is None:
            break
        state = refit(source, Basis(source, more), state.u, state.weight, allowed) or state
    return state


def settled(source: Source, inner: FloatArray, u: FloatArray, weight: FloatArray, chord_error: float) -> State | None:
    """Fit at more samples than the knots were found with; add knots where that shows it over or unfair.

    Args:
        inner, u, weight: knots, and parameters and weights of the samples, to begin with.
    """
    allowed = np.full(len(source.along), _AIM * chord_error)
    closest = 0.5 * source.lengths / source.spans
    guard = Guard(source, chord_error)
    state = refit(source, Basis(source, inner), u, weight, allowed)
    for turn in range(_REPAIRS + 1):
        if state is None:
            break
        state = _mend(source, state, allowed, closest)
        wrong = guard.check(state.fit, state.u).where
        if turn == _REPAIRS or not wrong.any():
            break
        basis = state.fit.basis
        near = np.zeros(len(basis.start), dtype=bool)
        near[basis.locate(state.u[wrong])[0]] = True
        more = halved(source, basis, near, closest)
        if more is None:
            break
        state = refit(source, Basis(source, more), state.u, source.step, allowed) or state
    return state
