"""What a job reports: plain records that become JSON, and the rounding of numbers for people."""

from dataclasses import asdict, dataclass, field
from typing import Any

__all__ = ["ChoiceRecord", "DeviationRecord", "FairRecord", "ProfileRecord"]


@dataclass(slots=True)
class DeviationRecord:
    """Distance between what was given and what is written, drawing units.

    Attributes:
        certified: proven: never below the true largest distance.
        measured: found: never above it.
        rms: root mean square of the distance along the written curve, from samples.
        mean_signed: mean of the signed distance along it, + outside (closed) or left of travel (open); None in 3-D.
        in_order: proven bound on the distance when both are travelled from end to end in the same order.
    """

    certified: float
    measured: float
    rms: float
    mean_signed: float | None
    in_order: float | None = None


@dataclass(slots=True)
class ChoiceRecord:
    """What one form takes for a profile, whether it is written or only counted.

    Attributes:
        form: spline, arcs or lines.
        entities: control points, arcs and lines, or vertices.
        least: theoretical least number of them, for splines a yardstick; None where no formula applies.
        chord_error: share of the tolerance that was spent on it, drawing units.
        certified: proven distance to the given outline.
        within_tolerance: whether that keeps the tolerance.
        within_budget: whether the number keeps the budget.
    """

    form: str
    entities: int
    least: float | None
    chord_error: float
    certified: float
    within_tolerance: bool
    within_budget: bool


@dataclass(slots=True)
class ProfileRecord:
    """One profile. Keys of the JSON record are the attributes; lengths in drawing units, angles in degrees."""

    id: str
    layer: str
    closed: bool
    vertices_in: int
    source: str
    entity: str
    tolerance: float | None
    tolerance_reason: str
    jaggedness: dict[str, Any] | None
    left_as_drawn: str | None
    pieces: int = 0
    control_points: int = 0
    arcs: int = 0
    lines: int = 0
    vertices_out: int = 0
    entities: int = 0
    least: float | None = None
    chord_error: float | None = None
    within_budget: bool = True
    choices: list[ChoiceRecord] = field(default_factory=list)
    corners: list[dict[str, float]] = field(default_factory=list)
    deviation: DeviationRecord | None = None
    fairness: dict[str, dict[str, Any]] | None = None
    diameter: float | None = None
    length_in: float = 0.0
    length_out: float = 0.0
    area_in: float = 0.0
    area_out: float = 0.0
    within_tolerance: bool = True
    warnings: list[str] = field(default_factory=list)


@dataclass(slots=True)
class FairRecord:
    """The whole job."""

    command: str
    version: str
    input: str
    output: str | None
    units: str
    tolerance: float | str
    chord_error: float | str
    form: str
    degree: int
    gap: float
    budget: int | None = None
    decimals: int | None = None
    profiles: list[ProfileRecord] = field(default_factory=list)
    passed_through: dict[str, int] = field(default_factory=dict)
    skipped: list[dict[str, str]] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)

    @property
    def within_tolerance(self) -> bool:
        """Whether every profile keeps its tolerance."""
        return all(profile.within_tolerance for profile in self.profiles)

    @property
    def within_budget(self) -> bool:
        """Whether every profile keeps the budget."""
        return all(profile.within_budget for profile in self.profiles)

    def as_json(self) -> dict[str, Any]:
        """Return the record as plain dictionaries, lists, numbers and text."""
        return {**asdict(self), "within_tolerance": self.within_tolerance, "within_budget": self.within_budget}
