"""The job `fair`: profiles of a drawing in, fair curves in their place out, with a record of every one."""

import math
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

import converter
from converter.drawing import Drawing, Profile, Written, read_drawing, replace, save
from converter.files import check_output
from converter.jobs.assess import Assessment, assess
from converter.jobs.choices import choices, found, not_kept, possible_form
from converter.jobs.corners import corner_turns, outline_corners
from converter.jobs.forms import Result, Search
from converter.jobs.marks import Marks, read_marks
from converter.jobs.records import DeviationRecord, FairRecord, ProfileRecord
from converter.jobs.settings import CHORD_SHARE, MOST_ROUNDING, FairSettings, Stated, stated
from converter.jobs.writing import counts_of, least_of, rounded
from geometry.arrays import FloatArray
from geometry.deviation import hausdorff
from geometry.fairness import fairness
from geometry.polyline import Polyline
from geometry.signed import deviation_statistics
from geometry.travel import travel_order

__all__ = ["FairSettings", "fair_drawing"]

_WIDTH = 1.0 / 200.0
_FEW = 30  # entities: no more need be said of how many they are
_OUT_OF_ORDER = 1.5  # tolerances that outline and curve may be apart in order of travel: the bound is not tight
_SHORT = 0.7  # of the recommended tolerance: one that is smaller leaves jaggedness in the curve


def fair_drawing(
    source: Path, output: Path | None, settings: FairSettings, progress: Callable[[int, int], None] | None = None
) -> FairRecord:
    """Fair the profiles of a drawing and write it.

    Args:
        source: DXF file, never changed.
        output: DXF file; it appears whole or not at all. None writes nothing and only reports.
        settings: see `FairSettings`.
        progress: called with profiles done and profiles in all, after each.

    Raises:
        ConverterError: the input or the settings cannot be used, or the output cannot be written.
    """
    clock = time.perf_counter()
    if output is not None:
        check_output(output, settings.force, [source])
    drawing = read_drawing(source, settings.layers, settings.gap, settings.units)
    drawing.require_profiles()
    lengths = stated(settings, drawing)
    version = (settings.version or drawing.version).upper()
    record = FairRecord(
        "fair",
        converter.__version__,
        str(source),
        None if output is None else str(output),
        drawing.units.symbol,
        lengths.tolerance if lengths.tolerance is not None else "auto",
        _chord_error(settings, lengths),
        settings.form,
        settings.degree,
        drawing.gap,
        settings.budget,
        settings.decimals,
    )
    record.seconds["read"] = time.perf_counter() - clock
    clock = time.perf_counter()
    count = len(drawing.profiles)
    marks = read_marks(drawing, settings.corners_on)
    for done, profile in enumerate(list(drawing.profiles), start=1):
        record.profiles.append(_fair_profile(drawing, profile, lengths, version, marks, settings))
        if progress is not None:
            progress(done, count)
    record.seconds["fair"] = time.perf_counter() - clock
    clock = time.perf_counter()
    record.warnings += [*marks.unused(), *drawing.warnings]
    if output is not None:
        record.warnings += save(drawing, output, settings.version, settings.force)
    record.passed_through = dict(drawing.passed_through)
    record.skipped = [{"handle": s.handle, "type": s.type, "reason": s.reason} for s in drawing.skipped]
    record.seconds["write"] = time.perf_counter() - clock
    return record


def _chord_error(settings: FairSettings, lengths: Stated) -> float | str:
    if settings.budget is not None:
        return f"the smallest that keeps {settings.budget} entities a profile"
    return lengths.chord_error if lengths.chord_error is not None else f"{CHORD_SHARE:g} of the tolerance"


def _fair_profile(
    drawing: Drawing, profile: Profile, lengths: Stated, version: str, marks: Marks, settings: FairSettings
) -> ProfileRecord:
    need = assess(profile, lengths.tolerance, settings.redraw)
    if need.as_drawn or need.outline is None:
        return _as_drawn(profile, need, need.reason)
    angle = None if settings.corner_angle is None else math.radians(settings.corner_angle)
    origin = need.outline.points[0]  # a given point: far from the origin of the drawing nothing is rounded by this
    outline = need.outline.moved(-origin)
    pins = marks.in_frame(profile) - origin
    corners, used = outline_corners(outline, need.tolerance, angle, pins, need.pitch)
    marks.used |= used
    form, said = possible_form(settings.form, profile, version)
    writing = lengths.writing_as(form)
    if writing.rounding > MOST_ROUNDING * need.tolerance:
        return _failed(
            profile,
            need,
            f"{settings.decimals} decimals move points by up to {writing.rounding:.3g}, too much for a tolerance of "
            f"{need.tolerance:.3g}; state more of them",
        )
    search = Search(outline, corners, need.tolerance, settings.degree, need.slack)
    result, reached = found(search, writing, lengths, settings.budget)
    if result is None:
        return _failed(profile, need, "no fair curve keeps the tolerance; state a larger one")
    curve = rounded(result.curve.moved(origin), result.circle, settings.decimals)
    written = replace(drawing, profile, curve, version, settings.decimals)
    record = _record(profile, need, written, result, origin)
    record.least = least_of(result.faired.spline, result.faired.circle, result.chord_error, writing)
    record.within_budget = reached
    record.warnings += [*said, *(f"not kept: {line}" for line in written.lost)]
    record.warnings += _doubts(result, need, record)
    record.warnings += not_kept(result, curve, writing, origin, None if reached else settings.budget)
    record.choices = choices(search, record, form, lengths, settings, profile, version)
    return record


