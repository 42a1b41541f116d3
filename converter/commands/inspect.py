"""The command `inspect`."""

import json
from collections import Counter
from pathlib import Path
from typing import TYPE_CHECKING

import click

from converter.console import print_table
from converter.options import GroupedCommand, gap_option, layer_option, option, units_option
from converter.units import Length

if TYPE_CHECKING:
    from converter.jobs.inspect import InspectedProfile, InspectRecord

__all__ = ["inspect"]

_SHOWN = 40
_GAPS_SHOWN = 10


@click.command(cls=GroupedCommand, short_help="Show what is in a drawing and what to do with it.")
@click.argument("drawing", metavar="IN", type=click.Path(path_type=Path))
@option("--json", "as_json", is_flag=True, help="Print the facts as JSON.")
@layer_option
@gap_option
@units_option
def inspect(drawing: Path, as_json: bool, layers: tuple[str, ...], gap: Length | None, units: str | None) -> None:
    """Show what is in the drawing IN: its profiles, what is wrong with them, and what to do next.

    Nothing is changed or written.
    """
    from converter.jobs.inspect import InspectSettings, inspect_drawing  # slow to import, and the help needs none of it

    record = inspect_drawing(drawing, InspectSettings(layers, gap, units))
    if as_json:
        print(json.dumps(record.as_json(), indent=1, allow_nan=False))
        return
    _print(record)


def _print(record: "InspectRecord") -> None:
    print(f"{record.input}: DXF {record.dxf_version}, units: {record.units}")
    if record.extents is not None:
        size = " x ".join(f"{value:.6g}" for value in record.extents["size"][: 3 if record.extents["size"][2] else 2])
        corner = ", ".join(f"{value:.6g}" for value in record.extents["least"][:2])
        print(f"profiles cover {size} from ({corner}); ends within {record.gap:.3g} are joined")
    for warning in record.warnings:
        print(f"note: {warning}")
    _print_entities(record)
    if record.profiles:
        _print_profiles(record.profiles)
    _print_defects(record)
    print()
    print(f"next: {record.suggestion}  ({record.reason})" if record.suggestion else f"next: {record.reason}")


def _print_entities(record: "InspectRecord") -> None:
    rows = [(layer, kind, str(count)) for layer, kinds in record.entities.items() for kind, count in kinds.items()]
    if rows:
        print()
        print_table(("layer", "entity", "count"), rows, right=("count",))
    if record.in_blocks:
        inside = ", ".join(f"{count} {kind}" for kind, count in sorted(record.in_blocks.items()))
        print(f"inside blocks, left alone: {inside}")
    for item in record.skipped:
        print(f"not usable: {item['type']} {item['handle']}: {item['reason']}")


def _print_profiles(profiles: list["InspectedProfile"]) -> None:
    print()
    headings = (
        "profile",
        "layer",
        "from",
        "vertices",
        "length",
        "shortest",
        "median",
        "longest",
        "looks like",
        "advice",
    )
    rows = [_row(profile) for profile in profiles[:_SHOWN]]
    print_table(headings, rows, right=("vertices", "length", "shortest", "median", "longest"))
    reasons: dict[str, list[str]] = {}
    for profile in profiles[:_SHOWN]:
        reasons.setdefault(profile.why, []).append(profile.id)
    for why, ids in reasons.items():
        few = ", ".join(ids[:6]) + (f" and {len(ids) - 6} more" if len(ids) > 6 else "")
        print(f"{few}: {why}")
    if len(profiles) > _SHOWN:
        more = Counter(profile.looks_like for profile in profiles[_SHOWN:])
        kinds = ", ".join(f"{count} {kind}" for kind, count in sorted(more.items()))
        print(f"and {len(profiles) - _SHOWN} more ({kinds}); --json lists them all")


def _row(profile: "InspectedProfile") -> tuple[str, ...]:
    source = " ".join(kind if count == 1 else f"{count} {kind}" for kind, count in profile.sources.items())
    lengths = ("", "", "")
    if profile.segments is not None:
        shortest, median, longest = (f"{profile.segments[key]:.4g}" for key in ("shortest", "median", "longest"))
        lengths = (shortest, median, longest)
    return (
        profile.id,
        profile.layer,
        f"{source}, {'closed' if profile.closed else 'open'}{', 3-D' if profile.dimension == 3 else ''}",
        str(profile.vertices),
        f"{profile.length:.6g}",
        *lengths,
        profile.looks_like,
        profile.advice,
    )


def _print_defects(record: "InspectRecord") -> None:
    found = []
    for gap in record.near_gaps[:_GAPS_SHOWN]:
        x, y, _ = gap["place"]
        between = " and ".join(dict.fromkeys(gap["profiles"]))
        found.append(f"ends {gap['size']:.4g} apart at ({x:.6g}, {y:.6g}), layer {gap['layer']}, profile {between}")
    if len(record.near_gaps) > _GAPS_SHOWN:
        found.append(f"{len(record.near_gaps) - _GAPS_SHOWN} more ends that nearly meet; --json lists them all")
    for profile in record.profiles:
        if profile.self_crossings:
            x, y = profile.crossings[0]
            times = "once" if profile.self_crossings == 1 else f"{profile.self_crossings} times"
            found.append(f"profile {profile.id} crosses or touches itself {times}, first at ({x:.6g}, {y:.6g})")
        if profile.zero_length_segments:
            found.append(f"profile {profile.id} has {profile.zero_length_segments} segments of no length")
    if record.repeated_segments:
        found.append(f"{record.repeated_segments} segments are drawn more than once")
    if found:
        print()
        for line in found:
            print(f"check: {line}")
