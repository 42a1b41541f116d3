"""The job `compare`: where, which way and by how much the profiles of two revisions differ, and whether by too much."""

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

import converter
from converter.drawing import AnyCurve, Drawing, read_drawing
from converter.errors import LengthError, SettingsError
from converter.jobs.comparison import CompareRecord, Comparison, Limits, Transform
from converter.jobs.figures import Figure, figures_of
from converter.jobs.measuring import decided, measured
from converter.jobs.pairing import pair_up
from converter.units import UNITLESS, Length
from geometry.arcs import ArcChain
from geometry.bspline import Spline
from geometry.polyline import Polyline
from geometry.registration import Move, moved_curve, rigid_move

__all__ = ["CompareSettings", "compare_drawings"]

_UNIT_SLIPS = (10.0, 12.0, 25.4, 39.37007874015748, 100.0, 304.8, 1000.0)  # ratios of common units
_SLIP = 0.02  # how near to one of them the sizes of two drawings must lie
_STRETCHED = 0.000999  # a change of size that is pointed out


@dataclass(frozen=True, slots=True)
class CompareSettings:
    """How to compare.

    Attributes:
        tolerance: largest distance allowed, either way; None for no verdict.
        profile_zone: width of the tolerance zone of a line profile (ISO 1101), in place of `tolerance`.
        zone_shift: what the middle of that zone lies outside (closed) or left of (open) OLD; negative for the other
            side; drawing units or with a unit, its sign apart.
        zone_inwards: whether the shift is to the other side.
        align: whether NEW is moved onto OLD as a rigid body first.
        verdict_only: decide as fast as possible and leave the figures at the bounds that took.
        layers: layers to take profiles from, which both drawings have; empty for all.
        gap: ends nearer than this are joined; None takes 1e-6 of the extent.
        units, new_units: names of the units of OLD (and of NEW unless stated) and of NEW, overriding $INSUNITS.
    """

    tolerance: Length | None = None
    profile_zone: Length | None = None
    zone_shift: Length | None = None
    zone_inwards: bool = False
    align: bool = False
    verdict_only: bool = False
    layers: tuple[str, ...] = ()
    gap: Length | None = None
    units: str | None = None
    new_units: str | None = None


def compare_drawings(
    old: Path, new: Path, settings: CompareSettings, progress: Callable[[int, int], None] | None = None
) -> Comparison:
    """Compare the profiles of two drawings; nothing is written.

    Args:
        old, new: DXF files of the earlier and the later revision.
        settings: see `CompareSettings`.
        progress: called with pairs done and pairs in all, after each.

    Raises:
        ConverterError: a file or the settings cannot be used.
    """
    clock = time.perf_counter()
    drawings = _read(old, new, settings)
    limits = _limits(settings, drawings[0])
    if settings.verdict_only and limits is None:
        raise SettingsError("there is no verdict without --tolerance or --profile-zone; state one of them")
    record = CompareRecord(
        "compare",
        converter.__version__,
        str(old),
        str(new),
        drawings[0].units.symbol,
        None if settings.tolerance is None else drawings[0].length(settings.tolerance),
        _zone(settings, drawings[0]),
        "rigid" if settings.align else "none",
        Transform(),
        None,
    )
    read = time.perf_counter()
    record.seconds["read"] = read - clock
    factor = _factor(*drawings, record)
    figures = figures_of(drawings[0]), figures_of(drawings[1], factor)
    record.warnings += [f"{d.path}: {line}" for d in drawings for line in d.warnings]
    _warn_of_units(*figures, record)
    if settings.align:
        figures = figures[0], _aligned(*figures, record)
    aligned = time.perf_counter()
    record.seconds["align"] = aligned - read
    pairing = pair_up(*figures)
    compared = []
    for done, (i, j, how) in enumerate(pairing.pairs, start=1):
        measure = decided if settings.verdict_only else measured
        compared.append(measure(figures[0][i], figures[1][j], how, limits))
        if progress is not None:
            progress(done, len(pairing.pairs))
    only_old, only_new = [figures[0][i] for i in pairing.only_old], [figures[1][j] for j in pairing.only_new]
    record.pairs = [one.record for one in compared]
    record.only_in_old, record.only_in_new = (
        [_described(figure) for figure in group] for group in (only_old, only_new)
    )
    if limits is not None:
        paired = not (only_old or only_new)
        record.within_tolerance = paired and all(bool(pair.within_tolerance) for pair in record.pairs)
    record.seconds["compare"] = time.perf_counter() - aligned
    alone = [[(figure.id, figure.layer, figure.curve) for figure in group] for group in (only_old, only_new)]
    return Comparison(record, compared, alone[0], alone[1], limits, drawings[0], drawings[1])


def _read(old: Path, new: Path, settings: CompareSettings) -> tuple[Drawing, Drawing]:
    units = settings.units, settings.new_units or settings.units
    drawings = tuple(
        read_drawing(path, settings.layers, settings.gap, unit) for path, unit in zip((old, new), units, strict=True)
    )
    if not drawings[0].profiles and not drawings[1].profiles:
        drawings[0].require_profiles()
    return drawings[0], drawings[1]


