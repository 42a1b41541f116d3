"""The job `fair`: profiles of a drawing in, fair curves in their place out, with a record of every one."""

import math
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import converter
from converter.drawing import AnyCurve, Drawing, Profile, Written, read_drawing, replace, save, supports
from converter.errors import LengthError
from converter.files import check_output
from converter.jobs.assess import Assessment, assess
from converter.jobs.forms import Form, best_curve, corner_turns, outline_corners
from converter.jobs.marks import Marks, read_marks
from converter.jobs.records import DeviationRecord, FairRecord, ProfileRecord
from converter.units import Length
from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.deviation import hausdorff
from geometry.fairness import fairness
from geometry.polyline import Polyline
from geometry.signed import deviation_statistics

__all__ = ["FairSettings", "fair_drawing"]

_CHORD_SHARE = 0.1  # of the tolerance, when no chord error is stated
_WIDTH = 1.0 / 200.0


@dataclass(frozen=True, slots=True)
class FairSettings:
    """How to fair.

    Attributes:
        tolerance: largest distance between given and written, both ways; None chooses it for each profile.
        form: what to write.
        degree: of splines, 2 or 3.
        chord_error: share of the tolerance that writing few entities may spend; None takes a tenth.
        corner_angle: degrees above which a vertex is a corner; None finds the true corners.
        corners_on: layer whose POINT entities mark corners; None for none.
        redraw: whether true curves (CIRCLE, ARC, ELLIPSE, SPLINE) are drawn afresh too.
        layers: layers to take profiles from; empty for all.
        gap: ends nearer than this are joined; None takes 1e-6 of the extent.
        units: name of the drawing's unit, overriding $INSUNITS.
        version: DXF version to write; None keeps the drawing's.
        force: whether an existing output may be replaced.
    """

    tolerance: Length | None = None
    form: Form = "spline"
    degree: int = 3
    chord_error: Length | None = None
    corner_angle: float | None = None
    corners_on: str | None = None
    redraw: bool = False
    layers: tuple[str, ...] = ()
    gap: Length | None = None
    units: str | None = None
    version: str | None = None
    force: bool = False


def fair_drawing(
    source: Path, output: Path, settings: FairSettings, progress: Callable[[int, int], None] | None = None
) -> FairRecord:
    """Fair the profiles of a drawing and write it.

    Args:
        source: DXF file, never changed.
        output: DXF file; it appears whole or not at all.
        settings: see `FairSettings`.
        progress: called with profiles done and profiles in all, after each.

    Raises:
        ConverterError: the input or the settings cannot be used, or the output cannot be written.
    """
    clock = time.perf_counter()
    check_output(output, settings.force, [source])
    drawing = read_drawing(source, settings.layers, settings.gap, settings.units)
    drawing.require_profiles()
    tolerance = _positive(drawing, settings.tolerance, "tolerance")
    chord_error = _positive(drawing, settings.chord_error, "chord error")
    if tolerance is not None and chord_error is not None and chord_error >= tolerance:
        raise LengthError(
            f"chord error {settings.chord_error} is not below the tolerance {settings.tolerance}, of which it is a "
            "share; state a smaller one"
        )
    version = (settings.version or drawing.version).upper()
    record = FairRecord(
        "fair",
        converter.__version__,
        str(source),
        str(output),
        drawing.units.symbol,
        tolerance if tolerance is not None else "auto",
        chord_error if chord_error is not None else f"{_CHORD_SHARE:g} of the tolerance",
        settings.form,
        settings.degree,
        drawing.gap,
    )
    record.seconds["read"] = time.perf_counter() - clock
    clock = time.perf_counter()
    count = len(drawing.profiles)
    marks = read_marks(drawing, settings.corners_on)
    for done, profile in enumerate(list(drawing.profiles), start=1):
        record.profiles.append(_fair_profile(drawing, profile, tolerance, chord_error, version, marks, settings))
        if progress is not None:
            progress(done, count)
    record.seconds["fair"] = time.perf_counter() - clock
    clock = time.perf_counter()
    record.warnings += marks.unused()
    record.warnings += [*drawing.warnings, *save(drawing, output, settings.version, settings.force)]
    record.passed_through = dict(drawing.passed_through)
    record.skipped = [{"handle": s.handle, "type": s.type, "reason": s.reason} for s in drawing.skipped]
    record.seconds["write"] = time.perf_counter() - clock
    return record


def _positive(drawing: Drawing, length: Length | None, name: str) -> float | None:
    if length is None:
        return None
    value = drawing.length(length)
    if value <= 0.0 or not math.isfinite(value):
        raise LengthError(f"{name} {length} is not a length above 0; state one such as 0.2 or 0.2mm")
    return value


