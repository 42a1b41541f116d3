"""Stations of a table or a drawing, as the job `spring` takes them."""

from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np

from converter.drawing import PLAN, Drawing, Frame, Profile, Skipped, new_drawing, read_drawing
from converter.errors import NoProfileError, SettingsError
from converter.table import read_table
from converter.units import Length, Unit
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline
from geometry.stations import nearest_order

__all__ = ["Order", "StationProfile", "Stations", "read_stations"]

Order = Literal["drawing", "nearest"]
_LAYER = "Curves"
"""Layer of curves from a table."""


@dataclass(slots=True, eq=False)
class StationProfile:
    """Stations of one curve.

    Attributes:
        id: handle of the first source entity; number of the profile in a table.
        layer: that the curve is written to.
        source: what the stations come from, in words.
        points: shape (n, d), in the frame; the first is not repeated when closed.
        closed: whether the curve returns to the first.
        corners: rows of the knuckles.
        places: where each station stands: `line 7`, `vertex 3` or `POINT 2F`.
        lines: line of the file of every station of a table, else None.
        frame: plane of planar stations.
        profile: of the drawing, whose place the curve takes; None where it is added.
        curve: the curve itself where it is drawn as a spline already; then there are no stations.
    """

    id: str
    layer: str
    source: str
    points: FloatArray
    closed: bool
    corners: list[int]
    places: list[str]
    lines: list[int] | None = None
    frame: Frame = PLAN
    profile: Profile | None = None
    curve: Spline | None = None
    warnings: list[str] = field(default_factory=list)


@dataclass(slots=True, eq=False)
class Stations:
    """What a file holds.

    Attributes:
        drawing: that curves are written to: the one that was read, or a new one for a table.
        units: of its lengths.
        profiles: in order.
        understood: how a table was read, in words; None for a drawing.
        names: headings of the coordinates in a table.
        skipped: what cannot be sprung, with the reason.
        warnings: one line each.
    """

    drawing: Drawing
    units: Unit
    profiles: list[StationProfile]
    understood: str | None
    names: tuple[str, ...]
    skipped: list[Skipped]
    warnings: list[str]


def read_stations(
    path: Path,
    layers: tuple[str, ...] = (),
    gap: Length | None = None,
    units: str | None = None,
    version: str | None = None,
    order: Order = "drawing",
) -> Stations:
    """Read the stations of a DXF drawing (by the ending .dxf) or of a table (any other ending).

    Args:
        path: the file.
        layers, gap: of a drawing, as `read_drawing`.
        units: name of the unit, overriding what the file states.
        version: DXF version of a new drawing.
        order: of the points: as drawn, or along a short path through all of them.

    Raises:
        ConverterError: the file or the settings cannot be used.
    """
    if path.suffix.lower() == ".dxf":
        found = _from_drawing(path, layers, gap, units)
    else:
        if layers or gap is not None:
            raise SettingsError(f"{path}: a table has no layers and no gaps; leave --layer and --gap out")
        found = _from_table(path, units, version)
    if order == "nearest":
        for profile in found.profiles:
            _put_in_order(profile)
    for profile in found.profiles:
        _take_repeats_out(profile)
    return found


def _from_table(path: Path, units: str | None, version: str | None) -> Stations:
    table = read_table(path, units)
    profiles = [
        StationProfile(
            str(number),
            _LAYER,
            "table",
            item.points,
            item.closed,
            list(item.corners),
            [f"line {line}" for line in item.lines],
            list(item.lines),
        )
        for number, item in enumerate(table.profiles, start=1)
    ]
    drawing = new_drawing(path, table.units, version)
    return Stations(drawing, table.units, profiles, table.understood, table.names, [], table.warnings)


