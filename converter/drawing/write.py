"""Writing curves into a drawing: each takes the place, the handle and the properties of the profile it replaces."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from converter.drawing.entities import Unusable, piece_of
from converter.drawing.model import AnyCurve, Drawing, Frame, Profile
from converter.drawing.splines import is_smooth_seam
from converter.errors import ConverterError, VersionError
from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["Written", "add_polyline", "add_spline", "circle_of", "put_in_place", "replace", "supports", "written_curve"]

_SAME_CIRCLE = 1e-9  # largest difference of centres and radii, as a share of the radius, within one circle
_COMMON = (
    "layer",
    "linetype",
    "color",
    "lineweight",
    "ltscale",
    "true_color",
    "color_name",
    "transparency",
    "invisible",
    "material_handle",
    "plotstyle_enum",
    "plotstyle_handle",
    "shadow_mode",
    "visualstyle_handle",
)
_SPLINE_CLOSED, _SPLINE_PLANAR = 1, 8
_CLOSED, _CONTINUOUS_LINETYPE = 1, 128


@dataclass(frozen=True, slots=True, eq=False)
class Written:
    """An entity that now stands in the drawing.

    Attributes:
        entity: the entity.
        handle: its handle, which is that of the first source.
        type: its DXF type.
        curve: the curve exactly as it will be in the file, in the frame of the profile; certify this one.
        lost: properties of the sources that the new form has no place for, one line each.
    """

    entity: Any
    handle: str
    type: str
    curve: AnyCurve
    lost: tuple[str, ...] = ()


def supports(version: str, kind: str) -> bool:
    """Return whether a DXF version, R12 to R2018, has an entity kind: SPLINE and LWPOLYLINE came with R2000."""
    return version.upper() != "R12" or kind in {"POLYLINE", "LINE", "ARC", "CIRCLE"}


def replace(
    drawing: Drawing, profile: Profile, curve: AnyCurve, version: str | None = None, decimals: int | None = None
) -> Written:
    """Put a curve in the place of a profile.

    A spline becomes one SPLINE; an arc chain one LWPOLYLINE with bulges, or a CIRCLE when it is a whole circle; a
    polyline one LWPOLYLINE, or a 3-D POLYLINE. R12 has POLYLINE for LWPOLYLINE and nothing for SPLINE. The first
    source lends its handle, place in the drawing order, layer, colour, linetype, lineweight, thickness, extrusion and
    attached data; the other sources are removed.

    Args:
        drawing, profile: as read; the profile is used up by this.
        curve: in the frame of the profile, drawing units, its dimension that of the profile.
        version: DXF version it will be saved in; None for that of the drawing.
        decimals: places that `curve` was rounded to; centre and radius of a CIRCLE, which are computed from it, are
            rounded to as many. None leaves them in full.

    Raises:
        VersionError: the version has no such entity.
        ConverterError: the curve cannot be written (dimension, coordinates) or the profile is no longer there.
    """
    version = (version or drawing.version).upper()
    if curve.dimension != profile.dimension:
        raise ConverterError(
            f"profile {profile.id}: a {curve.dimension}-D curve cannot replace a {profile.dimension}-D one"
        )
    database = drawing.document.entitydb
    sources = [database.get(handle) for handle in profile.handles]
    if profile.id in drawing.replaced or any(source is None or not source.is_alive for source in sources):
        raise ConverterError(f"{drawing.path}: profile {profile.id} has been replaced already; read the drawing again")
    if isinstance(curve, Spline) and not supports(version, "SPLINE"):
        raise VersionError(
            f"profile {profile.id}: DXF {version} has no SPLINE; write arcs or lines, or choose R2000 or later"
        )
    first = sources[0]
    attributes = {name: first.dxf.get(name) for name in _COMMON if first.dxf.hasattr(name)}
    space = drawing.document.modelspace()
    if isinstance(curve, Spline):
        entity, kept = add_spline(space, curve, profile.frame, attributes), set[str]()
    elif isinstance(curve, Polyline) and curve.dimension == 3:
        entity, kept = (
            space.add_polyline3d(curve.points.tolist(), close=curve.closed, dxfattribs=attributes),
            set[str](),
        )
    else:
        entity, kept = _add_planar(space, curve, profile.frame, first, attributes, version, decimals)
    lost = _lost(first, kept)
    space.entity_space.pop()  # it was added as the last one
    index = drawing.order[profile.id]
    put_in_place(drawing.document, space.entity_space.entities, index, first, entity)
    for other in sources[1:]:
        for group, members in _groups_of(drawing.document, other):
            group.set_data([member for member in members if member is not other])
        database.delete_entity(other)
    drawing.replaced.add(profile.id)
    read = written_curve(entity, profile.frame, profile.dimension == 3)
    return Written(entity, str(entity.dxf.handle), entity.dxftype(), read, lost)


def written_curve(entity: Any, frame: Frame | None = None, spatial: bool = False) -> AnyCurve:
    """Return the curve of an entity exactly as the file will hold it.

    Numbers are written with as many digits as it takes to read the same number back, so the curve in memory is the
    one in the file. SPLINE, LWPOLYLINE and 3-D POLYLINE are read as for a profile.

    Args:
        entity: as written by `replace`.
        frame: plane of the profile; needed for a SPLINE in a tilted plane only, which is otherwise given in world
            coordinates.
        spatial: whether the curve is wanted in space even where all of it lies at one height.

    Raises:
        ConverterError: the entity is not a usable curve.
    """
    if entity.dxftype() == "SPLINE":
        return _written_spline(entity, frame, spatial)
    if spatial and entity.dxftype() == "POLYLINE":
        points = np.array([tuple(vertex.dxf.location) for vertex in entity.vertices], dtype=np.float64)
        return Polyline(points, bool(entity.is_closed))
    try:
        return piece_of(entity).part
    except Unusable as error:
        raise ConverterError(
            f"entity {entity.dxf.handle} ({entity.dxftype()}) is not a usable curve: {error}"
        ) from error


def _written_spline(entity: Any, frame: Frame | None, spatial: bool) -> Spline:
    control = np.array([tuple(point) for point in entity.control_points], dtype=np.float64)
    knots = np.array(entity.knots, dtype=np.float64)
    if not np.isfinite(control).all() or not np.isfinite(knots).all():
        raise ConverterError(f"entity {entity.dxf.handle} (SPLINE) has numbers that are not finite")
    if spatial:
        pass
    elif frame is not None and not frame.level and entity.dxf.flags & _SPLINE_PLANAR:
        control = control @ frame.axes()[:2].T
    elif np.all(control[:, 2] == control[0, 2]):
        control = np.ascontiguousarray(control[:, :2])
    spline = Spline(knots, control, int(entity.dxf.degree), bool(entity.dxf.flags & _SPLINE_CLOSED))
    if not spline.closed:
        return spline
    return Spline(knots, control, spline.degree, True, is_smooth_seam(spline))


def circle_of(chain: ArcChain) -> tuple[FloatArray, float] | None:
    """Return centre and radius of a chain that is one whole circle, travelled once; None for every other chain."""
    if not chain.closed or not np.all(chain.bulges != 0.0) or len(np.unique(np.sign(chain.bulges))) != 1:
        return None
    centres, radii = chain.circles()
    centre, radius = centres.mean(axis=0), float(radii.mean())
    apart = max(float(np.linalg.norm(centres - centre, axis=1).max()), float(np.abs(radii - radius).max()))
    once = abs(abs(float(chain.sweeps().sum())) - 2.0 * np.pi) < 1e-6
    return (centre, radius) if once and apart <= _SAME_CIRCLE * radius else None


def add_spline(space: Any, curve: Spline, frame: Frame, attributes: dict[str, Any]) -> Any:
    """Add a spline in a frame as a SPLINE."""
    entity = space.new_entity("SPLINE", {**attributes, "degree": curve.degree})
    entity.control_points = frame.to_world(curve.control).tolist()
    entity.knots = curve.knots.tolist()
    planar = curve.dimension == 2
    entity.dxf.flags = (_SPLINE_CLOSED if curve.closed else 0) | (_SPLINE_PLANAR if planar else 0)
    if planar:
        entity.dxf.extrusion = frame.extrusion
    return entity


def _add_planar(
    space: Any,
    curve: Polyline | ArcChain,
    frame: Frame,
    source: Any,
    attributes: dict[str, Any],
    version: str,
    decimals: int | None,
) -> tuple[Any, set[str]]:
    """Add a planar polyline or circle in the source's own coordinate system; return which properties it keeps."""
    below = frame.level and source.dxf.is_supported("extrusion") and source.dxf.get("extrusion", (0, 0, 1))[2] < 0.0
    extrusion = (0.0, 0.0, -1.0) if below else frame.extrusion
    mirror, elevation = (-1.0, -frame.elevation) if below else (1.0, frame.elevation)
    if extrusion != (0.0, 0.0, 1.0):
        attributes["extrusion"] = extrusion
    kept = {"thickness"}
    if source.dxf.is_supported("thickness") and source.dxf.get("thickness", 0.0):
        attributes["thickness"] = source.dxf.thickness
    circle = circle_of(curve) if isinstance(curve, ArcChain) else None
    if circle is not None:
        x, y, radius = (
            value if decimals is None else round(value, decimals) for value in (*circle[0].tolist(), circle[1])
        )
        return space.add_circle((mirror * float(x), float(y), elevation), radius, dxfattribs=attributes), kept
    width = _constant_width(source)
    flags = (_CLOSED if curve.closed else 0) | (_flags(source) & _CONTINUOUS_LINETYPE)
    values = np.zeros((len(curve.points), 5))
    values[:, :2] = curve.points * [mirror, 1.0]
    if isinstance(curve, ArcChain):
        values[: len(curve.bulges), 4] = mirror * curve.bulges
    if width is not None:
        kept.add("width")
    if not supports(version, "LWPOLYLINE"):
        attributes |= {"default_start_width": width, "default_end_width": width} if width else {}
        return add_polyline(space, values, elevation, flags, attributes), kept
    entity = space.new_entity("LWPOLYLINE", attributes)
    entity.lwpoints.values = values
    entity.dxf.flags = flags
    if elevation:
        entity.dxf.elevation = elevation
    if width:
        entity.dxf.const_width = width
    return entity, kept


