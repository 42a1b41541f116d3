"""The job `spring`: stations of a table or a drawing in, curves through them out, with a judgement of the stations."""

import math
import time
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np

import converter
from converter.drawing import AnyCurve, Written, add_curve, replace, save
from converter.errors import ConverterError
from converter.files import check_output
from converter.jobs.corners import corner_turns
from converter.jobs.judgement import judged
from converter.jobs.records import DeviationRecord
from converter.jobs.spring_curves import Limits, SpringForm, curve_as, limits_of
from converter.jobs.spring_records import SpringRecord, SprungRecord
from converter.jobs.stations import Order, StationProfile, Stations, read_stations
from converter.jobs.writing import counts_of
from converter.table.write import write_ordinates, write_points
from converter.units import Length
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.dense import Dense
from geometry.errors import GeometryError
from geometry.fairness import fairness
from geometry.interpolate import EndCondition
from geometry.ordinates import Spacing, ordinates
from geometry.parameter import ParameterKind
from geometry.polyline import Polyline
from geometry.springing import Sprung, corner_rows, distances_from, spring

__all__ = ["SpringSettings", "spring_stations"]

_FLAT = 1e-7  # of the extent: how finely curves are flattened to measure stations against them
_ROUNDING = 1e-9  # of the extent: stations nearer than this are met


@dataclass(frozen=True, slots=True)
class SpringSettings:
    """How to spring.

    Attributes:
        form: what to write; None takes points for a table and a spline for a drawing.
        degree: 1, 2 or 3.
        ends: end condition; None takes periodic for closed curves, clamped where a direction is stated, else
            not-a-knot. Periodic closes every curve.
        parameter: chord length, centripetal or uniform.
        start_direction, end_direction: of travel at the ends, degrees counterclockwise from x; level in space.
        tolerance: stations may be met within it; None meets them exactly.
        chord_error: largest distance between the curve and what stands for it; None takes a tenth of the tolerance, or
            about a ten-thousandth of the extent, where one is needed.
        max_step, max_turn: longest segment, and largest turn (degrees), of points and lines.
        keep: whether every station must be a vertex; points only.
        corner_angle: degrees above which a station is a corner; None takes none but those marked.
        spacing, count: of the ordinates.
        order: of the stations: as given, or along a short path.
        layers, gap, units, version, force: as in `FairSettings`.
    """

    form: SpringForm | None = None
    degree: int = 3
    ends: EndCondition | None = None
    parameter: ParameterKind = "chord"
    start_direction: float | None = None
    end_direction: float | None = None
    tolerance: Length | None = None
    chord_error: Length | None = None
    max_step: Length | None = None
    max_turn: float | None = None
    keep: bool = False
    corner_angle: float | None = None
    spacing: Spacing = "even"
    count: int = 21
    order: Order = "drawing"
    layers: tuple[str, ...] = ()
    gap: Length | None = None
    units: str | None = None
    version: str | None = None
    force: bool = False


@dataclass(slots=True, eq=False)
class _Curve:
    """A curve of the job, and what of it is written."""

    profile: StationProfile
    spline: Spline
    sprung: Sprung | None
    ends: EndCondition


def spring_stations(
    source: Path, output: Path | None, settings: SpringSettings, table: Path | None = None
) -> SpringRecord:
    """Lay curves through the stations of a file and write them.

    Args:
        source: table or DXF drawing, never changed.
        output: file to write, a table by the ending .csv, else DXF; None only judges. In a drawing the curve takes the
            place of the polyline or lines it was sprung through; POINT entities stay, the curve is added on their
            layer.
        settings: see `SpringSettings`.
        table: file for ordinates; None for none.

    Raises:
        ConverterError, GeometryError: the input or the settings cannot be used, or an output cannot be written.
    """
    clock = time.perf_counter()
    for path in (output, table):
        if path is not None:
            check_output(path, settings.force, [source])
    stations = read_stations(source, settings.layers, settings.gap, settings.units, settings.version, settings.order)
    version = (settings.version or stations.drawing.version).upper()
    as_table = output is not None and output.suffix.lower() == ".csv"
    form: SpringForm = settings.form or ("points" if as_table else "spline")
    limits = limits_of(settings, stations, form, as_table, version)
    record = _record(source, output, table, settings, stations, limits)
    read = time.perf_counter()
    curves = [_sprung(profile, settings, limits, source) for profile in stations.profiles]
    space = as_table and any(_in_space(curve.profile) for curve in curves)
    points: list[tuple[str, Dense]] = []
    for curve in curves:
        item, dense = _written(stations, curve, limits, version, output, space, source)
        _judge(item, curve, settings, stations)
        record.profiles.append(item)
        if dense is not None:
            points.append((item.id, dense))
    record.warnings += stations.warnings
    sprung = time.perf_counter()
    units = stations.units.symbol
    notes = [f"fairbatten {converter.__version__}: spring {source.name}"]
    if output is not None and as_table:
        write_points(output, points, units, 3 if space else 2, notes, settings.force, [source])
    elif output is not None:
        record.warnings += save(stations.drawing, output, version, settings.force)
    if table is not None:
        _write_ordinates(table, curves, stations, settings, [*notes, f"{settings.spacing} spacing"], source)
    record.passed_through = dict(stations.drawing.passed_through)
    record.skipped = [asdict(item) for item in stations.skipped]
    done = time.perf_counter()
    record.seconds = {"read": read - clock, "spring": sprung - read, "write": done - sprung}
    return record


