"""Arcs no tighter and no flatter than asked: bends blended to a least radius, flat arcs made lines with short arcs."""

from collections.abc import Callable, Generator
from dataclasses import dataclass, replace

import numpy as np

from geometry.arcs import ArcChain
from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.arc_moves import FIRM, Trial, bends, extended, fits, with_more
from geometry.economy.arc_newton import Polished
from geometry.economy.arc_start import Chain
from geometry.economy.track import ComplexArray, Track

__all__ = ["Radii", "outside_radii", "within_radii"]

INSIDE = 1e-6  # arcs are held that much inside a limit, so that rounding does not carry them over it
SLACK = 1e-9  # arcs over a limit by no more than that keep it
GROWTHS = 5  # times that joints are added round a blended bend
WIDER = (0, 1, 2)  # arcs on either side that are tried to be merged into a blended bend
DENSER = (1.0, 1.4, 2.0, 3.0)  # short arcs in a flat stretch, in multiples of what should do
FILL = 0.8  # share of the chord error that this reckons with
ABSURD = 100.0  # radius, in extents of the curve, that no one would draw
WILD = 10.0  # chord errors over which adding joints does not help

Steps = Generator[Trial, Polished, Polished]
Maker = Callable[[Chain, list[tuple[int, int]]], Chain | None]


@dataclass(frozen=True, slots=True)
class Radii:
    """Limits of radius, drawing units.

    Attributes:
        least: smallest radius allowed, 0 for any.
        most: largest radius allowed, infinite for any; lines are always allowed.
    """

    least: float = 0.0
    most: float = np.inf

    def tight(self, bend: FloatArray) -> BoolArray:
        """Return which curvatures are over the limit of the least radius."""
        return np.asarray(np.abs(bend) * self.least > 1.0 + SLACK)

    def flat(self, bend: FloatArray) -> BoolArray:
        """Return which curvatures, lines apart, are under that of the largest radius."""
        if not np.isfinite(self.most):
            return np.zeros(bend.shape, dtype=np.bool_)
        return np.asarray((np.abs(bend) * self.most < 1.0 - SLACK) & (bend != 0.0))


def outside_radii(
    chain: ArcChain, least_radius: float | None = None, most_radius: float | None = None, slack: float = 1e-6
) -> IntArray:
    """Return the indices of the arcs of a chain that are tighter or flatter than asked; lines have no radius.

    `chain.circles()` has their radii, and the middle of arc i is where it is.

    Args:
        chain: lines and arcs.
        least_radius, most_radius: drawing units, None for no limit.
        slack: share of a limit by which an arc may miss it (rounded coordinates move radii).
    """
    bend = np.abs(chain.curvatures())
    out = np.zeros(len(bend), dtype=np.bool_)
    if least_radius is not None:
        out |= bend * least_radius * (1.0 - slack) > 1.0
    if most_radius is not None:
        out |= (bend * most_radius * (1.0 + slack) < 1.0) & (bend > 0.0)
    return np.flatnonzero(out)


def within_radii(track: Track, accepted: Polished, chord_error: float, radii: Radii) -> Steps:
    """Bring the arcs of a chain that fits within limits of radius where that can be had; yields chains to polish.

    A bend that is too tight is laid as one arc of the least radius, its neighbours and more joints beside it taking up
    the difference; a stretch too flat becomes a line, one arc of the largest radius, or lines joined by short arcs of
    the largest radius. What does not fit in the chord error that way stays as it was. Without a largest radius, arcs
    over a hundred times as large as the whole curve become lines where those fit.
    """
    if not np.isfinite(radii.most):
        absurd = replace(radii, most=ABSURD * track.extent)
        line = [_one_line(track, chord_error)]
        accepted = yield from _treated(track, accepted, chord_error, absurd, line, absurd.flat, _flat_runs)
    for _ in range(3):  # what one limit asks for may touch the other
        before = _missed(accepted.chain, radii)
        if before == 0:
            break
        makers: list[Maker] = [_blended(radii, wider) for wider in WIDER]
        accepted = yield from _treated(track, accepted, chord_error, radii, makers, radii.tight, _tight_runs)
        makers = [_one_line(track, chord_error), _one_arc(radii)]
        makers += [_lines_and_arcs(track, chord_error, radii, share) for share in DENSER]
        accepted = yield from _treated(track, accepted, chord_error, radii, makers, radii.flat, _flat_runs)
        if _missed(accepted.chain, radii) >= before:
            break
    return accepted


def _curvatures(chain: Chain) -> FloatArray:
    joints = np.append(chain.joint, chain.joint[0]) if chain.closed else chain.joint
    out = bends(chain, joints)
    flat = np.abs(out) * np.abs(np.diff(joints)) < 1e-10
    return np.where(np.isnan(chain.held), np.where(flat, 0.0, out), chain.held)


def _missed(chain: Chain, radii: Radii) -> int:
    bend = _curvatures(chain)
    return int((radii.tight(bend) | radii.flat(bend)).sum())


