"""Judgement of stations: mistyped ones, overshoot between them, too few of them; named by where they stand."""

import math

from converter.jobs.spring_records import JudgementRecord
from converter.jobs.stations import StationProfile
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.interpolate import EndCondition
from geometry.parameter import ParameterKind
from geometry.springing import Sprung, spring
from geometry.stations import judge_stations, overshoots, sparse_spans

__all__ = ["judged"]

_MOST_JUDGED = 20_000  # stations of a profile: more were not typed by anybody
_COLUMNS = ("x", "y", "z")


def judged(
    profile: StationProfile,
    sprung: Sprung,
    degree: int,
    ends: EndCondition,
    parameter: ParameterKind,
    names: tuple[str, ...],
) -> JudgementRecord:
    """Judge the stations of a profile and the curve through them.

    Args:
        profile: stations, in the frame that they are read in.
        sprung: the curve, in the same frame.
        degree, ends, parameter: that it was sprung with.
        names: headings of the coordinates.
    """
    record = JudgementRecord()
    if len(profile.points) > _MOST_JUDGED:
        profile.warnings.append(f"more than {_MOST_JUDGED} stations are not judged: nobody typed them")
        return record
    names = names if len(names) == profile.points.shape[1] else _COLUMNS
    for suspect in judge_stations(profile.points, profile.closed, profile.corners):
        record.suspects.append(
            {
                "row": suspect.row + 1,
                "place": profile.places[suspect.row],
                "line": None if profile.lines is None else profile.lines[suspect.row],
                "column": names[suspect.column],
                "given": suspect.given,
                "fair": suspect.fair,
                "off": suspect.off,
                "meant": suspect.meant,
                "odds": suspect.odds,
            }
        )

    def respring(other: ParameterKind | None, end: EndCondition | None, power: int | None) -> tuple[Spline, FloatArray]:
        if end is not None and profile.closed:
            raise ValueError("a closed curve has no ends")
        if (end or ends) == "clamped":
            raise ValueError("the directions at the ends belong to the present curve")
        again = spring(
            profile.points, profile.closed, profile.corners, power or degree, end or ends, other or parameter
        )
        return again.spline, again.parameters

    rows = sprung.rows.tolist()
    for fault in overshoots(sprung.spline, sprung.parameters, respring):
        ends_of = _ends(profile, rows, fault.from_row)
        size = math.degrees(fault.size) if fault.kind == "turn" else fault.size
        x, y = fault.where[:2].tolist()
        record.overshoots.append({"kind": fault.kind, **ends_of, "size": size, "x": x, "y": y, "cure": fault.cure})
    for span in sparse_spans(sprung.spline, sprung.parameters):
        x, y = span.where[:2].tolist()
        where = {"turn_deg": math.degrees(span.turn), "x": x, "y": y, "along": span.along}
        record.sparse.append({**_ends(profile, rows, span.row), **where})
    return record


def _ends(profile: StationProfile, rows: list[int], at: int) -> dict[str, int | str]:
    """Return the stations at the ends of a piece, rows counted from 1."""
    first, last = rows[at], rows[(at + 1) % len(rows)]
    places = profile.places
    return {"from_row": first + 1, "to_row": last + 1, "from_place": places[first], "to_place": places[last]}
