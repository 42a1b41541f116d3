"""What the job `spring` reports: plain records that become JSON."""

from dataclasses import asdict, dataclass, field
from typing import Any

from converter.jobs.records import DeviationRecord

__all__ = ["JudgementRecord", "SpringRecord", "SprungRecord"]


@dataclass(slots=True)
class JudgementRecord:
    """What the stations look like; lengths in drawing units, angles in degrees.

    Attributes:
        suspects: stations that look mistyped: `row` (from 1), `place` (line of the table, vertex, POINT), `line`,
            `column`, `given`, `fair` (what the others predict), `off` (given less fair), `meant` (a number that a slip
            of the pen turns into the given one), `odds` (logarithm).
        overshoots: pieces that do what the stations do not: `kind` (overshoot, loop, turn), `from_row`, `to_row`,
            `from_place`, `to_place`, `size`, `x`, `y`, `cure`.
        sparse: pieces that turn too far to be known: `from_row`, `to_row`, `from_place`, `to_place`, `turn_deg`, `x`,
            `y` (where one more station would help most), `along`.
    """

    suspects: list[dict[str, Any]] = field(default_factory=list)
    overshoots: list[dict[str, Any]] = field(default_factory=list)
    sparse: list[dict[str, Any]] = field(default_factory=list)


@dataclass(slots=True)
class SprungRecord:
    """One curve. Keys of the JSON record are the attributes; lengths in drawing units, angles in degrees."""

    id: str
    layer: str
    closed: bool
    vertices_in: int
    source: str
    entity: str
    degree: int
    ends: str
    pieces: int = 0
    control_points: int = 0
    arcs: int = 0
    lines: int = 0
    vertices_out: int = 0
    entities: int = 0
    tolerance: float | None = None
    chord_error: float | None = None
    corners: list[dict[str, float]] = field(default_factory=list)
    deviation: DeviationRecord | None = None
    fairness: dict[str, dict[str, Any] | None] = field(default_factory=dict)
    judgement: JudgementRecord = field(default_factory=JudgementRecord)
    length_in: float = 0.0
    length_out: float = 0.0
    area_in: float = 0.0
    area_out: float = 0.0
    within_tolerance: bool = True
    warnings: list[str] = field(default_factory=list)


@dataclass(slots=True)
class SpringRecord:
    """The whole job."""

    command: str
    version: str
    input: str
    output: str | None
    table: str | None
    units: str
    understood: str | None
    tolerance: float | None
    chord_error: float | None
    form: str
    degree: int
    ends: str | None
    parameter: str
    max_step: float | None
    max_turn_deg: float | None
    profiles: list[SprungRecord] = field(default_factory=list)
    passed_through: dict[str, int] = field(default_factory=dict)
    skipped: list[dict[str, str]] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)

    @property
    def within_tolerance(self) -> bool:
        """Whether every curve meets its stations as it should."""
        return all(profile.within_tolerance for profile in self.profiles)

    def as_json(self) -> dict[str, Any]:
        """Return the record as plain dictionaries, lists, numbers and text."""
        return {**asdict(self), "within_tolerance": self.within_tolerance}
