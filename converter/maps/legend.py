"""The words on a deviation map: labels of zones and the lines of its legend."""

import textwrap
from typing import TYPE_CHECKING

from converter.maps.plan import CHORD_SHARE, Mark, Plan

if TYPE_CHECKING:
    from converter.jobs.comparison import Comparison

__all__ = ["SENSE", "label_of", "legend_lines", "number", "plain", "unit_of"]

SENSE = "+ is outside closed profiles of OLD, left of the travel of open ones"
_WIDE = 64  # characters a line


def unit_of(units: str) -> str:
    """Return what follows a number, with a space before it; nothing for a drawing without units."""
    return "" if units == "unitless" else f" {units}"


def number(value: float, signed: bool = False) -> str:
    """Return a number with four figures."""
    return f"{value:+.4g}" if signed else f"{value:.4g}"


def label_of(mark: Mark, units: str) -> str:
    """Return the label of a zone: its number, its peak with sign and unit."""
    zone = mark.zone
    if zone.along_profile == "old":
        return f"{mark.number}: {number(abs(zone.peak))}{unit_of(units)} missing"
    return f"{mark.number}: {number(zone.peak, zone.side != 'off')}{unit_of(units)}"


def legend_lines(comparison: "Comparison", plan: Plan) -> list[str]:
    """Return what the legend says beside the bands, wrapped to lines that fit."""
    from converter.comparison_report import move_line, verdict
    from converter.report import CAUTION

    record = comparison.record
    space = any(pair.new.dimension == 3 for pair in comparison.pairs)
    groups = [
        [verdict(record, comparison.limits)],
        [f"OLD {record.old}", f"NEW {record.new}", f"units: {record.units}; {move_line(record)}"],
        [
            SENSE + ("; in space it has no sign" if space else ""),
            f"whiskers: deviation drawn {plan.factor:.6g} times, from OLD towards NEW",
            f"splines are drawn as polylines within {number(CHORD_SHARE * plan.size)}{unit_of(record.units)}",
        ],
        list(record.warnings),
        [CAUTION],
    ]
    if plan.coarse:
        ids = ", ".join(plan.coarse[:6]) + (" and more" if plan.coarse[6:] else "")
        groups[2].append(f"{ids}: the deviation changes often; each 1/2000 of the length has the band of its largest")
    lines = []
    for group in filter(None, groups):
        lines += [line for paragraph in group for line in textwrap.wrap(plain(paragraph), _WIDE)] + [""]
    return lines[:-1]


def plain(text: str) -> str:
    """Return text as a DXF TEXT holds it: one line, nothing that a viewer takes for a code.

    `%%` begins a code (DXF Reference, TEXT) and is kept apart; a caret is followed by a space, which stands for itself.
    """
    line = "".join(sign if sign.isprintable() else "?" for sign in " ".join(text.split()))
    while "%%" in line:
        line = line.replace("%%", "% %")
    return line.replace("^", "^ ")
