"""Reading a drawing: the document, the profiles in its model space, and an account of all the rest."""

import struct
from collections import Counter
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import ezdxf.filemanagement
import numpy as np

from converter.drawing.chain import Chain, chain_pieces
from converter.drawing.entities import Piece, Unusable, is_profile_type, piece_of
from converter.drawing.model import AnyCurve, Drawing, NearGap, Profile, Skipped
from converter.errors import LengthError, NoProfileError, ReadError
from converter.units import UNITLESS, Length, Unit, parse_length, to_drawing_units, unit_from_code, unit_from_name
from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["GAP_SHARE", "read_drawing"]

GAP_SHARE = 1e-6
"""Default gap as a share of the extent (the diagonal of the box around the chosen profiles)."""
_NEAR_SHARE, _NEAR_GAPS = 2e-3, 100.0
_JUNCTIONS_TOLD = 5


def read_drawing(
    path: Path,
    layers: Sequence[str] | None = None,
    gap: float | Length | str | None = None,
    units: str | None = None,
) -> Drawing:
    """Read a DXF drawing, ASCII or binary, R12 to R2018.

    Entities in the model space that can be profiles are joined end to end, layer by layer; everything else stays as
    it is in the document and is counted. A damaged file is repaired as far as possible, every repair being told in
    the warnings.

    Args:
        path: the file.
        layers: layers to take profiles from, in any case; None or empty for all.
        gap: distance at or under which ends are joined: drawing units, or a length with a unit. None takes
            1e-6 of the extent.
        units: name of the drawing's unit, overriding $INSUNITS.

    Raises:
        ReadError: the file cannot be read as a drawing.
        NoProfileError: a layer of `layers` is not in the drawing.
        LengthError: `gap` or `units` cannot be used.
    """
    document, warnings = _open(path)
    unit = _unit(document, units, path, warnings)
    chosen = _chosen_layers(document, layers or (), path)
    space = document.modelspace()
    pieces, passed, skipped, order = _pieces(space, chosen)
    extents = _extents(pieces)
    extent = float(np.linalg.norm(extents[1] - extents[0])) if extents else 0.0
    touching = GAP_SHARE * extent
    joined = touching if gap is None else _gap(gap, unit)
    profiles, near_gaps = _profiles(pieces, joined, min(touching, joined), extent, warnings)
    profiles.sort(key=lambda profile: min(order[handle] for handle in profile.handles))
    for layout in document.layouts:
        if layout.dxf.name != space.dxf.name:
            passed.update(entity.dxftype() for entity in layout)
    in_blocks: Counter[str] = Counter(
        entity.dxftype() for block in document.blocks if not block.is_any_layout for entity in block
    )
    return Drawing(
        document=document,
        path=path,
        version=document.acad_release,
        units=unit,
        profiles=profiles,
        passed_through=passed,
        in_blocks=in_blocks,
        skipped=skipped,
        gap=joined,
        extents=extents,
        near_gaps=near_gaps,
        warnings=warnings,
        layers=tuple(layers or ()),
        order=order,
    )


def _open(path: Path) -> tuple[Any, list[str]]:
    """Return the document and what had to be repaired."""
    try:
        size = path.stat().st_size
    except OSError as error:
        raise ReadError(f"{path}: cannot be read ({error.strerror or error}); check the name") from error
    if path.is_dir():
        raise ReadError(f"{path}: is a folder; give a DXF file")
    if size == 0:
        raise ReadError(f"{path}: the file is empty; export the drawing again")
    try:
        with path.open("rb") as stream:
            head = stream.read(4096)
    except OSError as error:
        raise ReadError(f"{path}: cannot be read ({error.strerror or error}); check its permissions") from error
    if head.startswith(b"AC10") and b"\0" in head[:64]:
        raise ReadError(f"{path}: is a DWG file, which cannot be read; save the drawing as DXF")
    try:
        document = ezdxf.filemanagement.readfile(path)
    except OSError as error:
        if error.errno is not None:
            raise ReadError(f"{path}: cannot be read ({error.strerror or error}); check the file") from error
        return _recover(path, error)
    except Exception as error:  # whatever a damaged file provokes in the parser: the tolerant one has the last word
        return _recover(path, error)
    loaded = document.loaded_dxfversion or document.dxfversion
    old = loaded != document.dxfversion
    return document, [f"the file is of DXF version {loaded}; it is treated as {document.acad_release}"] if old else []