def _limits(settings: CompareSettings, drawing: Drawing) -> Limits | None:
    """Return the limits in the units of OLD."""
    unit = "" if drawing.units is UNITLESS else f" {drawing.units.symbol}"
    if settings.tolerance is not None:
        if settings.profile_zone is not None:
            raise SettingsError(
                "--tolerance T allows T to either side, --profile-zone W the half of W; state one of them"
            )
        size = drawing.length(settings.tolerance)
        if size <= 0.0:
            raise LengthError("a tolerance must be above 0")
        return Limits(size, size, f"+-{size:.6g}{unit}")
    zone = _zone(settings, drawing)
    if zone is None:
        return None
    width, shift = zone["width"], zone["shift"]
    if width <= 0.0:
        raise LengthError("the width of a profile zone must be above 0")
    if abs(shift) >= 0.5 * width:
        raise SettingsError("--zone-shift must be smaller than half of --profile-zone: OLD itself would lie outside")
    said = f"profile zone {width:.6g}{unit}" + (f", middle at {shift:+.6g}" if shift else "")
    return Limits(0.5 * width + shift, 0.5 * width - shift, said)


def _zone(settings: CompareSettings, drawing: Drawing) -> dict[str, float] | None:
    if settings.profile_zone is None:
        if settings.zone_shift is not None:
            raise SettingsError("--zone-shift shifts a zone: state its width by --profile-zone")
        return None
    shift = 0.0 if settings.zone_shift is None else drawing.length(settings.zone_shift)
    return {"width": drawing.length(settings.profile_zone), "shift": -shift if settings.zone_inwards else shift}


def _factor(old: Drawing, new: Drawing, record: CompareRecord) -> float:
    """Return what lengths of NEW are multiplied by to be in the units of OLD, and say so."""
    a, b = old.units, new.units
    if a is b:
        return 1.0
    if a is UNITLESS or b is UNITLESS:
        silent, other = ("OLD", b) if a is UNITLESS else ("NEW", a)
        record.warnings.append(f"{silent} states no units: taken to be in {other.symbol} like the other drawing")
        return 1.0
    factor = b.metres / a.metres
    record.warnings.append(f"NEW is in {b.symbol}, OLD in {a.symbol}: lengths of NEW are taken times {factor:.10g}")
    return factor


def _extent(figures: list[Figure]) -> float:
    if not figures:
        return 0.0
    ends = [figure.curve.bounds() for figure in figures]
    low = np.min([end[0][:2] for end in ends], axis=0)
    high = np.max([end[1][:2] for end in ends], axis=0)
    return float(np.linalg.norm(high - low))


def _warn_of_units(old: list[Figure], new: list[Figure], record: CompareRecord) -> None:
    """Point out sizes that differ as units do."""
    a, b = _extent(old), _extent(new)
    if a <= 0.0 or b <= 0.0:
        return
    ratio = max(a, b) / min(a, b)
    for slip in _UNIT_SLIPS:
        if abs(ratio / slip - 1.0) < _SLIP:
            word = "smaller" if b < a else "larger"
            record.warnings.append(
                f"NEW is {slip:.4g} times {word} than OLD, as if its units were others; state them by --new-units"
            )
            return


def _aligned(old: list[Figure], new: list[Figure], record: CompareRecord) -> list[Figure]:
    """Return NEW moved onto OLD, and write down the move."""
    plan = [[_in_plan(figure.curve) for figure in group] for group in (old, new)]
    if not plan[0] or not plan[1]:
        return new
    move = rigid_move(*plan)
    record.transform = Transform(move.dx, move.dy, math.degrees(move.angle), *move.centre)
    record.scale = move.scale
    if abs(move.scale - 1.0) > _STRETCHED:
        record.warnings.append(
            f"NEW taken times {move.scale:.6g} would fit better: wrong units or a stretched scan; it was not scaled"
        )
    return [replace(figure, curve=_moved(move, figure.curve)) for figure in new]


def _in_plan(curve: AnyCurve) -> AnyCurve:
    if curve.dimension == 2:
        return curve
    if isinstance(curve, Spline):
        return replace(curve, control=curve.control[:, :2])
    assert isinstance(curve, Polyline)
    return Polyline(curve.points[:, :2], curve.closed)


def _moved(move: Move, curve: AnyCurve) -> AnyCurve:
    """Return a curve moved in plan; heights stay."""
    if curve.dimension == 2:
        return moved_curve(move, curve)
    if isinstance(curve, Spline):
        return replace(curve, control=np.column_stack([move.apply(curve.control[:, :2]), curve.control[:, 2]]))
    assert isinstance(curve, Polyline | ArcChain)
    return Polyline(np.column_stack([move.apply(curve.points[:, :2]), curve.points[:, 2]]), curve.closed)


def _described(figure: Figure) -> dict[str, Any]:
    """Return what is said of a profile that has no partner."""
    low, high = figure.curve.bounds()
    middle = 0.5 * (low + high)
    return {
        "id": figure.id,
        "layer": figure.layer,
        "closed": figure.closed,
        "type": "/".join(sorted(set(figure.types))),
        "length": figure.curve.length(),
        "x": float(middle[0]),
        "y": float(middle[1]),
    }