def _from_drawing(path: Path, layers: tuple[str, ...], gap: Length | None, units: str | None) -> Stations:
    drawing = read_drawing(path, layers, gap, units)
    skipped, profiles, warnings = list(drawing.skipped), [], list(drawing.warnings)
    for profile in drawing.profiles:
        part = profile.parts[0]
        kinds = "/".join(sorted(set(profile.types)))
        if len(profile.parts) > 1 or not isinstance(part, Polyline | Spline):
            reason = "arcs are a curve already, not stations; it passes through unchanged"
            skipped.append(Skipped(profile.id, kinds, reason))
            continue
        curve = part if isinstance(part, Spline) else None
        points = part.control if isinstance(part, Spline) else part.points
        places = [f"vertex {row}" for row in range(1, len(points) + 1)]
        item = StationProfile(profile.id, profile.layer, kinds, points, profile.closed, [], places)
        item.frame, item.profile, item.curve = profile.frame, profile, curve
        profiles.append(item)
    with_profiles = {profile.layer.lower() for profile in drawing.profiles}
    for layer, points_of in _points_by_layer(drawing).items():
        if layer.lower() in with_profiles or (drawing.profiles and not layers):
            warnings.append(f"{len(points_of)} POINT on layer {layer} beside polylines are not taken for stations")
        elif len(points_of) > 1:
            profiles.append(_of_points(layer, points_of))
            drawing.passed_through["POINT"] -= len(points_of)
    drawing.passed_through = +drawing.passed_through
    if not profiles:
        why = f" ({skipped[0].type} {skipped[0].handle}: {skipped[0].reason})" if skipped else ""
        where = f" on layer {', '.join(layers)}" if layers else ""
        raise NoProfileError(
            f"{path}: no stations{where}{why}; give polylines, lines or two POINT or more, or run `fairbatten inspect`"
        )
    return Stations(drawing, drawing.units, profiles, None, ("x", "y", "z"), skipped, warnings)


def _points_by_layer(drawing: Drawing) -> dict[str, list[Any]]:
    chosen = {layer.lower() for layer in drawing.layers}
    out: dict[str, list[Any]] = {}
    for entity in drawing.document.modelspace().query("POINT"):
        layer = str(entity.dxf.layer)
        if not chosen or layer.lower() in chosen:
            out.setdefault(layer, []).append(entity)
    return out


def _of_points(layer: str, entities: list[Any]) -> StationProfile:
    """Return the points of a layer as stations, planar where all lie at one height."""
    points = np.array([tuple(entity.dxf.location) for entity in entities], dtype=np.float64)
    if not np.isfinite(points).all():
        bad = int(np.flatnonzero(~np.isfinite(points).all(axis=1))[0])
        raise NoProfileError(f"layer {layer}: POINT {entities[bad].dxf.handle} has no finite coordinates; repair it")
    frame = PLAN
    if np.ptp(points[:, 2]) == 0.0:
        frame = Frame(elevation=float(points[0, 2]))
        points = np.ascontiguousarray(points[:, :2])
    handles = [str(entity.dxf.handle) for entity in entities]
    places = [f"POINT {handle}" for handle in handles]
    closed = len(points) > 3 and bool((points[0] == points[-1]).all())
    end = -1 if closed else len(points)
    kinds = f"{len(points)} POINT"
    return StationProfile(handles[0], layer, kinds, points[:end], closed, [], places[:end], frame=frame)


def _put_in_order(profile: StationProfile) -> None:
    if profile.curve is not None:
        return
    rows = nearest_order(profile.points, profile.closed)
    profile.points = profile.points[rows]
    profile.places = [profile.places[row] for row in rows.tolist()]
    profile.lines = None if profile.lines is None else [profile.lines[row] for row in rows.tolist()]
    place = {row: k for k, row in enumerate(rows.tolist())}
    profile.corners = sorted(place[row] for row in profile.corners)


def _take_repeats_out(profile: StationProfile) -> None:
    """Let stations that repeat the one before them count once, and say so."""
    if profile.curve is not None:
        return
    points, n = profile.points, len(profile.points)
    same = (points == np.roll(points, 1, axis=0)).all(axis=1)
    if not profile.closed:
        same[0] = False
    if not same.any():
        return
    rows = np.flatnonzero(same).tolist()
    keep = np.flatnonzero(~same).tolist()
    if len(keep) < 2:
        raise NoProfileError(f"profile {profile.id}: all of its stations are one point; give two or more")
    first = ", ".join(profile.places[row] for row in rows[:5]) + (" and more" if len(rows) > 5 else "")
    profile.warnings.append(f"{Counter(same.tolist())[True]} of {n} stations repeat the one before: {first}")
    number = {row: k for k, row in enumerate(keep)}
    profile.corners = sorted({number[row] for row in profile.corners if row in number})
    profile.points = np.ascontiguousarray(points[keep])
    profile.places = [profile.places[row] for row in keep]
    profile.lines = None if profile.lines is None else [profile.lines[row] for row in keep]
