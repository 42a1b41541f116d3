"""The page of a comparison: verdict, map, deviation along each profile, zones and figures."""

import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter.files import check_output, write_text
from converter.maps.legend import SENSE, number, unit_of
from converter.maps.plan import Mark, Plan, plan_of
from converter.pages.base import rendered
from converter.pages.picture import Picture, Thinned, extremes, segments, thinned
from geometry.arrays import FloatArray

if TYPE_CHECKING:
    from converter.jobs.comparison import Compared, Comparison

__all__ = ["write_page"]

_BINS = 9_000  # of all charts together
_MOST_BINS, _LEAST_BINS = 1000, 4  # of one chart
_MOST_MARKS = 60  # on the map
_MOST_ROWS = 300


def write_page(
    comparison: "Comparison",
    path: Path,
    force: bool = False,
    inputs: Sequence[Path] = (),
    whiskers: float | None = None,
) -> None:
    """Write the page of a comparison: one HTML file that fetches nothing.

    Args:
        comparison: as measured.
        path: the output; it appears whole or not at all.
        force: whether an existing file may be replaced.
        inputs: files that must never be written.
        whiskers: how many times its size a deviation is drawn; None for a round number that shows.

    Raises:
        OutputError: the output exists without `force`, is an input, or cannot be written.
    """
    check_output(path, force, inputs)
    write_text(path, _page(comparison, whiskers), force, inputs)


def _page(comparison: "Comparison", whiskers: float | None) -> str:
    from converter.comparison_report import move_line, verdict
    from converter.report import CAUTION

    record = comparison.record
    plan = plan_of(comparison, whiskers)
    picture = Picture.around(plan.low, plan.high)
    order = sorted(range(len(record.pairs)), key=lambda k: -_farthest(comparison.pairs[k]))
    drawing, notes = _drawing(comparison, plan, picture)
    outcome = {None: "open", True: "within", False: "out"}[record.within_tolerance]
    said = verdict(record, comparison.limits)
    return rendered(
        "compare.html",
        _data(comparison, plan, picture, order),
        title=f"{Path(record.old).name} to {Path(record.new).name}: deviation",
        command="compare",
        outcome=outcome,
        verdict=said[:1].upper() + said[1:],
        record=record,
        move=move_line(record),
        stated=None if comparison.limits is None else comparison.limits.stated,
        unit=unit_of(record.units),
        sense=SENSE,
        coordinate=lambda value: _coordinate(value, plan.size),
        space=any(pair.new.dimension == 3 for pair in comparison.pairs),
        plan=plan,
        drawing=drawing,
        notes=notes,
        marks=[_mark(mark, comparison, plan, picture) for mark in plan.marks[:_MOST_ROWS]],
        marks_drawn=_MOST_MARKS,
        order=order[:_MOST_ROWS],
        most=_MOST_ROWS,
        caution=CAUTION,
        version=record.version,
    )


def _farthest(pair: "Compared") -> float:
    return pair.record.deviation.certified


def _drawing(comparison: "Comparison", plan: Plan, picture: Picture) -> tuple[dict[str, Any], list[str]]:
    """Return the paths of the map and what is to be said of how it was drawn."""
    parts = [part for pair in plan.stretches for part in pair]
    groups = [
        [pair.old for pair in comparison.pairs],
        [curve for _, _, curve in comparison.only_old],
        [curve for _, _, curve in comparison.only_new],
        [part.curve for part in parts],
    ]
    found = thinned([curve for group in groups for curve in group], picture)
    paths = iter(found.paths)
    old, only_old, only_new, new = ([next(paths) for _ in group] for group in groups)
    stretches = iter(new)
    pairs = []
    for k, (sections, whiskers) in enumerate(zip(plan.stretches, plan.whiskers, strict=True)):
        lines = [""] * len(plan.bands.bands)
        for section in sections:
            lines[section.band] += next(stretches)
        hairs = [
            segments(whiskers.base[whiskers.band == band], whiskers.tip[whiskers.band == band], picture)
            for band in range(len(lines))
        ]
        pairs.append({"old": old[k], "new": lines, "whiskers": hairs})
    shown = [np.zeros((0, 2))] + [whiskers.tip[:, :2] for whiskers in plan.whiskers]
    shown += [np.array([mark.tip[:2]]) for mark in plan.marks]
    return {
        "pairs": pairs,
        "only_old": only_old,
        "only_new": only_new,
        "view": picture.view(np.concatenate(shown)),
    }, _notes(comparison, plan, found)