def _doubts(result: Result, need: Assessment, record: ProfileRecord) -> list[str]:
    """Return what a person has to know about a curve."""
    said = []
    if result.crosses:
        said.append("the curve crosses or touches itself: two walls are closer than the tolerance")
    if need.jaggedness is not None and need.jaggedness.kind == "stations":
        said.append(f"{need.jaggedness.reason}, yet they were taken as the outline")
    if need.jaggedness is not None and need.tolerance < _SHORT * need.jaggedness.tolerance:
        said.append(
            f"{need.tolerance:.4g} is too little to take out the jaggedness, which stays in the curve; --tolerance "
            f"auto would take {need.jaggedness.tolerance:.4g}: {need.jaggedness.reason}"
        )
    elif record.entities > max(record.vertices_in, _FEW):
        said.append(
            f"{record.entities} entities are more than the {record.vertices_in} vertices given; a larger tolerance or "
            "chord error takes fewer"
        )
    return said


def _as_drawn(profile: Profile, need: Assessment, reason: str) -> ProfileRecord:
    """Return the record of a profile that is not touched."""
    length = profile.length()
    area = profile.area()
    record = ProfileRecord(
        profile.id,
        profile.layer,
        profile.closed,
        profile.vertices_in,
        _kinds(profile),
        _kinds(profile),
        None,
        need.reason,
        _jaggedness(need),
        reason,
        vertices_out=profile.vertices_in,
        length_in=length,
        length_out=length,
        area_in=area,
        area_out=area,
        deviation=DeviationRecord(0.0, 0.0, 0.0, 0.0, 0.0),
    )
    if need.unusable:
        record.warnings.append(f"passed through unchanged: {reason}")
    return record


def _failed(profile: Profile, need: Assessment, reason: str) -> ProfileRecord:
    """Return the record of a profile that could not be faired as it was asked for."""
    record = _as_drawn(profile, need, reason.split(";")[0])
    record.within_tolerance = False
    record.warnings.append(f"left as drawn: {reason}")
    return record


def _kinds(profile: Profile) -> str:
    return "/".join(sorted(set(profile.types)))


def _jaggedness(need: Assessment) -> dict[str, float | str] | None:
    if need.jaggedness is None:
        return None
    return {"kind": need.jaggedness.kind, "size": need.jaggedness.size, "recommended": need.jaggedness.tolerance}


def _record(profile: Profile, need: Assessment, written: Written, result: Result, origin: FloatArray) -> ProfileRecord:
    """Return the record of a faired profile; the certificate is of the curve as the file will hold it."""
    outline, curve, tolerance = need.outline, written.curve, need.tolerance
    assert outline is not None
    deviation = hausdorff(outline, curve, _WIDTH * tolerance)
    certified = deviation.certified + need.slack
    in_order = travel_order(outline, curve, tolerance).certified + need.slack
    statistics = deviation_statistics(curve, outline, tolerance)
    points, turns = corner_turns(result.faired.spline.moved(origin))
    circle = result.faired.circle
    counts = counts_of(curve, written.type == "CIRCLE")
    record = ProfileRecord(
        profile.id,
        profile.layer,
        profile.closed,
        profile.vertices_in,
        _kinds(profile),
        written.type,
        tolerance,
        need.reason,
        _jaggedness(need),
        None,
        pieces=counts.pieces,
        control_points=counts.control_points,
        arcs=counts.arcs,
        lines=counts.lines,
        vertices_out=counts.vertices,
        entities=counts.entities,
        chord_error=result.chord_error,
        corners=[
            {"x": float(p[0]), "y": float(p[1]), "turn_deg": math.degrees(float(t))}
            for p, t in zip(points, turns, strict=True)
        ],
        deviation=DeviationRecord(
            certified, max(0.0, deviation.measured - need.slack), statistics.rms, statistics.mean_signed, in_order
        ),
        fairness={
            "before": fairness(outline, tolerance, _alongs(outline, points)).record(),
            "after": fairness(curve, tolerance).record(),
        },
        diameter=None if circle is None else 2.0 * circle[1],
        length_in=outline.length(),
        length_out=curve.length(),
        area_in=outline.area(),
        area_out=curve.area(),
        within_tolerance=certified <= tolerance,
    )
    if not record.within_tolerance:
        said = f"out of tolerance: certified {certified:.4g} of {tolerance:.4g}; state a larger tolerance"
        record.warnings.append(said)
    elif in_order > _OUT_OF_ORDER * tolerance:
        record.warnings.append(
            f"passed in the same order, outline and curve are only proven to stay within {in_order:.4g} of each other: "
            "the curve may cut across a narrow neck or leave out a spike; look there, or state a smaller tolerance"
        )
    return record


def _alongs(outline: Polyline, points: FloatArray) -> FloatArray:
    """Return the arc length of the vertex nearest to each point."""
    nearest = [int(((outline.points - point) ** 2).sum(axis=1).argmin()) for point in points]
    return outline.alongs()[np.array(nearest, dtype=np.intp)]