def _record(
    source: Path, output: Path | None, table: Path | None, settings: SpringSettings, stations: Stations, limits: Limits
) -> SpringRecord:
    return SpringRecord(
        "spring",
        converter.__version__,
        str(source),
        None if output is None else str(output),
        None if table is None else str(table),
        stations.units.symbol,
        stations.understood,
        limits.tolerance,
        limits.chord_error,
        limits.form,
        settings.degree,
        settings.ends,
        settings.parameter,
        limits.max_step,
        settings.max_turn,
        warnings=list(limits.warnings),
    )


def _sprung(profile: StationProfile, settings: SpringSettings, limits: Limits, source: Path) -> _Curve:
    """Return the curve through the stations of a profile."""
    if profile.curve is not None:
        return _Curve(profile, profile.curve, None, "periodic" if profile.closed else "not-a-knot")
    stated = settings.start_direction is not None or settings.end_direction is not None
    ends: EndCondition = settings.ends or (
        "clamped" if stated and settings.degree == 3 else "periodic" if profile.closed else "not-a-knot"
    )
    profile.closed = profile.closed or ends == "periodic"
    if settings.corner_angle is not None:
        sharp = corner_rows(profile.points, profile.closed, math.radians(settings.corner_angle))
        profile.corners = sorted({*profile.corners, *sharp})
    dimension = profile.points.shape[1]
    try:
        sprung = spring(
            profile.points,
            profile.closed,
            profile.corners,
            settings.degree,
            ends,
            settings.parameter,
            _direction(settings.start_direction, dimension),
            _direction(settings.end_direction, dimension),
            limits.at_stations,
        )
    except GeometryError as error:
        raise ConverterError(f"{source}: profile {profile.id} ({profile.places[0]}): {error}") from error
    return _Curve(profile, sprung.spline, sprung, ends)


def _direction(degrees: float | None, dimension: int) -> FloatArray | None:
    if degrees is None:
        return None
    angle = math.radians(degrees)
    return np.array([math.cos(angle), math.sin(angle), 0.0][:dimension])


def _in_space(profile: StationProfile) -> bool:
    return profile.points.shape[1] == 3 or not profile.frame.level or profile.frame.elevation != 0.0


def _lifted(curve: _Curve) -> Spline:
    """Return the curve in world coordinates, in space."""
    spline = curve.spline
    control = curve.profile.frame.to_world(spline.control)
    return Spline(spline.knots, control, spline.degree, spline.closed, spline.smooth_seam)


