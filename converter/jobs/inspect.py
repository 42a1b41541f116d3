"""The job `inspect`: what is in a drawing, what is wrong with it, and what to do next."""

import shlex
import time
from collections import Counter
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import converter
from converter.drawing import Drawing, Profile, read_drawing
from converter.jobs.assess import Assessment, assess, outline_of
from converter.jobs.defects import repeated_segments, segment_lengths, self_crossings
from converter.units import Length
from geometry.errors import GeometryError

__all__ = ["InspectRecord", "InspectSettings", "InspectedProfile", "inspect_drawing"]

_CORNER = 30.0  # degrees: chords of stations that turn by more meet at a corner, as a rule
_PLACES = 20  # crossings listed a profile; all are counted


@dataclass(frozen=True, slots=True)
class InspectSettings:
    """How to look.

    Attributes:
        layers: layers to take profiles from; empty for all.
        gap: ends nearer than this are joined; None takes 1e-6 of the extent.
        units: name of the drawing's unit, overriding $INSUNITS.
    """

    layers: tuple[str, ...] = ()
    gap: Length | None = None
    units: str | None = None


@dataclass(slots=True)
class InspectedProfile:
    """One profile; lengths in drawing units.

    Attributes:
        id, layer, closed, dimension: as `Profile`.
        sources: source entities by DXF type.
        vertices: as drawn.
        length, area: of the curve; the area is signed, anticlockwise positive, 0 when open or not planar.
        segments: shortest, median and longest segment and how many there are; None for splines alone.
        zero_length_segments: vertices that repeat the one before.
        self_crossings: places where it crosses, touches or retraces itself; None in 3-D or where that cannot be told.
        crossings: the first of these places, x and y.
        jaggedness: kind, size, recommended tolerance and reason; None for true curves.
        looks_like: outline (jagged: edges are evidence), stations (only the vertices are), clean, curves, or unusable.
        advice: what to do with it; `why` is the reason.
    """

    id: str
    layer: str
    sources: dict[str, int]
    closed: bool
    dimension: int
    vertices: int
    length: float
    area: float
    segments: dict[str, float] | None
    zero_length_segments: int
    self_crossings: int | None
    crossings: list[list[float]]
    jaggedness: dict[str, Any] | None
    looks_like: str
    advice: str
    why: str


@dataclass(slots=True)
class InspectRecord:
    """The whole drawing; lengths in drawing units.

    Attributes:
        version: of this program; `dxf_version` is that of the file.
        units: name of the unit, `unitless` where the drawing states none.
        extents: least and greatest coordinates of the chosen profiles; None without any.
        gap: distance at or under which ends were joined.
        entities: entities of the model space by layer and DXF type.
        passed_through, in_blocks, skipped: what is no profile, as read.
        near_gaps: ends that nearly meet, the smallest gap first.
        repeated_segments: lines and arcs that repeat another one on their layer.
        suggestion: the command to run next, or None; `reason` says why.
    """

    command: str
    version: str
    input: str
    dxf_version: str
    units: str
    extents: dict[str, list[float]] | None
    gap: float
    entities: dict[str, dict[str, int]]
    profiles: list[InspectedProfile] = field(default_factory=list)
    near_gaps: list[dict[str, Any]] = field(default_factory=list)
    repeated_segments: int = 0
    passed_through: dict[str, int] = field(default_factory=dict)
    in_blocks: dict[str, int] = field(default_factory=dict)
    skipped: list[dict[str, str]] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    suggestion: str | None = None
    reason: str = ""
    seconds: dict[str, float] = field(default_factory=dict)

    def as_json(self) -> dict[str, Any]:
        """Return the record as plain dictionaries, lists, numbers and text."""
        return asdict(self)


