"""How far the two profiles of a pair lie from each other: certified, signed along NEW, and in zones."""

import math
from dataclasses import replace

import numpy as np

from converter.jobs.comparison import Compared, Limits, PairDeviation, PairRecord, ZoneRecord
from converter.jobs.figures import Figure, in_space
from geometry.deviation import TwoSided, hausdorff, within
from geometry.sides import within_sides
from geometry.signed import Course, course_along
from geometry.simple import is_simple
from geometry.travel import travel_order
from geometry.zones import Zone, missed_zones, zones

__all__ = ["decided", "measured"]

_WIDTH = 1.0 / 200.0  # of the limit: how far certified and measured may lie apart
_FINE = 1e-5  # of the size: the same where there is no limit, and the least deviation that is a limit for the search
_COURSE = 1.0 / 4000.0  # of the limit, or of the distance where that is less: chord error of signed deviations
_LEAST = 1e-8  # of the size: chord errors and widths are taken no smaller
_SPACING = 1e-5  # of the size: samples of the deviation follow no closer than this
_RESOLUTION = 1e-3  # of the limit: a fast verdict that is closer is left open, and that is out
_CLOSER = 1e-2  # times the width: tried where the limit lies between measured and certified
_OUT_OF_ORDER = 1.5  # times the distance: what two profiles in the same order may be proven to on top of it
_UNDECIDED = "too close to the limit to be proven within it: counted as out"
_LIFTED = 1e-7  # of the size: what arcs in space are flattened to


def measured(old: Figure, new: Figure, how: str, limits: Limits | None) -> Compared:
    """Measure a pair: distances both ways, the deviation along NEW, the zones out of limits, the verdict."""
    old, new, said = _comparable(old, new)
    slack = old.slack + new.slack
    size = max(old.size, new.size, 1e-300)
    scale = _FINE * size if limits is None else min(limits.plus, limits.minus)
    distance = hausdorff(new.curve, old.curve, max(_WIDTH * scale, _LEAST * size))
    inside: bool | None = None
    if limits is not None:
        inside, distance, told = _verdict(old, new, limits, distance, slack)
        said += told
    certified = max(distance.forward.certified, distance.backward.certified) + slack
    spacing = max(scale, _SPACING * size)
    error = max(_LEAST * size, min(_COURSE * scale, _COURSE * certified))
    course = course_along(new.curve, old.curve, spacing, _crosses(old, scale), error)
    if certified == 0.0:  # the same number for number: nothing but chord errors could be measured
        course = replace(course, deviation=np.zeros(len(course.along)))
    figures = course.statistics()
    order = 0.0 if certified == 0.0 else None
    if certified > 0.0 and old.closed == new.closed:
        order = travel_order(new.curve, old.curve, max(scale, 1.01 * certified)).certified + slack
        said += _order_note(order, certified, limits, scale)
    record = PairRecord(
        old.id,
        new.id,
        new.layer,
        new.closed,
        how,
        old.curve.length(),
        new.curve.length(),
        PairDeviation(
            certified,
            max(0.0, max(distance.forward.measured, distance.backward.measured) - slack),
            distance.forward.certified + slack,
            distance.backward.certified + slack,
            order,
            figures.rms,
            figures.mean_signed,
            None if figures.max_plus is None else min(figures.max_plus, certified),
            None if figures.max_minus is None else max(figures.max_minus, -certified),
            figures.percentile_95,
        ),
        [] if limits is None or inside or _UNDECIDED in said else _zones(old, new, limits),
        inside,
        said,
    )
    return Compared(old.curve, new.curve, course, record)


def decided(old: Figure, new: Figure, how: str, limits: Limits | None) -> Compared:
    """Decide as fast as can be whether a pair keeps its limits; distances are the bounds that this took.

    What was not needed is NaN, a bound that was not reached infinite.
    """
    assert limits is not None
    old, new, said = _comparable(old, new)
    slack = old.slack + new.slack
    inside: bool | None = None
    bounds = [math.inf, math.inf]
    found = 0.0
    if limits.equal and limits.plus > slack:
        decision = within(new.curve, old.curve, limits.plus - slack, _RESOLUTION)
        inside = decision.inside
        for k, part in enumerate((decision.forward, decision.backward)):
            if part is not None:
                bounds[k], found = part.certified + slack, max(found, part.measured - slack)
    elif not limits.equal:
        distance = hausdorff(new.curve, old.curve, _WIDTH * min(limits.plus, limits.minus))
        inside, distance, told = _verdict(old, new, limits, distance, slack)
        said += told
        bounds = [distance.forward.certified + slack, distance.backward.certified + slack]
        found = max(0.0, max(distance.forward.measured, distance.backward.measured) - slack)
    if inside is None:
        said.append(_UNDECIDED)
    lengths = old.curve.length(), new.curve.length()
    figures = PairDeviation(max(bounds), found, bounds[0], bounds[1], None, math.nan, None, None, None, math.nan)
    record = PairRecord(old.id, new.id, new.layer, new.closed, how, *lengths, figures, [], bool(inside), said)
    nothing = np.zeros(0)
    return Compared(old.curve, new.curve, Course(nothing, np.zeros((0, new.curve.dimension)), nothing, nothing), record)