def _written(
    stations: Stations, curve: _Curve, limits: Limits, version: str, output: Path | None, space: bool, source: Path
) -> tuple[SprungRecord, Dense | None]:
    """Put a curve where it belongs and return its record; for a table, with its points."""
    profile, spline = curve.profile, curve.spline
    keep = None if curve.sprung is None or not limits.keep else curve.sprung.parameters
    as_table = output is not None and output.suffix.lower() == ".csv"
    try:
        shape, dense = curve_as(_lifted(curve) if space else spline, limits, keep)
    except GeometryError as error:
        raise ConverterError(f"{source}: profile {profile.id} ({profile.places[0]}): {error}") from error
    as_drawn = profile.curve is not None and shape is spline
    kind, final = "row", shape
    if not as_table:
        kind = "none"
        if output is not None and not as_drawn:
            done = _put(stations, profile, shape, version)
            kind, final = done.type, done.curve
        elif as_drawn:
            kind = "/".join(sorted(set(profile.profile.types))) if profile.profile is not None else "SPLINE"
            profile.warnings.append("a spline already: it is left as drawn")
    counts = counts_of(final, kind == "CIRCLE")
    points = profile.frame.to_world(profile.points) if space else profile.points
    corners, turns = corner_turns(spline) if spline.degree > 1 else (np.zeros((0, 2)), np.zeros(0))
    given = None if profile.curve is not None else Polyline(profile.points, profile.closed)
    item = SprungRecord(
        profile.id,
        profile.layer,
        profile.closed,
        len(profile.points) if profile.profile is None else profile.profile.vertices_in,
        profile.source,
        kind,
        spline.degree,
        curve.ends,
        pieces=counts.pieces,
        control_points=counts.control_points,
        arcs=counts.arcs,
        lines=counts.lines,
        vertices_out=counts.vertices,
        entities=counts.entities,
        tolerance=limits.tolerance,
        chord_error=limits.chord_error,
        corners=[
            {"x": float(p[0]), "y": float(p[1]), "turn_deg": math.degrees(float(t))}
            for p, t in zip(corners, turns, strict=True)
        ],
        fairness={"before": None, "after": fairness(spline, limits.scale).record()},
        length_in=spline.length() if given is None else given.length(),
        length_out=final.length(),
        area_in=spline.area() if given is None else given.area(),
        area_out=final.area(),
        warnings=list(profile.warnings),
    )
    if curve.sprung is not None:
        _measure(item, curve.sprung, final, points, limits)
    return item, dense if as_table else None


def _put(stations: Stations, profile: StationProfile, shape: AnyCurve, version: str) -> Written:
    if profile.profile is not None:
        done = replace(stations.drawing, profile.profile, shape, version)
        profile.warnings += done.lost
        return done
    return add_curve(stations.drawing, shape, profile.layer, version, profile.frame)


def _measure(item: SprungRecord, sprung: Sprung, final: AnyCurve, points: FloatArray, limits: Limits) -> None:
    """Record how far the stations lie from what is written, and whether that is what was asked for."""
    extent = float(np.linalg.norm(np.ptp(points, axis=0)))
    high, low = distances_from(final, points, _FLAT * extent)
    if isinstance(final, Spline) and len(final.control) == len(sprung.spline.control):
        at = np.linalg.norm(final.evaluate(sprung.parameters[: len(points)]) - points[sprung.rows], axis=1)
        high[sprung.rows] = np.minimum(high[sprung.rows], at)  # a point of the curve: the distance is no larger
        low = np.minimum(low, high)
    certified = float(high.max())
    item.deviation = DeviationRecord(certified, float(low.max()), float(np.sqrt(np.mean(high**2))), None)
    allowed = limits.allowed
    if allowed is not None and certified > allowed + _ROUNDING * extent:
        item.within_tolerance = False
        item.warnings.append(
            f"stations lie up to {certified:.4g} from the curve where {allowed:.4g} is allowed; state a larger one"
        )


def _judge(item: SprungRecord, curve: _Curve, settings: SpringSettings, stations: Stations) -> None:
    if curve.sprung is not None:
        before = len(curve.profile.warnings)
        item.judgement = judged(
            curve.profile, curve.sprung, settings.degree, curve.ends, settings.parameter, stations.names
        )
        item.warnings += curve.profile.warnings[before:]


def _write_ordinates(
    path: Path, curves: list[_Curve], stations: Stations, settings: SpringSettings, notes: list[str], source: Path
) -> None:
    space = any(_in_space(curve.profile) for curve in curves)
    branches = [
        (curve.profile.id, points)
        for curve in curves
        for points in ordinates(_lifted(curve) if space else curve.spline, settings.count, settings.spacing)
    ]
    if not branches:
        raise ConverterError(f"{source}: the curve is upright throughout and has no ordinates along x; leave them out")
    names = stations.names if len(stations.names) == (3 if space else 2) else ("x", "y", "z")[: 3 if space else 2]
    write_ordinates(path, branches, names, stations.units.symbol, notes, settings.force, [source])
