"""Saving a drawing: whole or not at all, never over the input, in the DXF version that is asked for."""

import io
from collections import Counter
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np

from converter.drawing.model import Drawing
from converter.drawing.write import add_polyline, put_in_place
from converter.errors import OutputError, VersionError
from converter.files import check_output, write_whole

__all__ = ["VERSIONS", "save"]

VERSIONS = {
    "R12": "AC1009",
    "R2000": "AC1015",
    "R2004": "AC1018",
    "R2007": "AC1021",
    "R2010": "AC1024",
    "R2013": "AC1027",
    "R2018": "AC1032",
}
"""DXF versions that can be written, by name."""


def save(drawing: Drawing, path: Path, version: str | None = None, force: bool = False) -> list[str]:
    """Write a drawing as ASCII DXF.

    Args:
        drawing: as read and changed by `replace`.
        path: the output; it appears whole or not at all.
        version: R12 to R2018; None keeps that of the drawing. For R12 every LWPOLYLINE becomes a POLYLINE.
        force: whether an existing file may be replaced.

    Returns:
        What the version has changed, one line each.

    Raises:
        OutputError: the output exists without `force`, is the input, or cannot be written; nothing is left behind.
        VersionError: the version is unknown or cannot express an entity of the drawing; nothing is written.
    """
    check_output(path, force, [drawing.path])
    document = drawing.document
    name = (version or drawing.version).upper()
    if name not in VERSIONS:
        raise VersionError(f"{version!r} is not a DXF version that can be written; choose one of {', '.join(VERSIONS)}")
    document.modelspace().entity_space.purge()
    said = _convert(document, name)
    document.dxfversion = VERSIONS[name]
    if name == "R12" and drawing.version != "R12":
        document.header["$HANDLING"] = 1  # R12 writes handles only on demand, later versions always
    write_whole(path, lambda stream: _write(drawing, stream), force, [drawing.path])
    drawing.order = {str(entity.dxf.handle): index for index, entity in enumerate(document.modelspace())}
    return said


def _write(drawing: Drawing, stream: BinaryIO) -> None:
    document = drawing.document
    text = io.TextIOWrapper(stream, encoding=document.output_encoding, errors="dxfreplace", newline="\n")
    try:
        document.write(text)
        text.flush()
    except (OSError, MemoryError):
        raise
    except Exception as error:  # what a damaged drawing provokes in the library: we could not say more than it does
        kind = type(error).__name__
        reason = f"{drawing.path}: the drawing holds data that cannot be written again ({kind}: {error})"
        raise OutputError(f"{reason}; repair it first") from error
    finally:
        text.detach()


def _convert(document: Any, name: str) -> list[str]:
    """Bring entities to forms that a version has; the drawing is unchanged when that cannot be done."""
    target, said = VERSIONS[name], []
    missing: Counter[str] = Counter()
    light = []
    for container in document.blocks:  # layouts are among them
        for index, entity in enumerate(container.entity_space.entities):
            if not entity.is_alive or target >= entity.MIN_DXF_VERSION_FOR_EXPORT:
                continue
            if entity.dxftype() == "LWPOLYLINE":
                light.append((container, index, entity))
            else:
                missing[entity.dxftype()] += 1
    if missing:
        kinds = ", ".join(f"{count} {kind}" for kind, count in sorted(missing.items()))
        raise VersionError(f"DXF {name} cannot express {kinds} of the drawing; choose a later version by --dxf-version")
    for container, index, entity in light:
        _as_polyline(document, container, index, entity)
    if light:
        said.append(f"{len(light)} LWPOLYLINE written as POLYLINE, since DXF {name} has no LWPOLYLINE")
    if name == "R12" and document.header.get("$INSUNITS", 0):
        said.append("DXF R12 has no place for the units of the drawing; state them to whoever reads the file")
    return said


def _as_polyline(document: Any, container: Any, index: int, light: Any) -> None:
    attributes = light.graphic_properties()
    for key in ("thickness", "extrusion"):
        if light.dxf.hasattr(key):
            attributes[key] = light.dxf.get(key)
    if light.dxf.get("const_width", 0.0):
        attributes |= {"default_start_width": light.dxf.const_width, "default_end_width": light.dxf.const_width}
    values = np.array(light.lwpoints.values, dtype=np.float64).reshape(-1, 5)
    entity = add_polyline(container, values, float(light.dxf.get("elevation", 0.0)), int(light.dxf.flags), attributes)
    container.entity_space.pop()
    put_in_place(document, container.entity_space.entities, index, light, entity)