def _treated(
    track: Track,
    accepted: Polished,
    chord_error: float,
    radii: Radii,
    makers: list[Maker],
    offends: Callable[[FloatArray], BoolArray],
    runs_of: Callable[[FloatArray, BoolArray], list[tuple[int, int]]],
) -> Steps:
    """Treat runs of offending arcs, all at once and then one by one, with one maker after the other."""
    given_up: list[float] = []  # arc lengths in runs that nothing helps
    together, best, fewest = True, accepted, _missed(accepted.chain, radii)
    for _ in range(8 + 2 * accepted.chain.count):
        chain = _begun_outside(track, accepted.chain, offends)
        _, _, s = extended(track, chain)
        bend = _curvatures(chain)
        runs = [
            (a, b)
            for a, b in runs_of(bend, offends(bend))
            if not any(_between(track, at, s[a], s[b + 1]) for at in given_up)
        ]
        if not runs:
            break
        chosen = runs if together else runs[:1]
        bettered = None
        for maker in makers:
            trial = maker(chain, chosen)
            if trial is None:
                continue
            result = yield from _fitted(track, trial, chord_error)
            if result is not None and _missed(result.chain, radii) <= _missed(chain, radii):
                bettered = result
                break
        if bettered is not None:  # no fewer may offend now, because another arc does; but that one can be held too
            accepted = bettered
            if _missed(accepted.chain, radii) < fewest:
                best, fewest = accepted, _missed(accepted.chain, radii)
        elif together and len(runs) > 1:
            together = False
        else:
            given_up.append(0.5 * (s[chosen[0][0]] + s[chosen[0][1] + 1]))
    return best


def _between(track: Track, at: float, low: float, high: float) -> bool:
    turns = np.array([-1.0, 0.0, 1.0]) * track.period
    return bool(((at + turns >= low) & (at + turns <= high)).any())


def _fitted(track: Track, trial: Chain, chord_error: float) -> Generator[Trial, Polished, Polished | None]:
    for _ in range(GROWTHS):
        result = yield trial, FIRM
        if fits(result, chord_error):
            return result
        if not (np.isnan(trial.held).any() and result.worst < WILD * chord_error):
            return None
        trial = with_more(track, result, chord_error, False)
    return None


def _begun_outside(track: Track, chain: Chain, offends: Callable[[FloatArray], BoolArray]) -> Chain:
    """Return a closed chain begun at an arc that neither offends nor is held, where there is one."""
    if not chain.closed:
        return chain
    good = np.flatnonzero(~offends(_curvatures(chain)) & np.isnan(chain.held))
    if not good.size or good[0] == 0:
        return chain
    by = int(good[0])
    joint, angle, s = chain.joint, chain.angle, chain.s
    back = np.floor(s[by] / track.period)
    s = np.concatenate([s[by:], s[:by] + track.period]) - back * track.period
    angle = np.concatenate([angle[by:], angle[:by] + track.turn]) - back * track.turn
    return Chain(chain.piece, np.roll(joint, -by), angle, s, np.roll(chain.held, -by), True)


def _runs(members: BoolArray, offending: BoolArray, group: FloatArray) -> list[tuple[int, int]]:
    """Return first and last index of runs of members of the same group that hold at least one offender."""
    cut = np.flatnonzero((np.diff(group) != 0.0) | (np.diff(members.astype(np.int8)) != 0)) + 1
    first = np.concatenate([[0], cut])
    last = np.append(cut, len(members)) - 1
    return [
        (a, b) for a, b in zip(first.tolist(), last.tolist(), strict=True) if members[a] and offending[a : b + 1].any()
    ]


def _tight_runs(bend: FloatArray, offending: BoolArray) -> list[tuple[int, int]]:
    return _runs(offending, offending, np.sign(bend))


def _flat_runs(bend: FloatArray, offending: BoolArray) -> list[tuple[int, int]]:
    return _runs(offending | (bend == 0.0), offending, np.zeros(len(bend)))


def _replaced(
    chain: Chain, a: int, b: int, joint: ComplexArray, angle: FloatArray, s: FloatArray, held: FloatArray
) -> Chain:
    """Return a chain with the arcs a to b replaced by others with the given inner joints."""
    return Chain(
        chain.piece,
        np.concatenate([chain.joint[: a + 1], joint, chain.joint[b + 1 :]]),
        np.concatenate([chain.angle[: a + 1], angle, chain.angle[b + 1 :]]),
        np.concatenate([chain.s[: a + 1], s, chain.s[b + 1 :]]),
        np.concatenate([chain.held[:a], held, chain.held[b + 1 :]]),
        chain.closed,
    )


def _merged(chain: Chain, a: int, b: int, held: float) -> Chain:
    if chain.closed and b - a + 1 == chain.count:  # the whole loop: one arc cannot close it
        return replace(chain, held=np.full(chain.count, held))
    nothing = np.zeros(0)
    return _replaced(chain, a, b, nothing.astype(np.complex128), nothing, nothing, np.array([held]))