def _recover(path: Path, first: Exception) -> tuple[Any, list[str]]:
    from ezdxf import recover

    reason = str(first) or type(first).__name__
    if isinstance(first, OSError):
        reason = "it does not begin as a DXF file does"
    elif isinstance(first, struct.error):
        reason = "its binary data end early or are mixed up"
    try:
        document, auditor = recover.readfile(path)
    except Exception as error:  # any failure of the tolerant parser means the same to the user
        raise ReadError(f"{path}: is not a DXF drawing that can be read ({reason}); export it again as DXF") from error
    if not len(document.entitydb) or not _has_section(path):
        raise ReadError(f"{path}: is not a DXF drawing ({reason}); export it again as DXF")
    repairs = [f"repaired: {error.message}" for error in (*auditor.fixes, *auditor.errors)]
    return document, [f"the file is damaged ({reason}) and was read as far as possible", *repairs]


def _has_section(path: Path) -> bool:
    """Return whether the file names an ENTITIES section at all: the tolerant parser takes any text for a drawing."""
    with path.open("rb") as stream:
        return b"ENTITIES" in stream.read()


def _unit(document: Any, override: str | None, path: Path, warnings: list[str]) -> Unit:
    code = document.header.get("$INSUNITS", 0)
    try:
        stated = unit_from_code(int(code))
    except LengthError as error:
        warnings.append(str(error))
        stated = UNITLESS
    if override is not None:
        unit = unit_from_name(override)
        if stated.code and unit is not stated:
            warnings.append(f"the drawing states {stated.symbol}, which --units {unit.symbol} overrides")
        return unit
    if stated is UNITLESS:
        warnings.append("the drawing states no units; lengths count in drawing units (state them by --units)")
    return stated


def _gap(gap: float | Length | str, unit: Unit) -> float:
    length = parse_length(gap) if isinstance(gap, str) else gap
    value = to_drawing_units(length, unit) if isinstance(length, Length) else float(length)
    if not 0.0 <= value < np.inf:
        raise LengthError(f"a gap of {value:g} cannot be used; give 0 or more")
    return value


def _chosen_layers(document: Any, layers: Sequence[str], path: Path) -> set[str]:
    """Return the layers in the form they are compared in: DXF layer names do not depend on case."""
    known = {layer.dxf.name.lower() for layer in document.layers}
    known.update(entity.dxf.layer.lower() for entity in document.modelspace() if entity.dxf.hasattr("layer"))
    for layer in layers:
        if layer.lower() not in known:
            names = ", ".join(sorted(item.dxf.name for item in document.layers)[:10])
            raise NoProfileError(f"{path}: there is no layer {layer!r}; the drawing has {names}")
    return {layer.lower() for layer in layers}


def _pieces(
    space: Iterable[Any], chosen: set[str]
) -> tuple[list[Piece], "Counter[str]", list[Skipped], dict[str, int]]:
    pieces, passed, skipped = [], Counter[str](), []
    order: dict[str, int] = {}
    for entity in space:
        handle, kind = str(entity.dxf.handle), entity.dxftype()
        order[handle] = len(order)
        if not is_profile_type(entity) or (chosen and entity.dxf.layer.lower() not in chosen):
            passed[kind] += 1
            continue
        try:
            pieces.append(piece_of(entity))
        except Unusable as error:
            skipped.append(Skipped(handle, kind, str(error)))
        except (ValueError, TypeError, OverflowError) as error:
            skipped.append(Skipped(handle, kind, f"its data cannot be understood ({error})"))
    return pieces, passed, skipped, order


def _extents(pieces: list[Piece]) -> tuple[FloatArray, FloatArray] | None:
    if not pieces:
        return None
    plain = [
        (piece.part.points, piece.frame.elevation)
        for piece in pieces
        if isinstance(piece.part, Polyline) and piece.part.dimension == 2 and piece.frame.level
    ]
    corners = [np.zeros((0, 3))]
    if plain:  # most drawings are made of these: take them all at once
        points = np.concatenate([points for points, _ in plain])
        heights = np.array([height for _, height in plain])
        corners += [
            np.array([[*points.min(axis=0), heights.min()]]),
            np.array([[*points.max(axis=0), heights.max()]]),
        ]
    for piece in pieces:
        if not (isinstance(piece.part, Polyline) and piece.part.dimension == 2 and piece.frame.level):
            corners.append(np.stack(_profile([piece], piece.closed, 0.0).world_bounds()))
    every = np.concatenate(corners)
    return every.min(axis=0), every.max(axis=0)


