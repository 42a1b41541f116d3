"""Tangent continuous arcs by halving: biarcs through points and tangents of the curve, where nothing sparser holds."""

import numpy as np

from geometry.arrays import FloatArray
from geometry.economy.arc_start import Chain
from geometry.economy.check import two_sided
from geometry.economy.track import ComplexArray, Track

__all__ = ["biarc_chain"]

ROUNDS = 40
SAMPLES = 16
MOST_SWEEP = 2.0  # radians an arc may turn
SHORTEST = 1e-9  # share of the track down to which stretches are halved


def biarc_chain(track: Track, piece: int, s: FloatArray, chord_error: float) -> Chain:
    """Return a chain of arcs within a chord error of a smooth piece, from the given joints on.

    Every stretch between two joints gets two arcs that meet the curve's points and tangents at both ends and each
    other; a stretch that is over the chord error, or turns too far, is halved. The error of a stretch falls with the
    cube of its length, so this ends soon; stretches under a billionth of the track, as at a cusp, become lines where
    their arcs turn too far.

    Args:
        track: the curve.
        piece: index of the smooth piece.
        s: first joints, increasing, the ends of the piece included (closed: one whole period), shape (m,), m >= 2.
        chord_error: drawing units.
    """
    for _ in range(ROUNDS):
        joint, angle, _ = track.frames(s)
        if not track.closed:  # the end of a piece is looked at from inside
            joint[-1] = track.points(s[-1:])[0]
        middle, sweep = _middles(joint, angle)
        # every arc is sampled against the whole stretch's arc length halves; its foot bounds allow for uneven halves
        half = 0.5 * (s[:-1] + s[1:])
        start, end = _interleaved(joint[:-1], middle), _interleaved(middle, joint[1:])
        bulges = np.tan(0.25 * sweep.ravel())
        spans = np.stack([_interleaved(s[:-1], half), _interleaved(half, s[1:])], axis=1)
        one = np.zeros(len(bulges), dtype=np.intp)
        error = two_sided(track, start, end, bulges, spans, one, chord_error, SAMPLES, peaks=True)
        wild = (np.abs(sweep).max(axis=1) > MOST_SWEEP) | (np.abs(sweep.sum(axis=1) - np.diff(angle)) > 1e-6)
        over = wild | ~(error.reshape(-1, 2).max(axis=1) <= chord_error)
        over &= np.diff(s) > SHORTEST * track.s[-1]
        if not over.any():
            break
        s = np.insert(s, 1 + np.flatnonzero(over), half[over])
    joints = np.append(start, end[-1])
    turning = angle[:-1] + sweep[:, 0]
    angles = np.append(_interleaved(angle[:-1], turning), angle[-1])
    along = np.append(_interleaved(s[:-1], half), s[-1])
    held = np.repeat(np.where(wild, 0.0, np.nan), 2)
    if track.closed:
        joints, angles, along = joints[:-1], angles[:-1], along[:-1]
    return Chain(piece, joints, angles, along, held, track.closed)


def _middles(joint: ComplexArray, angle: FloatArray) -> tuple[ComplexArray, FloatArray]:
    """Return the middle joints of biarcs and the sweeps of both arcs, shape (m, 2).

    The middle joint is the one with equal tangent lengths d: with v the chord and t the sum of the end tangents,
    d solves v.v - 2 d v.t - 2 d^2 (1 - t0.t1) = 0.
    Source: K. M. Bolton, "Biarc curves", Computer-Aided Design 7 (1975), for the construction (from memory).
    """
    t0, t1 = np.exp(1j * angle[:-1]), np.exp(1j * angle[1:])
    v = np.diff(joint)
    squared = np.maximum(np.abs(v) ** 2, 1e-300)
    along = (v * np.conj(t0 + t1)).real
    spread = 2.0 * (1.0 - (t0 * np.conj(t1)).real)
    root = np.sqrt(along**2 + spread * squared)
    d = squared / np.maximum(along + root, 1e-150 + 1e-9 * np.sqrt(squared))
    middle = 0.5 * (joint[:-1] + joint[1:] + d * (t0 - t1))
    first = np.angle((middle - joint[:-1]) * np.conj(t0))
    second = -np.angle((joint[1:] - middle) * np.conj(t1))
    return middle, 2.0 * np.stack([first, second], axis=1)


def _interleaved(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    return np.stack([a, b], axis=1).ravel()
