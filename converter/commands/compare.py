"""The command `compare`."""

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import click

from converter.console import print_table
from converter.files import check_output
from converter.options import (
    INPUT,
    OUTPUT,
    GroupedCommand,
    LengthType,
    SignedLength,
    SignedLengthType,
    UnitType,
    gap_option,
    layer_option,
    option,
    units_option,
)
from converter.units import Length

if TYPE_CHECKING:
    from converter.jobs.comparison import Comparison

__all__ = ["compare"]

_SHOWN = 40
_ZONES_SHOWN = 12
_VERSIONS = ("R12", "R2000", "R2004", "R2007", "R2010", "R2013", "R2018")
_WITHIN, _OUT = 0, 1


@click.command(cls=GroupedCommand, short_help="Compare two revisions: certified deviation and a deviation map.")
@click.argument("old", metavar="OLD", type=click.Path(path_type=Path))
@click.argument("new", metavar="NEW", type=click.Path(path_type=Path))
@option(
    "--tolerance",
    type=LengthType(),
    help="Largest deviation allowed to either side.  [default: none, and no verdict]",
)
@option(
    "--profile-zone",
    type=LengthType(),
    help="Width of a profile tolerance zone (ISO 1101, ISO 1660) centred on OLD, in place of --tolerance: half of it "
    "to either side.",
)
@option(
    "--zone-shift",
    type=SignedLengthType(),
    help="Move the middle of the zone outside (closed) or left of (open) OLD; with a minus to the other side.",
)
@option(
    "--align",
    type=click.Choice(["none", "rigid"]),
    default="none",
    show_default=True,
    help="Compare NEW where it lies, or moved and turned onto OLD; it is never scaled.",
)
@option("-o", "--output", metavar="MAP", type=click.Path(path_type=Path), help="Write the deviation map as DXF.")
@option("--page", metavar="FILE", type=click.Path(path_type=Path), help="Write the map as an HTML page.")
@option("--table", metavar="FILE", type=click.Path(path_type=Path), help="Write the deviation along NEW as CSV.")
@option("--report", metavar="FILE", type=click.Path(path_type=Path), help="Write the record of the job as JSON.")
@layer_option
@option("--verdict", "verdict_only", is_flag=True, help="Only decide, as fast as can be; no figures, zones or maps.")
@option("--force", is_flag=True, help="Allow replacing files that exist.")
@option("--quiet", is_flag=True, help="Print nothing but errors.")
@gap_option
@units_option
@option(
    "--new-units",
    type=UnitType(),
    heading=INPUT,
    help="Unit of NEW, in place of what the file states; --units then is that of OLD alone.",
)
@option(
    "--whiskers",
    metavar="FACTOR",
    type=click.FloatRange(0.0, min_open=True),
    heading=OUTPUT,
    help="How many times its size a deviation is drawn in the maps.  [default: a round one that shows]",
)
@option(
    "--dxf-version",
    "version",
    type=click.Choice(_VERSIONS, case_sensitive=False),
    heading=OUTPUT,
    help="DXF version of the map.  [default: R2010]",
)
@click.pass_context
def compare(
    context: click.Context,
    old: Path,
    new: Path,
    tolerance: Length | None,
    profile_zone: Length | None,
    zone_shift: SignedLength | None,
    align: str,
    output: Path | None,
    page: Path | None,
    table: Path | None,
    report: Path | None,
    layers: tuple[str, ...],
    verdict_only: bool,
    force: bool,
    quiet: bool,
    gap: Length | None,
    units: str | None,
    new_units: str | None,
    whiskers: float | None,
    version: str | None,
) -> int:
    """Compare the profiles of two drawings: where, which way and by how much NEW differs from OLD.

    Deviations are + outside (closed profiles) or left of travel (open ones) of OLD. Exit code 1 means that a profile
    is out of tolerance or has no partner in the other drawing; without a tolerance there is no verdict.
    """
    outputs = _outputs(context, {"-o": output, "--page": page, "--table": table, "--report": report}, force, [old, new])
    if verdict_only and set(outputs) - {"--report"}:
        raise click.UsageError("--verdict leaves nothing to be drawn; leave it out for -o, --page or --table", context)

    from converter.comparison_report import verdict
    from converter.jobs.compare import CompareSettings, compare_drawings  # slow to import, and the help needs none

    found = compare_drawings(
        old,
        new,
        CompareSettings(
            tolerance=tolerance,
            profile_zone=profile_zone,
            zone_shift=None if zone_shift is None else zone_shift.size,
            zone_inwards=zone_shift is not None and zone_shift.negative,
            align=align == "rigid",
            verdict_only=verdict_only,
            layers=layers,
            gap=gap,
            units=units,
            new_units=new_units,
        ),
    )
    for write in _writers(found, output, page, table, report, version, whiskers, force):
        write()
    if not quiet:
        _print(found, outputs, figures=not verdict_only)
        print(verdict(found.record, found.limits))
    return _OUT if found.record.within_tolerance is False else _WITHIN


