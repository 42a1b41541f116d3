"""What kind of polyline this is: a pixel staircase, a chamfered one, hand noise, sparse stations, or clean.

The recommended tolerance is 0.85 of the pixel pitch for staircases and 4.1 standard deviations for noise. These numbers
and the thresholds were chosen on traced outlines of known shape; they are empirical.
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.corners import find_corners
from geometry.polyline import Polyline, merge_collinear

__all__ = ["Jaggedness", "Kind", "estimate", "is_clean_polygon"]

Kind = Literal["staircase", "chamfered", "noise", "none", "stations"]

_HEADING = np.radians(0.5)
_NOISE_SIGMAS = 4.1
_PITCH_SHARE = 0.85
_NOISE_VERTICES = 20
_WINDOW, _KEPT = 6, 0.9
_LEAST_WINDOWS, _BESIDE = 8, 0.3
# mean of the smallest nine tenths of a chi-square distribution over its whole mean, with 3 and 6 degrees of freedom:
# F(q; n + 2) / 0.9 with q the 0.9 quantile for n
_KEPT_SHARE = {1: 0.7972, 2: 0.8637}
_STATION_SAGITTA = 1e-4  # of the extent: chords that leave a curve by more are no evidence of its shape


@dataclass(frozen=True, slots=True)
class Jaggedness:
    """What was found.

    Attributes:
        kind: see the module.
        size: pixel pitch of a staircase, standard deviation of noise, drawing units; 0 for the other kinds.
        tolerance: recommended for fairing, drawing units; 0 where none is needed.
        reason: one sentence for people.
    """

    kind: Kind
    size: float
    tolerance: float
    reason: str


def estimate(polyline: Polyline) -> Jaggedness:
    """Tell the kind and size of a polyline's jaggedness.

    Args:
        polyline: cleaned, 2-D or 3-D (only x and y are looked at for staircases).
    """
    merged, _ = merge_collinear(polyline, 1e-6)
    edges = np.diff(merged.path(), axis=0)
    found = _staircase(edges[:, :2], merged.closed)
    if found is not None:
        return found
    turns = _turns(edges, merged.closed)
    sigma, tail = _noise(merged)
    spacing = float(np.median(np.linalg.norm(edges, axis=1)))
    uneven = _same_sign(turns) < 0.6  # noise turns to and fro; tight small loops hide that, so strong noise needs less
    scatter = (sigma > 0.02 * spacing and uneven and tail < 3.0) or (sigma > 0.04 * spacing and tail < 1.5)
    if scatter and sigma < 0.6 * spacing and len(turns) >= _NOISE_VERTICES:
        sigma = _scatter(merged, np.zeros(0), 0.0)
        reach = _NOISE_SIGMAS * sigma
        if merged.dimension == 2:
            corners = find_corners(merged, reach)  # what bends sharply is no scatter
            sigma = _scatter(merged, corners.along, _BESIDE * reach)
        return Jaggedness(
            "noise",
            sigma,
            _NOISE_SIGMAS * sigma,
            f"the points scatter by {sigma:.3g} (standard deviation); {_NOISE_SIGMAS:g} times that takes it out",
        )
    if _looks_like_stations(merged, edges, turns):
        reason = "the points are sparse and lie on a smooth curve: the chords between them are no evidence"
        return Jaggedness("stations", 0.0, 0.0, reason)
    return Jaggedness("none", 0.0, 0.0, "no jaggedness was found: none needed")


def is_clean_polygon(polyline: Polyline, tolerance: float) -> bool:
    """Tell whether every vertex is a plain corner between straight sides, so that there is nothing to fair.

    Every side is at least four tolerances long, every vertex turns by 20 degrees or more, and hardly any vertex lies
    inside a straight side.

    Args:
        polyline: cleaned.
        tolerance: drawing units.
    """
    merged, _ = merge_collinear(polyline, 1e-6)
    if len(polyline.points) > 1.5 * len(merged.points):
        return False
    edges = np.diff(merged.path(), axis=0)
    if np.linalg.norm(edges, axis=1).min() < 4.0 * tolerance:
        return False
    turns = np.abs(_turns(edges, merged.closed))
    return bool((turns >= np.radians(20.0)).all())


def _turns(edges: FloatArray, closed: bool) -> FloatArray:
    """Return the turn at every vertex between two edges, radians; signed in 2-D."""
    before, after = (edges, np.roll(edges, -1, axis=0)) if closed else (edges[:-1], edges[1:])
    dot = (before * after).sum(axis=1)
    if edges.shape[1] == 2:
        return np.arctan2(before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0], dot)
    return np.arctan2(np.linalg.norm(np.cross(before, after), axis=1), dot)


def _same_sign(turns: FloatArray) -> float:
    """Return the share of neighbouring turns that have the same sign (1 where there are none)."""
    if len(turns) < 2:
        return 1.0
    return float(np.mean(np.sign(turns[1:]) == np.sign(turns[:-1])))


def _staircase(edges: FloatArray, closed: bool) -> Jaggedness | None:
    if len(edges) < 16:
        return None
    length = np.linalg.norm(edges, axis=1)
    heading = np.arctan2(edges[:, 1], edges[:, 0])
    phase = np.angle((length * np.exp(8j * heading)).sum()) / 8.0
    off = np.mod(heading - phase + np.pi / 8.0, np.pi / 4.0) - np.pi / 8.0
    total = float(length.sum())
    if float(length[np.abs(off) < _HEADING].sum()) < 0.98 * total:
        return None
    classes = np.rint((heading - phase) / (np.pi / 4.0)).astype(int) % 2
    shares = [float(length[classes == k].sum()) / total for k in (0, 1)]
    chamfered = min(shares) > 0.02
    straight, slant = length[classes == 0], length[classes == 1]
    if chamfered:  # steps along the grid are whole pitches, slanted ones whole half diagonals
        options = [_pitch(straight, slant), _pitch(slant, straight)]
        if abs(phase) < _HEADING:  # a scan that lies straight has its grid along the axes
            level = np.rint(heading / (np.pi / 4.0)).astype(int) % 2
            options = [_pitch(length[level == 0], length[level == 1])]
        pitch, whole = max((o for o in options if o[1] >= 0.95), default=(0.0, 0.0))
    else:
        pitch = float(np.quantile(length, 0.01, method="lower"))
        whole = float(np.mean(_near_multiple(length, pitch)))
    turns = _turns(edges, closed)
    alternating = 1.0 - _same_sign(turns)
    if whole < 0.95 or alternating < 0.3 or float(np.median(length)) > 6.0 * pitch:
        return None
    kind: Kind = "chamfered" if chamfered else "staircase"
    shape = "a pixel staircase with cut corners" if chamfered else "a pixel staircase"
    reason = f"{shape} of pitch {pitch:.4g}; {_PITCH_SHARE:g} of it takes the steps out"
    return Jaggedness(kind, pitch, _PITCH_SHARE * pitch, reason)


def _pitch(straight: FloatArray, slant: FloatArray) -> tuple[float, float]:
    """Return the pitch that fits the shortest steps, and the share of steps that are whole multiples."""
    half = np.sqrt(0.5)
    shortest = [float(np.quantile(part, 0.01, method="lower")) for part in (straight, slant)]
    pitch = min(shortest[0], shortest[1] / half)
    whole = np.concatenate([_near_multiple(straight, pitch), _near_multiple(slant, half * pitch)])
    return pitch, float(np.mean(whole))


def _near_multiple(length: FloatArray, unit: float) -> BoolArray:
    ratio = length / unit
    return np.abs(ratio - np.rint(ratio)) < 0.05


def _noise(polyline: Polyline) -> tuple[float, float]:
    """Return the standard deviation of the vertices' scatter and how heavy its tail is (1 for a normal one).

    Third divided differences over four neighbouring vertices, scaled so that independent noise keeps its size, leave
    parabolas out; their part across the polyline is taken.
    """
    points = polyline.points
    if polyline.closed:
        points = np.concatenate([points, points[:3]])
    if len(points) < 8:
        return 0.0, 1.0
    along = Polyline(points).alongs()
    n = len(points) - 3
    t = np.stack([along[k : k + n] for k in range(4)], axis=1)
    weights = np.empty_like(t)
    for k in range(4):
        weights[:, k] = 1.0 / np.prod([t[:, k] - t[:, j] for j in range(4) if j != k], axis=0)
    weights /= np.linalg.norm(weights, axis=1)[:, None]
    difference = sum(weights[:, k, None] * points[k : k + n] for k in range(4))
    chord = points[3:] - points[:n]
    unit = chord / np.maximum(np.linalg.norm(chord, axis=1), 1e-300)[:, None]
    across = difference - (difference * unit).sum(axis=1)[:, None] * unit
    size = np.linalg.norm(across, axis=1)
    # median of the size of one normal component across, and of two of them in 3-D, for a sigma of 1
    sigma = float(np.median(size)) / (1.1774 if points.shape[1] == 3 else 0.6745)
    tail = float(np.quantile(size, 0.9)) / (1.645 * sigma) if sigma > 0.0 else np.inf
    return sigma, tail


def _scatter(polyline: Polyline, corners: FloatArray, beside: float) -> float:
    """Return the standard deviation of the vertices' scatter across the polyline, drawing units.

    The residual of a least-squares parabola over every six neighbouring vertices, three degrees of freedom a
    coordinate, uses more of what the vertices say than one difference does. The largest tenth is left out, since
    bends may be too tight for a parabola, and what that takes away from a chi-square distribution is given back.

    Args:
        polyline: cleaned, 2-D or 3-D.
        corners: arc length of corners; vertices on both sides of one, or within `beside` of one, are not put together.
        beside: drawing units.
    """
    points = polyline.points
    along = polyline.alongs()[: len(points)]
    if polyline.closed:
        points = np.concatenate([points, points[: _WINDOW - 1]])
        along = np.concatenate([along, polyline.length() + along[: _WINDOW - 1]])
        corners = np.concatenate([corners, corners + polyline.length()])
    count = len(points) - _WINDOW + 1
    passed = np.searchsorted(np.sort(corners), [along[:count] - beside, along[_WINDOW - 1 :] + beside])
    whole = np.flatnonzero(passed[0] == passed[1])
    rows = whole if len(whole) >= _LEAST_WINDOWS else np.arange(count)
    index = rows[:, None] + np.arange(_WINDOW)
    t = along[index]
    t = t - t.mean(axis=1, keepdims=True)
    t /= np.abs(t).max(axis=1, keepdims=True)
    basis, _ = np.linalg.qr(np.stack([np.ones_like(t), t, t * t], axis=-1))
    window = points[index] - points[index[:, :1]]
    rest = window - basis @ (np.swapaxes(basis, 1, 2) @ window)
    chord = window[:, -1]
    unit = chord / np.maximum(np.linalg.norm(chord, axis=1), 1e-300)[:, None]
    rest = rest - (rest @ unit[:, :, None]) * unit[:, None]
    across = points.shape[1] - 1
    squares = (rest * rest).sum(axis=(1, 2)) / (across * (_WINDOW - 3))
    kept = np.sort(squares)[: max(1, round(_KEPT * len(rows)))]
    return float(np.sqrt(kept.mean() / _KEPT_SHARE[across]))


def _looks_like_stations(polyline: Polyline, edges: FloatArray, turns: FloatArray) -> bool:
    """Tell whether the vertices are sparse points of a smooth curve: gentle turns, chords that leave the curve."""
    if len(turns) < 4:
        return False
    length = np.linalg.norm(edges, axis=1)
    gentle = np.abs(turns) < np.radians(40.0)
    extent = float(np.ptp(polyline.points, axis=0).max())
    beside = length[: len(turns)]
    sagitta = beside * np.abs(turns) / 8.0  # of an arc that turns by as much over one chord
    smooth = _same_sign(turns[gentle]) > 0.6 if gentle.sum() > 2 else False
    return bool(gentle.mean() > 0.6 and smooth and np.median(sagitta[gentle]) > _STATION_SAGITTA * extent)
