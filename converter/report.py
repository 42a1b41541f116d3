"""What people and scripts read after a job: the sentence, the table, the JSON record."""

import json
import math
from pathlib import Path
from typing import Any

from converter.files import write_text
from converter.jobs.records import FairRecord, ProfileRecord

__all__ = [
    "CAUTION",
    "CHOICE_HEADINGS",
    "FAIRNESS_HEADINGS",
    "FAIR_HEADINGS",
    "choice_rows",
    "fair_rows",
    "fair_sentence",
    "fairness_rows",
    "write_json",
]

CAUTION = (
    "Before cutting: check units and scale on a scrap piece. The tolerance is geometric; it leaves kerf, tool radius "
    "and material out. Load-bearing and flight parts need a licensed engineer's approval under local codes."
)
_NOTHING = 1e-12  # of the number before: less is rounding
FAIR_HEADINGS = ("profile", "layer", "given", "written", "corners", "deviation", "of", "mean")
FAIRNESS_HEADINGS = ("profile", "inflections", "curvature extrema", "least radius", "strain energy")
CHOICE_HEADINGS = ("profile", "as", "entities", "least", "chord error", "deviation")


def write_json(path: Path, record: dict[str, Any], force: bool, inputs: list[Path]) -> None:
    """Write a record as JSON; numbers that are not finite become null.

    Raises:
        OutputError: the file exists without `force`, is an input, or cannot be written.
    """
    write_text(path, json.dumps(_finite(record), indent=1, allow_nan=False) + "\n", force, inputs)


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def fair_rows(record: FairRecord) -> list[tuple[str, ...]]:
    """Return a row of text for every profile, the one that uses most of its tolerance first."""
    return [_row(profile) for profile in _worst_first(record)]


def fairness_rows(record: FairRecord) -> list[tuple[str, ...]]:
    """Return a row of text for every profile that was faired: its fairness before and after."""
    rows = []
    for profile in _worst_first(record):
        if profile.fairness is not None:
            before, after = profile.fairness["before"], profile.fairness["after"]
            pairs = [
                f"{_short(before[key])} -> {_short(after[key], before[key])}"
                for key in ("inflections", "curvature_extrema", "least_radius", "strain_energy")
            ]
            rows.append((profile.id, *pairs))
    return rows


def choice_rows(record: FairRecord) -> list[tuple[str, ...]]:
    """Return a row of text for every form that was counted; none where only one was asked for."""
    return [
        (
            profile.id,
            choice.form,
            str(choice.entities) + ("" if choice.within_budget else " OVER"),
            "" if choice.least is None else str(math.ceil(choice.least - 1e-9)),
            f"{choice.chord_error:.2g}",
            f"{choice.certified:.3g}" + ("" if choice.within_tolerance else " OUT"),
        )
        for profile in _worst_first(record)
        for choice in profile.choices
    ]


def _worst_first(record: FairRecord) -> list[ProfileRecord]:
    def used(profile: ProfileRecord) -> float:
        if profile.deviation is None or not profile.tolerance:
            return -1.0
        return profile.deviation.certified / profile.tolerance

    return sorted(record.profiles, key=used, reverse=True)


def _short(value: float | None, beside: float | None = None) -> str:
    """Return a number with three figures; one that is nothing but rounding beside another is 0."""
    if value is None or math.isinf(value):
        return "none"
    if isinstance(value, int):
        return str(value)
    return "0" if beside is not None and abs(value) < _NOTHING * abs(beside) else f"{value:.3g}"


def _row(profile: ProfileRecord) -> tuple[str, ...]:
    given = profile.source
    if profile.vertices_in:
        given += f", {_counted(profile.vertices_in, 'vertex', 'vertices')}"
    given += "" if profile.closed else ", open"
    if profile.left_as_drawn is not None or profile.deviation is None:
        return (profile.id, profile.layer, given, "left as drawn", "", "", "", "")
    mean = profile.deviation.mean_signed
    return (
        profile.id,
        profile.layer,
        given,
        _written(profile),
        str(len(profile.corners)),
        f"{profile.deviation.certified:.3g}" + ("" if profile.within_tolerance else " OUT"),
        f"{profile.tolerance:.3g}",
        "" if mean is None else f"{mean:+.2g}",
    )


def _written(profile: ProfileRecord) -> str:
    size = f", diameter {profile.diameter:.4g}" if profile.diameter is not None else ""
    least = "" if profile.least is None else f" (least {math.ceil(profile.least - 1e-9)})"
    return _form(profile) + least + size


def _form(profile: ProfileRecord) -> str:
    if profile.control_points:
        return f"{profile.entity}, {profile.control_points} control points"
    if profile.arcs:
        parts = [_counted(profile.arcs, "arc")] + ([_counted(profile.lines, "line")] if profile.lines else [])
        return profile.entity if profile.entity == "CIRCLE" else ", ".join([profile.entity, *parts])
    return f"{profile.entity}, {_counted(profile.vertices_out, 'vertex', 'vertices')}"


def _counted(number: int, noun: str, nouns: str | None = None) -> str:
    return f"{number} {noun if number == 1 else nouns or noun + 's'}"


def fair_sentence(record: FairRecord) -> str:
    """Return the outcome in one sentence."""
    faired = [profile for profile in record.profiles if profile.left_as_drawn is None]
    left = len(record.profiles) - len(faired)
    parts = [f"{_counted(len(faired), 'profile')} faired"]
    if left:
        parts[0] += f", {left} left as drawn"
    measured = [p for p in faired if p.deviation is not None and p.tolerance]
    if measured:
        worst = max(measured, key=lambda p: p.deviation.certified / p.tolerance)  # type: ignore[union-attr, operator]
        unit = "" if record.units == "unitless" else f" {record.units}"
        assert worst.deviation is not None
        parts.append(f"certified deviation at most {worst.deviation.certified:.3g} of {worst.tolerance:.3g}{unit}")
    unfit = [p.id for p in record.profiles if p.left_as_drawn is not None and not p.within_tolerance]
    if unfit:
        parts.append(f"could not be faired as asked: {', '.join(unfit)}")
    out = [p.id for p in faired if not p.within_tolerance]
    parts.append(f"out of tolerance: {', '.join(out)}" if out else "none out of tolerance")
    over = [p.id for p in faired if not p.within_budget]
    if over:
        parts.append(f"over the budget: {', '.join(over)}")
    return "; ".join(parts)