def add_polyline(space: Any, values: FloatArray, elevation: float, flags: int, attributes: dict[str, Any]) -> Any:
    """Add a 2-D POLYLINE of rows x, y, start width, end width, bulge, shape (n, 5), in its own coordinate system."""
    entity = space.add_polyline2d((), dxfattribs={**attributes, "elevation": (0.0, 0.0, elevation)})
    entity.dxf.flags = flags
    rows = []
    for x, y, start_width, end_width, bulge in values.tolist():
        row: dict[str, Any] = {"location": (x, y, elevation)}
        row |= {"start_width": start_width, "end_width": end_width} if start_width or end_width else {}
        row |= {"bulge": bulge} if bulge else {}
        rows.append({**row, "layer": entity.dxf.layer})
    entity.vertices.extend(_vertices(entity, rows))
    return entity


def _vertices(polyline: Any, rows: list[dict[str, Any]]) -> list[Any]:
    from ezdxf.entities import factory

    return [factory.create_db_entry("VERTEX", row, polyline.doc) for row in rows]


def _flags(source: Any) -> int:
    return int(source.dxf.get("flags", 0)) if source.dxftype() in {"LWPOLYLINE", "POLYLINE"} else 0


def _constant_width(source: Any) -> float | None:
    """Return the one width of a polyline, 0 for other entities; None when it varies."""
    kind = source.dxftype()
    if kind == "LWPOLYLINE":
        constant = float(source.dxf.get("const_width", 0.0))
        if constant:
            return constant
        widths = np.array(source.lwpoints.values, dtype=np.float64).reshape(-1, 5)[:, 2:4]
    elif kind == "POLYLINE":
        default = [source.dxf.get("default_start_width", 0.0), source.dxf.get("default_end_width", 0.0)]
        ends = ("start_width", "end_width")
        widths = np.array(
            [[v.dxf.get(name, d) for name, d in zip(ends, default, strict=True)] for v in source.vertices],
            dtype=np.float64,
        )
    else:
        return 0.0
    return float(widths.flat[0]) if widths.size and np.ptp(widths) == 0.0 else None