def inspect_drawing(source: Path, settings: InspectSettings | None = None) -> InspectRecord:
    """Look at a drawing without changing anything.

    Args:
        source: DXF file.
        settings: see `InspectSettings`; None for the defaults.

    Raises:
        ConverterError: the file or the settings cannot be used.
    """
    settings = settings or InspectSettings()
    clock = time.perf_counter()
    drawing = read_drawing(source, settings.layers, settings.gap, settings.units)
    read = time.perf_counter()
    record = InspectRecord(
        command="inspect",
        version=converter.__version__,
        input=str(source),
        dxf_version=drawing.version,
        units=drawing.units.symbol,
        extents=_extents(drawing),
        gap=drawing.gap,
        entities=_entities(drawing),
        near_gaps=[asdict(gap) for gap in drawing.near_gaps],
        passed_through=dict(drawing.passed_through),
        in_blocks=dict(drawing.in_blocks),
        skipped=[asdict(item) for item in drawing.skipped],
        warnings=list(drawing.warnings),
    )
    record.profiles = [_inspected(profile) for profile in drawing.profiles]
    record.repeated_segments = repeated_segments(drawing.profiles)
    record.suggestion, record.reason = _suggestion(record, source, settings)
    done = time.perf_counter()
    record.seconds = {"read": read - clock, "look": done - read, "total": done - clock}
    return record


def _extents(drawing: Drawing) -> dict[str, list[float]] | None:
    if drawing.extents is None:
        return None
    low, high = drawing.extents
    return {"least": low.tolist(), "greatest": high.tolist(), "size": (high - low).tolist()}


def _entities(drawing: Drawing) -> dict[str, dict[str, int]]:
    layers: dict[str, Counter[str]] = {}
    for entity in drawing.document.modelspace():
        layer = str(entity.dxf.layer) if entity.dxf.hasattr("layer") else "0"
        layers.setdefault(layer, Counter())[entity.dxftype()] += 1
    return {layer: dict(sorted(counts.items())) for layer, counts in sorted(layers.items())}


def _inspected(profile: Profile) -> InspectedProfile:
    assessment = assess(profile, None, False)
    lengths = segment_lengths(profile)
    crossings = _crossings(profile)
    return InspectedProfile(
        id=profile.id,
        layer=profile.layer,
        sources=dict(sorted(Counter(profile.types).items())),
        closed=profile.closed,
        dimension=profile.dimension,
        vertices=profile.vertices_in,
        length=profile.length(),
        area=profile.area(),
        segments=None
        if lengths is None
        else {
            "count": lengths.count,
            "shortest": lengths.shortest,
            "median": lengths.median,
            "longest": lengths.longest,
        },
        zero_length_segments=0 if lengths is None else lengths.of_no_length,
        self_crossings=None if crossings is None else len(crossings),
        crossings=[] if crossings is None else crossings[:_PLACES].tolist(),
        jaggedness=None if assessment.jaggedness is None else asdict(assessment.jaggedness),
        looks_like=_looks_like(assessment),
        advice="leave as drawn" if assessment.as_drawn else f"fair within {assessment.tolerance:.4g}",
        why=assessment.reason,
    )


def _crossings(profile: Profile) -> Any:
    if profile.dimension != 2:
        return None
    try:
        outline, _ = outline_of(profile, None)
    except GeometryError:  # it has too few distinct points to cross itself in a way that means anything
        return None
    return self_crossings(outline)


def _looks_like(assessment: Assessment) -> str:
    if assessment.unusable:
        return "unusable"
    if assessment.jaggedness is None:
        return "curves"
    if not assessment.as_drawn:
        return "outline"
    return "stations" if assessment.jaggedness.kind == "stations" else "clean"


def _suggestion(record: InspectRecord, source: Path, settings: InspectSettings) -> tuple[str | None, str]:
    """Return the command to run next and the reason for it."""
    kinds = Counter(profile.looks_like for profile in record.profiles)
    if not record.profiles:
        return None, "there is no profile to work on"
    options = [part for layer in settings.layers for part in ("--layer", layer)]
    options += ["--gap", str(settings.gap)] if settings.gap is not None else []
    options += ["--units", settings.units] if settings.units is not None else []
    if kinds["outline"]:
        words = ["fairbatten", "fair", str(source), "-o", f"{source.stem}-faired.dxf", *options]
        few = "1 profile looks" if kinds["outline"] == 1 else f"{kinds['outline']} profiles look"
        return shlex.join(words), f"{few} like a traced or digitised outline"
    if kinds["stations"]:
        words = ["fairbatten", "spring", str(source), "-o", f"{source.stem}-sprung.dxf", "--as", "arcs"]
        words += ["--corner-angle", f"{_CORNER:g}", *options]
        few = "1 profile looks" if kinds["stations"] == 1 else f"{kinds['stations']} profiles look"
        return shlex.join(words), f"{few} like stations of a smooth curve: the chords between them are no evidence"
    return None, "nothing here needs fairing"
