"""Moves on chains of arcs: joints added where the error is, taken out where they are weak; and how arcs bend."""

from collections.abc import Generator

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.arc_newton import Polished
from geometry.economy.arc_start import Chain
from geometry.economy.track import ComplexArray, Track

__all__ = ["FIRM", "Driver", "Trial", "bends", "extended", "fits", "weak_joints", "with_more", "without"]

Trial = tuple[Chain, float]  # a chain to polish, and the share of the chord error to stop at
Driver = Generator[Trial, Polished, Chain]

FIRM = 0.985  # share of the chord error at which polishing stops
NEAR = 0.999  # share of the chord error up to which samples may lie off
DEFECT = 1e-9  # radians a joint may kink


def fits(result: Polished, chord_error: float) -> bool:
    """Tell whether a chain is within the chord error and tangent continuous."""
    return result.worst <= NEAR * chord_error and result.defect < DEFECT


def with_more(track: Track, result: Polished, chord_error: float, thorough: bool) -> Chain:
    """Return a chain with joints added in the middle of its worst arcs; those beside worse ones that are held."""
    chain, errors = result.chain, result.errors
    n = chain.count
    fixed = ~np.isnan(chain.held)
    if fixed.any():
        beside = np.where(fixed, errors, 0.0)
        left, right = (np.roll(beside, by) if chain.closed else _shifted(beside, by) for by in (1, -1))
        errors = np.where(fixed, 0.0, np.maximum(errors, 0.99 * np.maximum(left, right)))
    wanted = round(float(np.cbrt(np.minimum(errors / chord_error, 1e3)).sum()) - n)
    wanted = max(wanted, 1 if thorough else int(np.ceil(0.015 * n)), 1)
    wanted = min(wanted, max(1, int(0.3 * n)))
    left, right = (
        (np.roll(errors, 1), np.roll(errors, -1)) if chain.closed else (_shifted(errors, 1), _shifted(errors, -1))
    )
    peaks = np.flatnonzero((errors >= left) & (errors >= right) & ~fixed)
    worst = np.sort(peaks[np.argsort(errors[peaks])[::-1][:wanted]])
    joints, angles, s = extended(track, chain)
    chord = np.diff(joints)
    half = 0.5 * np.diff(angles)
    middle = 0.5 * (joints[:-1] + joints[1:]) - 0.5j * chord * np.tan(0.5 * np.clip(half, -1.5, 1.5))
    heading = 0.5 * (angles[:-1] + angles[1:])
    at = worst + 1
    return Chain(
        chain.piece,
        np.insert(chain.joint, at, middle[worst]),
        np.insert(chain.angle, at, heading[worst]),
        np.insert(chain.s, at, 0.5 * (s[:-1] + s[1:])[worst]),
        np.insert(chain.held, at, np.nan),
        chain.closed,
    )


def _shifted(values: FloatArray, by: int) -> FloatArray:
    out = np.zeros_like(values)
    if by > 0:
        out[by:] = values[:-by]
    else:
        out[:by] = values[-by:]
    return out


def extended(track: Track, chain: Chain) -> tuple[ComplexArray, FloatArray, FloatArray]:
    """Return joints, angles and arc lengths with the end of the last arc."""
    if not chain.closed:
        return chain.joint, chain.angle, chain.s
    return (
        np.append(chain.joint, chain.joint[0]),
        np.append(chain.angle, chain.angle[0] + track.turn),
        np.append(chain.s, chain.s[0] + track.period),
    )


def weak_joints(chain: Chain, barred: BoolArray, most: float, sure: float) -> IntArray:
    """Return the joints to take out, the weakest first: that if under `most`, others, none adjacent, if under `sure`.

    The strength of a joint is its jump of curvature times (x y / (x + y))^2 with x, y the chords beside it: about eight
    times the distance by which one arc over both would miss them.
    """
    joints = np.append(chain.joint, chain.joint[0]) if chain.closed else chain.joint
    if chain.count < (3 if chain.closed else 2):
        return np.zeros(0, dtype=np.intp)
    chord = np.abs(np.diff(joints))
    bend = bends(chain, joints)
    if chain.closed:
        x, y, jump = np.roll(chord, 1), chord, bend - np.roll(bend, 1)
        number = np.arange(chain.count)
    else:
        x, y, jump = chord[:-1], chord[1:], np.diff(bend)
        number = 1 + np.arange(chain.count - 1)
    strength = np.where(barred[number], np.inf, np.abs(jump) * (x * y / np.maximum(x + y, 1e-300)) ** 2)
    order = np.argsort(strength)
    if strength[order[0]] >= most:
        return np.zeros(0, dtype=np.intp)
    size = len(chain.joint)
    taken = [int(number[order[0]])]
    blocked = {(taken[0] - 1) % size, (taken[0] + 1) % size}  # the ends of an open chain are never taken
    room = chain.count - (2 if chain.closed else 1)
    for index in order[1:].tolist():
        joint = int(number[index])
        if strength[index] >= sure or len(taken) >= room:
            break
        if joint not in blocked:
            taken.append(joint)
            blocked |= {(joint - 1) % size, (joint + 1) % size}
    return np.array(taken, dtype=np.intp)


def bends(chain: Chain, joints: ComplexArray) -> FloatArray:
    """Return the curvature of every arc, from its chord and the tangent at its start."""
    chord = np.diff(joints)
    start = chain.angle if chain.closed else chain.angle[:-1]
    return np.asarray(2.0 * np.sin(np.angle(chord * np.exp(-1j * start))) / np.maximum(np.abs(chord), 1e-300))


def without(chain: Chain, joints: IntArray) -> Chain:
    """Return the chain with some joints taken out; arcs that were lines stay so only when whole."""
    held = chain.held.copy()
    held[joints - 1] = np.nan
    return Chain(
        chain.piece,
        np.delete(chain.joint, joints),
        np.delete(chain.angle, joints),
        np.delete(chain.s, joints),
        np.delete(held, joints),
        chain.closed,
    )
