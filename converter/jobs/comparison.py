"""What `compare` finds: profiles of two revisions paired, measured and judged, and the record of it."""

from dataclasses import asdict, dataclass, field
from typing import Any

from converter.drawing import AnyCurve, Drawing
from geometry.signed import Course

__all__ = [
    "CompareRecord",
    "Compared",
    "Comparison",
    "Limits",
    "PairDeviation",
    "PairRecord",
    "Transform",
    "ZoneRecord",
]


@dataclass(frozen=True, slots=True)
class Limits:
    """How far NEW may lie from OLD, drawing units of OLD.

    Attributes:
        plus: largest deviation outside (closed) or left of (open) OLD, > 0.
        minus: largest deviation inside or right of it, > 0.
        stated: the tolerance as it was stated, for people: "+-0.2 mm" or "profile zone 0.4 mm, shifted 0.1 mm out".
    """

    plus: float
    minus: float
    stated: str

    @property
    def equal(self) -> bool:
        """Whether both sides have the same limit."""
        return self.plus == self.minus


@dataclass(frozen=True, slots=True)
class Transform:
    """The rigid move of NEW onto OLD: a turn about (x, y), then a shift by (dx, dy); drawing units, degrees."""

    dx: float = 0.0
    dy: float = 0.0
    degrees: float = 0.0
    x: float = 0.0
    y: float = 0.0


@dataclass(slots=True)
class ZoneRecord:
    """A stretch out of tolerance.

    Attributes:
        from_along, to_along: its ends along the profile named by `along_profile`, drawing units; through the start of a
            closed profile `to_along` is over the length.
        side: "outside" or "inside" (closed), "left" or "right" (open) of OLD; "off" in 3-D; "missing" where OLD is not
            met by NEW although NEW itself stays within.
        peak: largest deviation, signed (+ outside or left); unsigned in 3-D and where missing.
        along, x, y: place of the peak, along as above, coordinates of OLD's drawing.
        along_profile: "new", or "old" for what is missing.
    """

    from_along: float
    to_along: float
    side: str
    peak: float
    along: float
    x: float
    y: float
    along_profile: str = "new"


@dataclass(slots=True)
class PairDeviation:
    """How far the two profiles of a pair lie from each other, drawing units of OLD.

    Attributes:
        certified: proven: never below the largest distance, both ways.
        measured: found: never above it.
        new_to_old, old_to_new: certified bounds of each direction.
        in_order: proven bound on the distance when both are travelled in the same order, which a short cut across a
            neck or a left-out spike does not pass; None where it was not asked for.
        rms, mean_signed, max_plus, max_minus, percentile_95: of the signed deviation along NEW, from samples; + outside
            (closed) or left of (open) OLD; the signed ones None in 3-D.
    """

    certified: float
    measured: float
    new_to_old: float
    old_to_new: float
    in_order: float | None
    rms: float
    mean_signed: float | None
    max_plus: float | None
    max_minus: float | None
    percentile_95: float


@dataclass(slots=True)
class PairRecord:
    """Two profiles that stand for the same thing in both revisions."""

    old_id: str
    new_id: str
    layer: str
    closed: bool
    paired_by: str
    length_old: float
    length_new: float
    deviation: PairDeviation
    zones: list[ZoneRecord] = field(default_factory=list)
    within_tolerance: bool | None = None
    warnings: list[str] = field(default_factory=list)


@dataclass(slots=True)
class CompareRecord:
    """The whole job; `within_tolerance` is None where no tolerance was stated."""

    command: str
    version: str
    old: str
    new: str
    units: str
    tolerance: float | None
    profile_zone: dict[str, float] | None
    align: str
    transform: Transform
    scale: float | None
    pairs: list[PairRecord] = field(default_factory=list)
    only_in_old: list[dict[str, Any]] = field(default_factory=list)
    only_in_new: list[dict[str, Any]] = field(default_factory=list)
    within_tolerance: bool | None = None
    warnings: list[str] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)

    def as_json(self) -> dict[str, Any]:
        """Return the record as plain dictionaries, lists, numbers and text."""
        return asdict(self)


@dataclass(frozen=True, slots=True, eq=False)
class Compared:
    """A pair as it is drawn: both curves in the coordinates and units of OLD, NEW moved onto OLD where that was asked.

    Attributes:
        old, new: each profile as one curve, in the plane of OLD.
        course: signed deviation along NEW.
        record: its figures.
    """

    old: AnyCurve
    new: AnyCurve
    course: Course
    record: PairRecord


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """All that was found, for the record, the map and the page.

    Attributes:
        record: figures.
        pairs: as they are drawn, in the order of `record.pairs`.
        only_old, only_new: profiles without a partner, as curves in the coordinates of OLD, with id and layer.
        limits: None where no tolerance was stated.
        old_drawing, new_drawing: as read.
    """

    record: CompareRecord
    pairs: list[Compared]
    only_old: list[tuple[str, str, AnyCurve]]
    only_new: list[tuple[str, str, AnyCurve]]
    limits: Limits | None
    old_drawing: Drawing
    new_drawing: Drawing