def _blended(radii: Radii, wider: int) -> Maker:
    """Lay every run, and `wider` arcs on either side of it, as one arc of the least radius."""

    def make(chain: Chain, runs: list[tuple[int, int]]) -> Chain | None:
        bend, stop, changed = _curvatures(chain), chain.count, False
        for a, b in reversed(runs):
            low, high = max(a - wider, 0), min(b + wider, stop - 1)
            changed |= wider == 0 or high - low > b - a
            if high < low or (chain.closed and high - low + 1 >= chain.count > b - a + 1):
                return None
            limit = np.sign(bend[a]) * (1.0 - INSIDE) / radii.least
            chain, stop = _merged(chain, low, high, limit), low
        return chain if changed else None

    return make


def _one_line(track: Track, chord_error: float) -> Maker:
    """Lay every run as one line, where it could be within the chord error at all."""

    def make(chain: Chain, runs: list[tuple[int, int]]) -> Chain | None:
        joints, _, s = extended(track, chain)
        for a, b in reversed(runs):
            chord = joints[b + 1] - joints[a]
            seen = (track.points(np.linspace(s[a], s[b + 1], 33)) - joints[a]) * np.conj(chord)
            if np.ptp(seen.imag) > 3.0 * chord_error * abs(chord) or (chain.closed and b - a + 1 == chain.count):
                return None
            chain = _merged(chain, a, b, 0.0)
        return chain

    return make


def _one_arc(radii: Radii) -> Maker:
    """Lay the arcs of every run that follow each other and bend one way as one arc of the largest radius."""

    def make(chain: Chain, runs: list[tuple[int, int]]) -> Chain | None:
        bend = _curvatures(chain)
        sides = np.zeros(len(bend))
        for a, b in runs:
            sides[a : b + 1] = np.sign(bend[a : b + 1])
        for a, b in reversed(_runs(sides != 0.0, sides != 0.0, sides)):
            chain = _merged(chain, a, b, float(sides[a]) * (1.0 + INSIDE) / radii.most)
        return chain

    return make


def _lines_and_arcs(track: Track, chord_error: float, radii: Radii, share: float) -> Maker:
    """Lay every run as lines joined by short arcs of the largest radius, `share` times as many as should do."""

    def make(chain: Chain, runs: list[tuple[int, int]]) -> Chain | None:
        bend = _curvatures(chain)
        for a, b in reversed(runs):
            _, angles, s = extended(track, chain)
            middle, width, side = _short_arcs(
                s[a : b + 2], angles[a : b + 2], bend[a : b + 1], chord_error, radii.most, share
            )
            if not len(middle):
                return None
            between = 0.5 * (middle[1:] + middle[:-1])
            whole = chain.closed and b - a + 1 == chain.count
            if whole:
                round_ = middle[:1] + track.period
                between = np.append(between, 0.5 * (middle[-1:] + round_))
                heading = track.frames(between)[1]
                heading = np.concatenate([heading[-1:] - track.turn, heading])
            else:
                between = np.concatenate([0.5 * (s[a : a + 1] + middle[:1]), between, 0.5 * (middle[-1:] + s[b + 1])])
                heading = track.frames(between)[1]
            along = np.stack([middle - width, middle + width], axis=1).ravel()
            angle = np.stack([heading[:-1], heading[1:]], axis=1).ravel()
            held = np.stack([side * (1.0 + INSIDE) / radii.most, np.zeros(len(side))], axis=1).ravel()
            joint = track.points(along)
            if whole:
                chain = Chain(chain.piece, joint, angle, along, held, True)
            else:
                chain = _replaced(chain, a, b, joint, angle, along, np.concatenate([[0.0], held]))
        return chain

    return make


def _short_arcs(
    s: FloatArray, angles: FloatArray, bend: FloatArray, chord_error: float, most: float, share: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return middle, half width and side of the short arcs for a run.

    Lines and arcs of radius r, tangent to each other and repeated every turn p, stay between two circles (R - r)
    (1 / cos(p / 2) - 1) apart round a bend of radius R > r: 2 e for p = sqrt(16 e / (R - r)).
    """
    bare = np.sqrt(np.abs(bend) / (16.0 * FILL * chord_error)) * np.diff(s)  # links, where the arcs have no length
    need = share * bare * np.sqrt(np.maximum(1.0 - np.abs(bend) * most, 1e-6))
    sides = np.sign(bend)
    middles, widths, signs = [], [], []
    for a, b in _runs(sides != 0.0, sides != 0.0, sides):
        running = np.concatenate([[0.0], np.cumsum(need[a : b + 1])])
        if share == 1.0 and bare[a : b + 1].sum() < 0.7:  # may be a line
            continue
        count = max(1, int(np.ceil(running[-1] - 0.3)))
        at = np.interp((np.arange(count) + 0.5) / count * running[-1], running, s[a : b + 2])
        turn = abs(angles[b + 1] - angles[a]) / count
        room = (s[b + 1] - s[a]) / count
        middles.append(at)
        widths.append(np.full(count, min(0.5 * turn * most, 0.4 * room)))
        signs.append(np.full(count, sides[a]))
    if not middles:
        return np.zeros(0), np.zeros(0), np.zeros(0)
    return np.concatenate(middles), np.concatenate(widths), np.concatenate(signs)
