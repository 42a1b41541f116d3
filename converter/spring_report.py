"""What people read after `spring`: a row a curve, what to check, and the outcome in one sentence."""

import math
from typing import Any

from converter.jobs.spring_records import SpringRecord, SprungRecord

__all__ = ["HEADINGS", "RIGHT", "check_lines", "sentence", "spring_rows"]

HEADINGS = ("profile", "layer", "stations", "written", "corners", "length", "least radius", "off stations")
RIGHT = ("stations", "corners", "length", "least radius", "off stations")
_SHOWN = 40
_MOST_CHECKS = 20
_NOTHING = 1e-9  # of the length: distances below it are rounding


def spring_rows(record: SpringRecord) -> list[tuple[str, ...]]:
    """Return a row of text for each of the first curves."""
    return [_row(profile) for profile in record.profiles[:_SHOWN]]


def _row(profile: SprungRecord) -> tuple[str, ...]:
    radius = (profile.fairness["after"] or {}).get("least_radius")
    off = ""
    if profile.deviation is not None:
        met = profile.deviation.certified <= _NOTHING * profile.length_in
        off = "exact" if met else f"{profile.deviation.certified:.3g}"
        off += "" if profile.within_tolerance else " OUT"
    return (
        profile.id,
        profile.layer,
        str(profile.vertices_in) + ("" if profile.closed else ", open"),
        _written(profile),
        str(len(profile.corners)),
        f"{profile.length_out:.6g}",
        "none" if radius is None or math.isinf(radius) else f"{radius:.4g}",
        off,
    )


def _written(profile: SprungRecord) -> str:
    kind = {"row": "table", "none": "not written"}.get(profile.entity, profile.entity)
    if profile.control_points:
        return f"{kind}, {profile.control_points} control points"
    if profile.arcs:
        lines = f", {profile.lines} line{'' if profile.lines == 1 else 's'}" if profile.lines else ""
        return f"{kind}, {profile.arcs} arc{'' if profile.arcs == 1 else 's'}{lines}"
    points = "points" if profile.entity == "row" else "vertices"
    return f"{kind}, {profile.vertices_out} {points}"


def check_lines(record: SpringRecord) -> list[str]:
    """Return what the user should look at, one line each, and warnings."""
    checks, notes = [], []
    several = len(record.profiles) > 1
    for profile in record.profiles:
        name = f"profile {profile.id}, " if several else ""
        judgement = profile.judgement
        checks += [f"check: {name}{_suspect(item)}" for item in judgement.suspects]
        checks += [f"check: {name}{_overshoot(item)}" for item in judgement.overshoots]
        checks += [f"check: {name}{_sparse(item)}" for item in judgement.sparse]
        notes += [f"note: {name}{warning}" for warning in profile.warnings]
    if len(checks) > _MOST_CHECKS:
        checks = [*checks[:_MOST_CHECKS], f"and {len(checks) - _MOST_CHECKS} more to check; --report lists them all"]
    return checks + notes


def _suspect(item: dict[str, Any]) -> str:
    meant = "" if item["meant"] is None else f"; {item['meant']:.10g} was probably meant"
    return (
        f"{item['place']}: {item['column']} {item['given']:.10g} looks mistyped: it is {item['off']:+.3g} off, "
        f"{item['fair']:.4g} would be fair{meant}"
    )


def _overshoot(item: dict[str, Any]) -> str:
    where = f"between {item['from_place']} and {item['to_place']} the curve"
    at = f"near ({item['x']:.5g}, {item['y']:.5g})"
    said = {
        "overshoot": f"{where} swings {item['size']:.3g} beyond what the stations show, {at}",
        "loop": f"{where} makes a loop of {item['size']:.3g}, {at}",
        "turn": f"{where} turns {item['size']:.3g} degrees more than the stations do, {at}",
    }[item["kind"]]
    return f"{said}; {_CURES[item['cure']]}"


_CURES = {
    None: "add a station there or mark a knuckle as a corner",
    "chord": "--parameter chord cures it",
    "centripetal": "--parameter centripetal cures it",
    "uniform": "--parameter uniform cures it",
    "natural": "--ends natural cures it",
    "not-a-knot": "--ends not-a-knot cures it",
    "degree 2": "--degree 2 cures it",
}


def _sparse(item: dict[str, Any]) -> str:
    return (
        f"between {item['from_place']} and {item['to_place']} the curve turns {item['turn_deg']:.3g} degrees, too far "
        f"to be known from the stations; one more near ({item['x']:.5g}, {item['y']:.5g}) would help most"
    )


def sentence(record: SpringRecord) -> str:
    """Return the outcome in one sentence."""
    count = len(record.profiles)
    parts = [f"{count} curve{'' if count == 1 else 's'} sprung"]
    measured = [p for p in record.profiles if p.deviation is not None]
    unit = "" if record.units == "unitless" else f" {record.units}"
    worst = max((p.deviation.certified for p in measured if p.deviation), default=0.0)
    length = max((p.length_in for p in measured), default=0.0)
    if measured and worst <= _NOTHING * length:
        parts.append("stations met exactly")
    elif measured:
        allowed = record.tolerance or record.chord_error
        of = "" if allowed is None else f" of {allowed:.3g}"
        parts.append(f"stations met within {worst:.3g}{of}{unit}")
    if record.chord_error is not None:
        parts.append(f"chord error {record.chord_error:.3g}{unit}")
    suspects = sum(len(p.judgement.suspects) for p in record.profiles)
    if suspects:
        parts.append(f"{suspects} station{'' if suspects == 1 else 's'} to check")
    out = [p.id for p in record.profiles if not p.within_tolerance]
    if out:
        parts.append(f"stations not met: {', '.join(out)}")
    return "; ".join(parts)