def _notes(comparison: "Comparison", plan: Plan, found: Thinned) -> list[str]:
    unit = unit_of(comparison.record.units)
    notes = [
        f"The map shows {found.drawn} of {found.vertices} vertices: its lines lie within "
        f"{number(found.distance)}{unit} of the profiles, which cannot be seen without zooming in. Figures and zones "
        "come from the profiles themselves.",
        f"Whiskers run from OLD towards NEW and on, {plan.factor:.6g} times the deviation, one in every short stretch, "
        "where the deviation is largest.",
        "The chart shows the largest and the least deviation of every short stretch and the peak of every zone. "
        "Samples prove nothing: the certified figures do.",
    ]
    if plan.coarse:
        notes.append(
            f"{', '.join(plan.coarse[:6])}{' and more' if plan.coarse[6:] else ''}: the deviation passes from band to "
            "band so often that every 1/2000 of the length has the colour of its largest deviation."
        )
    if plan.marks:
        notes.append("Where zone numbers would lie on one another the higher peak shows; zoom in to see the others.")
    if len(plan.marks) > _MOST_MARKS:
        notes.append(f"Of {len(plan.marks)} zones the {_MOST_MARKS} with the highest peaks are numbered on the map.")
    if any(pair.new.dimension == 3 for pair in comparison.pairs):
        notes.append("Profiles in space are shown in plan; their deviation has no sign.")
    return notes


def _data(comparison: "Comparison", plan: Plan, picture: Picture, order: list[int]) -> dict[str, Any]:
    """Return what the scripts of the page read; places are told from the corner `x`, `y` of the picture."""
    limits = comparison.limits
    bins = int(np.clip(_BINS // max(1, len(comparison.pairs)), _LEAST_BINS, _MOST_BINS))
    peaks: dict[int, list[float]] = {}
    for mark in plan.marks:
        if mark.zone.along_profile == "new":
            peaks.setdefault(mark.pair, []).append(mark.zone.along)
    digits = max(0, 6 - int(np.floor(np.log10(plan.size))))
    return {
        "unit": unit_of(comparison.record.units),
        "x": picture.x,
        "y": picture.y,
        "scale": picture.scale,
        "digits": min(digits, 12),
        "size": plan.size,
        "limits": None if limits is None else [-limits.minus, limits.plus],
        "edges": plan.bands.edges().tolist(),
        "bands": [band.meaning for band in plan.bands.bands],
        "order": order,
        "pairs": [
            _samples(pair, plan, picture, bins, np.array(peaks.get(k, [])), digits)
            for k, pair in enumerate(comparison.pairs)
        ],
        "zones": [
            {
                "pair": mark.pair,
                "from": mark.zone.from_along,
                "to": mark.zone.to_along,
                "along": mark.zone.along,
                "peak": mark.zone.peak,
                "x": mark.zone.x - picture.x,
                "y": mark.zone.y - picture.y,
                "old": mark.zone.along_profile == "old",
            }
            for mark in plan.marks[:_MOST_ROWS]
        ],
    }


def _samples(
    pair: "Compared", plan: Plan, picture: Picture, bins: int, peaks: FloatArray, digits: int
) -> dict[str, Any]:
    course = pair.course
    rows = extremes(course.along, course.deviation, bins, np.sort(peaks)) if len(course.along) else np.zeros(0, np.intp)
    local = course.points[rows, :2] - np.array([picture.x, picture.y])
    sizes = np.abs(course.deviation)
    fine = digits + 3 if not len(sizes) or not sizes.max() > 0.0 else 5 - int(np.floor(np.log10(sizes.max())))
    return {
        "name": f"{pair.record.old_id} to {pair.record.new_id}",
        "closed": pair.record.closed,
        "space": pair.new.dimension == 3,
        "length": round(pair.record.length_new, digits + 2),
        "a": np.round(course.along[rows], digits).tolist(),
        "x": np.round(local[:, 0], digits).tolist(),
        "y": np.round(local[:, 1], digits).tolist(),
        "d": np.round(course.deviation[rows], fine).tolist(),
        "b": plan.bands.index(course.deviation[rows]).tolist(),
    }


def _mark(mark: Mark, comparison: "Comparison", plan: Plan, picture: Picture) -> dict[str, Any]:
    """Return a zone as the page lists and marks it."""
    zone, record = mark.zone, comparison.pairs[mark.pair].record
    missing = zone.along_profile == "old"
    base, tip = np.array(mark.base[:2]), np.array(mark.tip[:2])
    away = (tip - base) * np.array([1.0, -1.0])
    length = float(np.linalg.norm(away))
    away = away / length if length > 0.0 else np.array([0.0, -1.0])
    x, y = picture.units(tip[None, :])[0].tolist()
    band = int(plan.bands.index(np.array([zone.peak]))[0])
    return {
        "number": mark.number,
        "x": x,
        "y": y,
        "dx": round(15.0 * float(away[0]), 1),
        "dy": round(15.0 * float(away[1]), 1),
        "band": band,
        "missing": missing,
        "peak": abs(zone.peak) if missing else zone.peak,
        "signed": not missing and zone.side != "off",
        "side": zone.side,
        "profile": f"OLD {record.old_id}" if missing else record.new_id,
        "zone": zone,
        "from": f"{zone.from_along:.6g}",
        "to": f"{zone.to_along:.6g}",
        "place": [_coordinate(zone.x, plan.size), _coordinate(zone.y, plan.size)],
    }


def _coordinate(value: float, size: float) -> str:
    """Return a coordinate told to a hundred-thousandth of the size of the map or finer."""
    text = f"{value:.{min(max(5 - math.floor(math.log10(size)), 0), 12)}f}"
    return ("0" if not float(text) else text).replace("-", "\u2212")