def _outputs(
    context: click.Context, places: dict[str, Path | None], force: bool, inputs: list[Path]
) -> dict[str, Path]:
    """Return the outputs asked for by option, all of them checked before any work is done."""
    given = {name: path for name, path in places.items() if path is not None}
    for name, path in given.items():
        if any(path == other for word, other in given.items() if word != name):
            raise click.UsageError(f"{path}: two outputs have this name; choose another for one of them", context)
        check_output(path, force, inputs)
    drawn = given.get("-o")
    if drawn is not None and drawn.suffix.lower() != ".dxf":
        raise click.UsageError(
            f"{drawn}: the map of -o is DXF; give a name that ends in .dxf, or use --page or --table", context
        )
    return given


def _writers(
    found: "Comparison",
    output: Path | None,
    page: Path | None,
    table: Path | None,
    report: Path | None,
    version: str | None,
    whiskers: float | None,
    force: bool,
) -> list[Callable[[], object]]:
    """Return what writes each output that was asked for."""
    inputs = [found.old_drawing.path, found.new_drawing.path]
    writers: list[Callable[[], object]] = []
    if output is not None:
        from converter.maps.drawing import write_map

        writers.append(lambda: write_map(found, output, version, whiskers, force, inputs))
    if table is not None:
        from converter.maps.table import write_table

        writers.append(lambda: write_table(found, table, force, inputs))
    if page is not None:
        from converter.pages.compare import write_page

        writers.append(lambda: write_page(found, page, force, inputs, whiskers))
    if report is not None:
        from converter.report import write_json

        writers.append(lambda: write_json(report, found.record.as_json(), force, inputs))
    return writers


def _print(found: "Comparison", outputs: dict[str, Path], figures: bool) -> None:
    """Print what was found; the verdict comes after it."""
    from converter.comparison_report import (
        PAIR_HEADINGS,
        ZONE_HEADINGS,
        alone_lines,
        move_line,
        pair_rows,
        zone_rows,
    )

    record = found.record
    written = f" -> {', '.join(str(path) for path in outputs.values())}" if outputs else ""
    print(f"OLD {record.old}, NEW {record.new}{written}, units: {record.units}")
    print(move_line(record))
    for warning in record.warnings:
        print(f"note: {warning}")
    rows = pair_rows(record) if figures else []
    if rows:
        print_table(PAIR_HEADINGS, rows[:_SHOWN], right=PAIR_HEADINGS[3:])
        if len(rows) > _SHOWN:
            print(f"and {len(rows) - _SHOWN} more pairs that lie nearer; --report lists them all")
    told: dict[str, list[str]] = {}
    for pair in record.pairs:
        lines = [] if pair.paired_by in ("handle", "place") else [f"paired by {pair.paired_by}"]
        for line in [*lines, *pair.warnings]:
            told.setdefault(line, []).append(pair.new_id)
    for line, ids in told.items():
        print(f"{', '.join(ids[:6])}{f' and {len(ids) - 6} more' if len(ids) > 6 else ''}: {line}")
    zones = zone_rows(record)
    if zones:
        print_table(ZONE_HEADINGS, zones[:_ZONES_SHOWN], right=(ZONE_HEADINGS[0], *ZONE_HEADINGS[3:]))
        if len(zones) > _ZONES_SHOWN:
            print(f"and {len(zones) - _ZONES_SHOWN} more zones; --report lists them all")
    alone = alone_lines(record)
    for line in alone[:_SHOWN]:
        print(line)
    if len(alone) > _SHOWN:
        print(f"and {len(alone) - _SHOWN} more in one drawing only; --report lists them all")