def _fair_profile(
    drawing: Drawing,
    profile: Profile,
    tolerance: float | None,
    chord_error: float | None,
    version: str,
    marks: Marks,
    settings: FairSettings,
) -> ProfileRecord:
    need = assess(profile, tolerance, settings.redraw)
    if need.as_drawn or need.outline is None:
        return _as_drawn(profile, need, need.reason)
    form, said = _possible_form(settings.form, profile, version)
    angle = None if settings.corner_angle is None else math.radians(settings.corner_angle)
    origin = need.outline.points[0]  # a given point: far from the origin of the drawing nothing is rounded by this
    outline = need.outline.moved(-origin)
    corners, used = outline_corners(outline, need.tolerance, angle, marks.in_frame(profile) - origin)
    marks.used |= used
    allowed = chord_error if chord_error is not None else _CHORD_SHARE * need.tolerance
    result = best_curve(
        outline, corners, need.tolerance, min(allowed, 0.9 * need.tolerance), form, settings.degree, need.slack
    )
    if result is None:
        record = _as_drawn(profile, need, "no fair curve keeps the tolerance")
        record.within_tolerance = False
        record.warnings.append("no fair curve keeps the tolerance, so the profile is left as drawn; state a larger one")
        return record
    written = replace(drawing, profile, result.curve.moved(origin), version)
    record = _record(profile, need, written, result.faired.spline.moved(origin), result.faired.circle)
    record.warnings += [*said, *(f"not kept: {line}" for line in written.lost)]
    if result.crosses:
        record.warnings.append("the curve crosses or touches itself: two walls are closer than the tolerance")
    if need.jaggedness is not None and need.jaggedness.kind == "stations":
        record.warnings.append(f"{need.jaggedness.reason}, yet they were taken as the outline")
    return record


def _possible_form(form: Form, profile: Profile, version: str) -> tuple[Form, list[str]]:
    """Return the form that the version and the profile allow, and what has to be said about it."""
    if profile.dimension == 3 and form == "arcs":
        form, said = "spline", ["arcs lie in a plane and this profile does not: written as a spline"]
    else:
        said = []
    if form == "spline" and not supports(version, "SPLINE"):
        form = "arcs" if profile.dimension == 2 else "lines"
        said.append(f"DXF {version} has no SPLINE: written as {form}")
    return form, said


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
        deviation=DeviationRecord(0.0, 0.0, 0.0, 0.0),
    )
    if need.unusable:
        record.warnings.append(f"passed through unchanged: {reason}")
    return record


def _kinds(profile: Profile) -> str:
    return "/".join(sorted(set(profile.types)))


def _jaggedness(need: Assessment) -> dict[str, float | str] | None:
    if need.jaggedness is None:
        return None
    return {"kind": need.jaggedness.kind, "size": need.jaggedness.size, "recommended": need.jaggedness.tolerance}


def _record(
    profile: Profile, need: Assessment, written: Written, fair: Spline, circle: tuple[FloatArray, float] | None
) -> ProfileRecord:
    """Return the record of a faired profile; the certificate is of the curve as the file will hold it."""
    outline, curve, tolerance = need.outline, written.curve, need.tolerance
    assert outline is not None
    deviation = hausdorff(outline, curve, _WIDTH * tolerance)
    certified = deviation.certified + need.slack
    statistics = deviation_statistics(curve, outline, tolerance)
    points, turns = corner_turns(fair)
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
        corners=[
            {"x": float(p[0]), "y": float(p[1]), "turn_deg": math.degrees(float(t))}
            for p, t in zip(points, turns, strict=True)
        ],
        deviation=DeviationRecord(
            certified, max(0.0, deviation.measured - need.slack), statistics.rms, statistics.mean_signed
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
    _count(record, curve, written.type)
    if not record.within_tolerance:
        said = f"out of tolerance: certified {certified:.4g} of {tolerance:.4g}; state a larger tolerance"
        record.warnings.append(said)
    return record


def _alongs(outline: Polyline, points: FloatArray) -> FloatArray:
    """Return the arc length of the vertex nearest to each point."""
    nearest = [int(((outline.points - point) ** 2).sum(axis=1).argmin()) for point in points]
    return outline.alongs()[np.array(nearest, dtype=np.intp)]


def _count(record: ProfileRecord, curve: AnyCurve, entity: str) -> None:
    """Count what the controller will see."""
    if isinstance(curve, Spline):
        record.pieces, record.control_points = len(curve.spans), len(curve.control)
    elif isinstance(curve, ArcChain):
        if entity == "CIRCLE":
            record.pieces, record.arcs, record.vertices_out = 1, 1, 0
            return
        record.arcs = int(np.count_nonzero(curve.bulges))
        record.lines = len(curve.bulges) - record.arcs
        record.pieces, record.vertices_out = len(curve.bulges), len(curve.points)
    elif isinstance(curve, Polyline):
        record.lines = record.pieces = len(curve.points) - (0 if curve.closed else 1)
        record.vertices_out = len(curve.points)
