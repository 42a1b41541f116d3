"""New drawings, and curves that are added to a drawing without taking the place of anything."""

from collections import Counter
from pathlib import Path
from typing import Any

import ezdxf.filemanagement
import numpy as np

from converter.drawing.model import PLAN, AnyCurve, Drawing, Frame
from converter.drawing.save import VERSIONS
from converter.drawing.write import Written, add_polyline, add_spline, supports, written_curve
from converter.errors import VersionError
from converter.units import Unit
from geometry.arcs import ArcChain
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["add_curve", "new_drawing"]


def new_drawing(source: Path, units: Unit, version: str | None = None) -> Drawing:
    """Return an empty drawing.

    Args:
        source: file that its curves come from, which saving will never write to.
        units: of its lengths.
        version: R12 to R2018; None for R2010.

    Raises:
        VersionError: the version is unknown.
    """
    name = (version or "R2010").upper()
    if name not in VERSIONS:
        raise VersionError(f"{version!r} is not a DXF version that can be written; choose one of {', '.join(VERSIONS)}")
    document: Any = ezdxf.filemanagement.new("R2000" if name == "R12" else VERSIONS[name])
    document.header["$INSUNITS"] = units.code
    return Drawing(
        document=document,
        path=source,
        version=name,
        units=units,
        profiles=[],
        passed_through=Counter(),
        in_blocks=Counter(),
        skipped=[],
        gap=0.0,
        extents=None,
        near_gaps=[],
        warnings=[],
    )


def add_curve(drawing: Drawing, curve: AnyCurve, layer: str, version: str, frame: Frame = PLAN) -> Written:
    """Add a curve to the model space, on a layer that is made when missing.

    A spline becomes a SPLINE, an arc chain an LWPOLYLINE with bulges, a polyline an LWPOLYLINE or a 3-D POLYLINE.

    Args:
        drawing: to add to.
        curve: in the frame, drawing units.
        layer: its name.
        version: DXF version it will be saved in; R12 has POLYLINE for LWPOLYLINE and nothing for SPLINE.
        frame: plane of a planar curve.

    Raises:
        VersionError: the version has no such entity.
    """
    document = drawing.document
    if not document.layers.has_entry(layer):
        document.layers.add(layer)
    space, attributes = document.modelspace(), {"layer": layer}
    if isinstance(curve, Spline):
        if not supports(version, "SPLINE"):
            raise VersionError(f"DXF {version} has no SPLINE; write arcs or lines, or choose R2000 or later")
        entity = add_spline(space, curve, frame, attributes)
    elif isinstance(curve, Polyline) and curve.dimension == 3:
        entity = space.add_polyline3d(curve.points.tolist(), close=curve.closed, dxfattribs=attributes)
    else:
        entity = _add_planar(space, curve, frame, attributes, version)
    read = written_curve(entity, frame, curve.dimension == 3)
    return Written(entity, str(entity.dxf.handle), entity.dxftype(), read)


def _add_planar(space: Any, curve: Polyline | ArcChain, frame: Frame, attributes: dict[str, Any], version: str) -> Any:
    values = np.zeros((len(curve.points), 5))
    values[:, :2] = curve.points
    if isinstance(curve, ArcChain):
        values[: len(curve.bulges), 4] = curve.bulges
    if not frame.level:
        attributes = {**attributes, "extrusion": frame.extrusion}
    if not supports(version, "LWPOLYLINE"):
        return add_polyline(space, values, frame.elevation, int(curve.closed), attributes)
    entity = space.new_entity("LWPOLYLINE", attributes)
    entity.lwpoints.values = values
    entity.dxf.flags = int(curve.closed)
    if frame.elevation:
        entity.dxf.elevation = frame.elevation
    return entity
