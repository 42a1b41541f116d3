"""How fair a curve is: inflections, curvature extrema, least radius, strain energy, and the curvature comb.

The measures are of the curve, not of the points that describe it: the counts stay the same and the lengths nearly so
when a spline gets more knots, an arc more joints or a smooth polyline more vertices. What is too small to matter is
told from what counts by height (distance) and turning (angle), against a scale that the caller states; the tolerance is
a good one.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arcs import ArcChain
from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.bspline import Spline
from geometry.errors import GeometryError
from geometry.polyline import Polyline
from geometry.turning import Trace, trace_of

__all__ = ["LEAST_HEIGHT", "LEAST_TURNING", "PROMINENCE", "CurvatureComb", "Fairness", "curvature_comb", "fairness"]

LEAST_TURNING = np.radians(1.0)
"""A lobe of curvature that turns by this or more, radians, counts whatever its height."""
LEAST_HEIGHT = 0.05
"""A lobe that stands this share of the scale or more off its chord counts whatever its turning."""
PROMINENCE = 0.02
"""A curvature extremum counts when it stands out by this share of the range of the curvature."""

_ROUNDING = 1e-9  # heights under this share of the extent are rounding, whatever the scale
_STRAIGHT = 1e-9  # turns from sample to sample under this, radians, have no sign


@dataclass(frozen=True, slots=True)
class Fairness:
    """Measures of one curve; corners are left out of all of them.

    Attributes:
        inflections: how often the curvature changes sign between lobes that count.
        curvature_extrema: maxima and minima of the signed curvature that count, between corners; ends are none.
        least_radius: 1 / largest absolute curvature, drawing units; inf when the curve is straight.
        strain_energy: integral of curvature squared over arc length, 1 / drawing units.
        corners: how many jumps of the tangent were left out.
    """

    inflections: int
    curvature_extrema: int
    least_radius: float
    strain_energy: float
    corners: int

    def record(self) -> dict[str, int | float | None]:
        """Return the measures by name, for a JSON record: an infinite least radius becomes None."""
        return {
            "inflections": self.inflections,
            "curvature_extrema": self.curvature_extrema,
            "least_radius": self.least_radius if np.isfinite(self.least_radius) else None,
            "strain_energy": self.strain_energy,
            "corners": self.corners,
        }


@dataclass(frozen=True, slots=True, eq=False)
class CurvatureComb:
    """Teeth of a curvature comb, in order of travel.

    Attributes:
        points: feet of the teeth on the curve, shape (n, 2), drawing units.
        tips: their tips, shape (n, 2), on the outside of each bend.
        starts: index of the first tooth of every smooth piece, shape (pieces,).
    """

    points: FloatArray
    tips: FloatArray
    starts: IntArray


def fairness(curve: Spline | ArcChain | Polyline, scale: float, corners: FloatArray | None = None) -> Fairness:
    """Measure the fairness of a curve.

    Lobes: the curve between corners falls into lobes in which it turns one way. A lobe counts when it turns by
    `LEAST_TURNING` or more or when the curve stands off the chord of the lobe by `LEAST_HEIGHT * scale` or more. One
    that does not is joined with its neighbours, least turning first, until only lobes that count are left (or one a
    piece). An inflection lies between any two lobes left next to each other. The height needs no sampling density
    and no curvature threshold, so a long flat bow and a short wiggle are judged by the same ruler.
    Extrema: of the signed curvature, cut at +-1 / scale (a tighter bend is as good as a corner) and taken as 0 in lobes
    that do not count. One counts when the curvature falls (rises) from it by `PROMINENCE` times the range on both
    sides; the range is that of the curvature and 0 over the whole curve, so that ripples on a circle count against
    its curvature, not against themselves.
    Polylines: the turn of a vertex over half the length of its two segments is its curvature, after vertices nearer
    than a tenth of the scale to the one before are passed over; a jagged one is measured as jagged at that scale.
    Curves in space have curvature without sign and no inflections.

    Args:
        curve: open or closed, of some length.
        scale: length, drawing units, at or above 0; 0 counts everything that is more than rounding.
        corners: arc lengths of a polyline's corners, see `geometry.turning.trace_of`; not used for other curves.

    Raises:
        GeometryError: the scale is negative or not finite.
    """
    if not 0.0 <= scale < np.inf:
        raise GeometryError(f"a scale of {scale:g} cannot be used for fairness; it must be 0 or more")
    trace = trace_of(curve, scale, corners)
    extent = float(np.ptp(trace.points, axis=0).max())
    bend = trace.curvature
    inflections = 0
    if trace.points.shape[1] == 2:
        trace = _begun_in_largest_lobe(trace)
        inflections, bend = _lobes(trace, max(LEAST_HEIGHT * scale, _ROUNDING * extent))
    if scale > 0.0:
        bend = np.clip(bend, -1.0 / scale, 1.0 / scale)
    radius = 1.0 / trace.tightest if trace.tightest * extent > _ROUNDING else np.inf
    return Fairness(inflections, _extrema(bend, trace), radius, trace.energy, trace.corners)


def curvature_comb(
    curve: Spline | ArcChain | Polyline, height: float, scale: float = 0.0, teeth: int = 600
) -> CurvatureComb:
    """Return a curvature comb: teeth square to a planar curve, in proportion to its curvature, for pictures.

    Args:
        curve: planar.
        height: length of the longest tooth, drawing units.
        scale: as in `fairness`; bends tighter than it are cut off there when it is above 0.
        teeth: about how many at most.

    Raises:
        GeometryError: the curve is not planar.
    """
    if curve.dimension != 2:
        raise GeometryError("a curvature comb can only be drawn for a planar curve; drop the third coordinate")
    trace = trace_of(curve, scale)
    bend = np.clip(trace.curvature, -1.0 / scale, 1.0 / scale) if scale > 0.0 else trace.curvature
    first = np.concatenate([[True], trace.corner])
    last = np.append(trace.corner, True)
    chosen = first | last | (np.arange(len(bend)) % max(1, -(-len(bend) // teeth)) == 0)
    chosen &= np.isfinite(bend)
    piece = np.cumsum(first)[chosen]
    top = float(np.abs(bend[chosen]).max(initial=0.0))
    outward = np.stack([trace.tangents[chosen, 1], -trace.tangents[chosen, 0]], axis=1)
    points = trace.points[chosen] + trace.origin
    tips = points + outward * (bend[chosen, None] * (height / top if top > 0.0 else 0.0))
    return CurvatureComb(points, tips, np.flatnonzero(np.diff(piece, prepend=0) > 0))


def _begun_in_largest_lobe(trace: Trace) -> Trace:
    """Return a cyclic trace that begins in the middle of the lobe of largest turning, so that its ends are one lobe."""
    if not trace.cyclic:
        return trace
    starts, _ = _runs(trace.turns, trace.corner)
    if len(starts) < 2:
        return trace
    total = np.add.reduceat(trace.turns, starts)
    if np.sign(total[0]) == np.sign(total[-1]):  # one lobe across the seam
        total[0] = total[-1] = total[0] + total[-1]
    largest = int(np.abs(total).argmax())
    ends = np.append(starts[1:], len(trace.turns))
    # a lobe across the seam already holds the beginning
    across = total[0] == total[-1] and largest in (0, len(starts) - 1)
    shift = 0 if across else int(starts[largest] + ends[largest]) // 2
    rolled = [np.roll(a[:-1], -shift, axis=0) for a in (trace.points, trace.tangents, trace.curvature)]
    points, tangents, curvature = (np.concatenate([a, a[:1]]) for a in rolled)
    turns = np.roll(trace.turns, -shift)
    return Trace(points, tangents, curvature, turns, trace.corner, True, 0, trace.energy, trace.tightest, trace.origin)


def _runs(turns: FloatArray, corner: BoolArray) -> tuple[IntArray, FloatArray]:
    """First step of every run of one sign (a step past a corner is a run of its own), and the sign of every step."""
    sign = np.where(np.abs(turns) > _STRAIGHT, np.sign(turns), 0.0)
    sign[corner] = 2.0
    for _ in range(2):  # straight steps take the sign before them, or at the beginning of a piece the one behind
        known = np.maximum.accumulate(np.where(sign != 0.0, np.arange(len(sign)), 0))
        filled = np.where(sign == 0.0, sign[known], sign)
        sign = np.where((filled == 2.0) & ~corner, 0.0, filled)[::-1]
        corner = corner[::-1]
    sign[sign == 0.0] = 1.0  # a piece that is straight all along
    return np.concatenate([[0], 1 + np.flatnonzero((np.diff(sign) != 0.0) | corner[1:] | corner[:-1])]), sign


def _lobes(trace: Trace, limit: float) -> tuple[int, FloatArray]:
    """Count the inflections and return the curvature with that of lobes that do not count set to 0, shape (m,)."""
    if not len(trace.turns):
        return 0, trace.curvature
    starts, _ = _runs(trace.turns, trace.corner)
    ends = np.append(starts[1:], len(trace.turns))
    real = ~trace.corner[starts]
    starts, ends = starts[real], ends[real]
    piece = np.cumsum(trace.corner)[starts]
    turned = np.concatenate([[0.0], np.cumsum(np.where(trace.corner, 0.0, trace.turns))])
    while True:
        turning = turned[ends] - turned[starts]
        with_next = np.append(piece[1:] == piece[:-1], False)
        with_last = np.concatenate([[False], with_next[:-1]])
        alike = with_next & (np.sign(turning) == np.sign(np.append(turning[1:], 0.0)))
        if not alike.any():
            weak = np.abs(turning) < LEAST_TURNING
            weak[weak] = _heights(trace.points, starts[weak], ends[weak]) < limit
            joinable = weak & (with_next | with_last)
            if trace.cyclic:
                joinable[[0, -1]] = False  # the two halves of the largest lobe
            key = np.where(joinable, np.abs(turning), np.inf)
            left = np.where(with_last, np.roll(key, 1), np.inf)
            right = np.where(with_next, np.roll(key, -1), np.inf)
            least = joinable & (key < left) & (key <= right)
            if not least.any():
                break
            alike = with_next & (least | np.append(least[1:], False))
        first = np.concatenate([[True], ~alike[:-1]])  # `alike` says which lobes go together with the next one
        starts, ends, piece = starts[first], ends[~alike], piece[first]
    if trace.cyclic:
        weak[[0, -1]] = False
    return int(with_next.sum()), _straightened(trace, starts, turning, weak)


def _heights(points: FloatArray, starts: IntArray, ends: IntArray) -> FloatArray:
    """Greatest distance of the samples starts..ends from their chord, for every lobe."""
    if not len(starts):
        return np.zeros(0)
    count = ends - starts + 1
    offset = np.cumsum(count) - count
    lobe = np.repeat(np.arange(len(count)), count)
    sample = np.arange(int(count.sum())) - offset[lobe] + starts[lobe]
    chord = points[ends] - points[starts]
    length = np.linalg.norm(chord, axis=1)
    x, y = (points[sample] - points[starts][lobe]).T
    unit = np.divide(chord, length[:, None], out=np.zeros_like(chord), where=length[:, None] > 0.0)[lobe]
    away = np.where(length[lobe] > 0.0, np.abs(unit[:, 0] * y - unit[:, 1] * x), np.hypot(x, y))
    return np.asarray(np.maximum.reduceat(away, offset), dtype=np.float64)


def _straightened(trace: Trace, starts: IntArray, turning: FloatArray, weak: BoolArray) -> FloatArray:
    # a sample belongs to the lobe that it opens; the last one of a piece to the lobe that it closes
    step = np.minimum(np.arange(len(trace.curvature)), len(trace.turns) - 1)
    step = np.where(trace.corner[step] & (step > 0), step - 1, step)
    lobe = np.clip(np.searchsorted(starts, step, side="right") - 1, 0, len(starts) - 1)
    with np.errstate(invalid="ignore"):
        against = weak[lobe] | (np.sign(trace.curvature) * np.sign(turning[lobe]) < 0.0)
    return np.where(against & np.isfinite(trace.curvature), 0.0, trace.curvature)


def _extrema(bend: FloatArray, trace: Trace) -> int:
    """Count the reversals of the curvature that pass the prominence, piece by piece."""
    value = bend[np.isfinite(bend)]
    piece = np.concatenate([[0], np.cumsum(trace.corner)])[np.isfinite(bend)]
    if not len(value):
        return 0
    least = PROMINENCE * (max(float(value.max()), 0.0) - min(float(value.min()), 0.0))
    if least <= 0.0:
        return 0
    if trace.cyclic:  # begin at the largest, so that every reversal lies between the ends
        top = int(value[:-1].argmax())
        value = np.append(np.roll(value[:-1], -top), value[top])
    rise = np.sign(np.diff(value))
    rise[piece[1:] != piece[:-1]] = 2.0
    keep = np.concatenate([[True], rise[1:] != rise[:-1], [True]])
    keep[:-1] |= rise == 2.0
    keep[1:] |= rise == 2.0
    count, swings, low, high, way, last_piece = 0, 0, 0.0, 0.0, 0, -1
    for here, k in zip(piece[keep].tolist(), value[keep].tolist(), strict=True):
        if here != last_piece:
            last_piece, low, high, way = here, k, k, 0
        low, high = (k if k < low else low), (k if k > high else high)
        if way >= 0 and high - k >= least:
            count += way > 0
            way, low, high, swings = -1, k, k, swings + 1
        elif way <= 0 and k - low >= least:
            count += way < 0
            way, low, high, swings = 1, k, k, swings + 1
    return count + int(trace.cyclic and swings > 0)