def _lost(source: Any, kept: set[str]) -> tuple[str, ...]:
    lost = []
    if "thickness" not in kept and source.dxf.is_supported("thickness") and source.dxf.get("thickness", 0.0):
        lost.append(f"the thickness of {source.dxf.thickness:g} is not kept: the new form has none")
    if "width" not in kept and _constant_width(source) != 0.0:
        lost.append("the width of the polyline is not kept: the new form cannot hold it")
    return tuple(lost)


def put_in_place(document: Any, entities: list[Any], index: int, old: Any, new: Any) -> None:
    """Let a new entity stand for an old one: same place, handle, groups and attached data; the old one is destroyed.

    Args:
        document: the document of both.
        entities: entities of the layout or block, changed in place.
        index: where `old` stands in them.
        old, new: `new` is in no layout yet, or in the same one.
    """
    if entities[index] is not old:
        raise ConverterError(f"entity {old.dxf.handle} is not where it was when the drawing was read; read it again")
    handle, owner, paper = old.dxf.handle, old.dxf.owner, old.dxf.get("paperspace", 0)
    new.xdata, new.appdata, new.reactors, new.extension_dict = old.xdata, old.appdata, old.reactors, old.extension_dict
    old.extension_dict = None  # it lives on with the new entity
    groups = _groups_of(document, old)
    for group, members in groups:
        group.set_data([member for member in members if member is not old])
    document.entitydb.delete_entity(old)
    if not document.entitydb.reset_handle(new, handle):
        raise ConverterError(f"handle {handle} is still in use; read the drawing again")
    new.set_owner(owner, paper)
    entities[index] = new
    for group, members in groups:
        group.set_data([new if member is old else member for member in members])


def _groups_of(document: Any, entity: Any) -> list[tuple[Any, list[Any]]]:
    """Return the groups that an entity is in, each with its members."""
    if not entity.reactors:  # every member of a group knows it by a reactor
        return []
    every = [(group, list(group)) for _, group in document.groups]
    return [(group, members) for group, members in every if any(member is entity for member in members)]