def _comparable(old: Figure, new: Figure) -> tuple[Figure, Figure, list[str]]:
    """Return both in plan or both in space, and what is to be said about that."""
    if old.curve.dimension != new.curve.dimension:
        delta = _LIFTED * max(old.size, new.size, 1e-300)
        said = ["one lies in a plane, the other in space: compared in space, where there are no sides"]
        return in_space(old, delta), in_space(new, delta), said
    if old.curve.dimension == 2 and abs(old.elevation - new.elevation) > _LIFTED * max(old.size, new.size):
        return old, new, [f"heights differ by {new.elevation - old.elevation:+.6g}: compared in plan"]
    return old, new, []


def _verdict(
    old: Figure, new: Figure, limits: Limits, distance: TwoSided, slack: float
) -> tuple[bool, TwoSided, list[str]]:
    """Return whether the limits are proven to be kept, the distance as it then is known, and what is to be said."""
    most = max(limits.plus, limits.minus)
    for width in (None, _CLOSER):
        if width is not None:
            least = 0.1 * _LEAST * max(old.size, new.size)
            distance = hausdorff(new.curve, old.curve, max(width * _WIDTH * min(limits.plus, limits.minus), least))
        parts = (distance.forward, distance.backward) if limits.equal else (distance.backward,)
        if max(part.measured for part in parts) - slack > most:
            return False, distance, [] if limits.equal else [_uncovered(distance, slack)]
        if max(part.certified for part in parts) + slack <= most:
            break
    else:
        return False, distance, [_UNDECIDED]
    if limits.equal:
        return True, distance, []
    if slack >= min(limits.plus, limits.minus):
        return False, distance, [_UNDECIDED]
    if new.curve.dimension == 3:
        inside = distance.forward.certified + slack <= min(limits.plus, limits.minus)
        return inside, distance, ["in space there are no sides: the smaller limit holds all round"]
    sides = within_sides(new.curve, old.curve, limits.plus - slack, limits.minus - slack)
    if sides.point is None:
        return sides.inside is True, distance, []
    place = f"{sides.deviation:+.4g} at ({sides.point[0]:.6g}, {sides.point[1]:.6g})"
    return False, distance, [_UNDECIDED if sides.inside is None else f"out on its side: {place}"]


def _uncovered(distance: TwoSided, slack: float) -> str:
    far = distance.backward.measured - slack
    return f"NEW does not reach all of OLD: a place of OLD is at least {far:.4g} from it"


def _order_note(order: float, certified: float, limits: Limits | None, floor: float) -> list[str]:
    """Return a warning where the profiles are near one another but not passed in the same order."""
    if order <= max(_OUT_OF_ORDER * certified, floor if limits is None else max(limits.plus, limits.minus)):
        return []
    return [
        f"passed from end to end in the same order they are only proven to stay within {order:.4g} of one another: NEW "
        "may cut across a neck, leave out a spike or swap two walls; look there"
    ]


def _zones(old: Figure, new: Figure, limits: Limits) -> list[ZoneRecord]:
    """Return the stretches out of limits, the farthest first."""
    planar = new.curve.dimension == 2
    found = zones(new.curve, old.curve, limits.plus, limits.minus, _crosses(old, min(limits.plus, limits.minus)))
    words = ("outside", "inside") if old.closed else ("left", "right")
    out = [_record(zone, words[zone.peak < 0.0] if planar else "off", "new") for zone in found]
    missed = missed_zones(new.curve, old.curve, max(limits.plus, limits.minus), found)
    out += [_record(zone, "missing", "old") for zone in missed]
    return sorted(out, key=lambda zone: -abs(zone.peak))


def _crosses(figure: Figure, scale: float) -> bool:
    """Tell whether a closed planar figure crosses or touches itself."""
    return figure.closed and figure.curve.dimension == 2 and not is_simple(figure.curve.flatten(0.1 * scale))


def _record(zone: Zone, side: str, profile: str) -> ZoneRecord:
    x, y = zone.point[:2]
    return ZoneRecord(zone.from_along, zone.to_along, side, zone.peak, zone.along, x, y, profile)
