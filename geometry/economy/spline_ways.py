"""Ways to fit the pieces of a profile with few knots: equal spans, or knots laid by the curve's need and thinned."""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.economy.spline_fit import Basis
from geometry.economy.spline_knots import State, add_where_over, bent, level, refit, remove, respaced
from geometry.economy.spline_shape import Guard
from geometry.economy.spline_source import Source
from geometry.economy.spline_spacing import place, smoothed, spacing, uniform

__all__ = ["evenly", "thinned"]

_AIM = 0.985  # share of the chord error that the fit may use; the rest covers what lies between samples
_HOPEFUL = 4.0  # ratio up to which levelling may still bring a fit within the chord error
_BENT = (0.01, 0.03)  # pull of the source's curvature where a thinned fit is not fair
_RESPACED = 2  # times that the knots are laid anew after thinning
_DENSER = 2  # times that knots are laid a third more densely in pieces that start out unfair
_EXTRA = 1.1  # knots to begin with, over what the spacing field asks for


def evenly(source: Source, pieces: BoolArray, chord_error: float, number: int) -> tuple[BoolArray, State | None]:
    """Fit with a number of equal spans a piece those pieces for which that looks hopeful at the first fit."""
    pieces = pieces & (source.spans > number)
    if not pieces.any() or (source.periodic and number < source.degree + 2):
        return pieces, None
    part = source.only(pieces)
    allowed = np.full(len(part.along), _AIM * chord_error)
    state = refit(part, Basis(part, uniform(part, np.full(len(part.low), number))), part.along, part.step, allowed)
    if state is None:
        return pieces, None
    hopeful = np.maximum.reduceat(state.ratio, part.first[:-1]) <= _HOPEFUL
    if not hopeful.any():
        return pieces, None
    if not hopeful.all():
        kept = hopeful[part.piece]
        chosen = pieces.copy()
        chosen[np.flatnonzero(pieces)[~hopeful]] = False
        pieces, part, allowed, u = chosen, source.only(chosen), allowed[kept], state.u[kept]
        basis = Basis(part, uniform(part, np.full(len(part.low), number)))
        state = refit(part, basis, u, part.step, allowed)
    for _ in range(3):
        if state is not None and state.ratio.max() > 1.0:
            state = level(part, state, allowed)
    return pieces, state


def thinned(source: Source, chord_error: float, finer: float, strict: bool) -> State | None:
    """Lay knots and thin them.

    Args:
        finer: factor by which knots are laid finer than the chord error asks for; 0 lays them as close as the source's.
        strict: whether thinning may lose no fairness at all.
    """
    allowed = np.full(len(source.along), _AIM * chord_error)
    closest = 0.5 * source.lengths / source.spans
    guard = Guard(source, chord_error)
    if finer:
        state = _laid(source, guard, allowed, closest, finer)
    else:
        state = refit(source, Basis(source, uniform(source, source.spans)), source.along, source.step, allowed)
    if state is None:
        return None
    state = _mend(source, remove(source, state, allowed, guard, strict), allowed, closest)
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
    return state


def _laid(source: Source, guard: Guard, allowed: FloatArray, closest: FloatArray, finer: float) -> State | None:
    """Lay knots by the spacing field, some more than it asks for, and more again in pieces that come out unfair."""
    need = smoothed(source, spacing(source, allowed / finer), 0.75)
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