def _profiles(
    pieces: list[Piece], gap: float, touching: float, extent: float, warnings: list[str]
) -> tuple[list[Profile], list[NearGap]]:
    by_layer: dict[str, list[Piece]] = {}
    profiles, near_gaps = [], []
    for piece in pieces:
        if piece.closed:
            profiles.append(_profile([piece], True, gap))
        else:
            by_layer.setdefault(piece.layer.lower(), []).append(piece)
    near = max(_NEAR_SHARE * extent, min(_NEAR_GAPS * gap, 10.0 * _NEAR_SHARE * extent), gap)
    for members in by_layer.values():
        chaining = chain_pieces(members, gap, touching, near)
        profiles += [_profile(list(chain.pieces), _may_close(chain), gap) for chain in chaining.chains]
        near_gaps += chaining.near_gaps
        for junction in chaining.junctions[:_JUNCTIONS_TOLD]:
            x, y, _ = junction.place
            warnings.append(
                f"{junction.ends} ends meet at ({x:.10g}, {y:.10g}) on layer {junction.layer}; they are left unjoined"
            )
        if len(chaining.junctions) > _JUNCTIONS_TOLD:
            more = len(chaining.junctions) - _JUNCTIONS_TOLD
            warnings.append(f"{more} more such junctions on layer {members[0].layer} are left unjoined")
    return profiles, sorted(near_gaps, key=lambda item: item.size)


def _may_close(chain: Chain) -> bool:
    """Return whether a chain that comes back to its start encloses something: two straight pieces do not."""
    straight = [piece.part for piece in chain.pieces if isinstance(piece.part, Polyline)]
    bent = len(straight) < len(chain.pieces)
    return chain.closed and (bent or sum(len(part.points) - 1 for part in straight) > 2)


def _profile(pieces: list[Piece], closed: bool, gap: float) -> Profile:
    """Return a profile of pieces in order of travel, in one plane where they share it, else in world coordinates."""
    frame = pieces[0].frame
    planar = all(
        piece.part.dimension == 2
        and piece.frame.extrusion == frame.extrusion
        and abs(piece.frame.elevation - frame.elevation) <= gap
        for piece in pieces
    )
    if not planar and len(pieces) > 1:
        pieces = [piece.lifted() for piece in pieces]
    joints = len(pieces) - (0 if closed and len(pieces) > 1 else 1)
    return Profile(
        id=pieces[0].handle,
        layer=pieces[0].layer,
        handles=tuple(piece.handle for piece in pieces),
        types=tuple(piece.type for piece in pieces),
        closed=closed,
        parts=tuple(_merged([piece.part for piece in pieces], closed)),
        vertices_in=sum(piece.vertices for piece in pieces) - joints,
        frame=pieces[0].frame,
        curved=any(piece.curved for piece in pieces),
        approximation=max(piece.approximation for piece in pieces),
    )


def _merged(parts: list[AnyCurve], closed: bool) -> list[AnyCurve]:
    """Merge neighbouring polylines and arc chains; a chain of only these becomes a single part."""
    if len(parts) == 1:
        return [_closed(parts[0])] if closed else parts
    out: list[AnyCurve] = []
    run: list[Polyline | ArcChain] = []
    for part in parts:
        if isinstance(part, Spline):
            out += [_joined(run)] if run else []
            run = []
            out.append(part)
        else:
            run.append(part)
    out += [_joined(run)] if run else []
    return [_closed(out[0])] if closed and len(out) == 1 else out


def _joined(run: list[Polyline | ArcChain]) -> Polyline | ArcChain:
    """Return polylines and arc chains end to end as one; the start of each later one is dropped."""
    points = np.concatenate([run[0].points, *(part.points[1:] for part in run[1:])])
    if all(isinstance(part, Polyline) for part in run):
        return Polyline(points)
    bulges = [part.bulges if isinstance(part, ArcChain) else np.zeros(len(part.points) - 1) for part in run]
    return ArcChain(points, np.concatenate(bulges))


def _closed(part: AnyCurve) -> AnyCurve:
    """Return an open part whose end meets its start as a closed one."""
    if part.closed:
        return part
    if isinstance(part, Polyline):
        return Polyline(part.points[:-1], True)
    if isinstance(part, ArcChain):
        return ArcChain(part.points[:-1], part.bulges, True)
    control = part.control.copy()
    control[-1] = control[0]
    return Spline(part.knots, control, part.degree, True)
