"""The command `spring`."""

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from converter.console import print_table
from converter.files import check_output
from converter.options import (
    INPUT,
    OUTPUT,
    GroupedCommand,
    LengthType,
    gap_option,
    layer_option,
    option,
    units_option,
)
from converter.units import Length

if TYPE_CHECKING:
    from converter.jobs.spring_records import SpringRecord

__all__ = ["spring"]

_CURVE, _POINTS, _ORDINATES = "The curve", "Points and lines", "A table of ordinates"
_VERSIONS = ("R12", "R2000", "R2004", "R2007", "R2010", "R2013", "R2018")


@click.command(cls=GroupedCommand, short_help="Lay a curve through sparse stations of a table or a drawing.")
@click.argument("source", metavar="IN", type=click.Path(path_type=Path))
@option(
    "-o",
    "--output",
    metavar="OUT",
    type=click.Path(path_type=Path),
    help="File to write: a drawing (.dxf) or points along the curve (.csv).  [default: judge only]",
)
@option(
    "--as",
    "form",
    type=click.Choice(["spline", "arcs", "lines", "points"]),
    help="Write SPLINE entities, lines and arcs, fewest vertices about the curve, or points on it.  "
    "[default: spline; for a table points]",
)
@option(
    "--tolerance",
    type=LengthType(),
    help="Meet the stations within this, for the fairest curve.  [default: exactly]",
)
@layer_option
@option("--report", metavar="FILE", type=click.Path(path_type=Path), help="Write the record of the job as JSON.")
@option("--force", is_flag=True, help="Allow replacing files that exist.")
@option("--quiet", is_flag=True, help="Print nothing but errors.")
@option(
    "--degree", type=click.Choice(["1", "2", "3"]), default="3", show_default=True, heading=_CURVE, help="Of the curve."
)
@option(
    "--ends",
    type=click.Choice(["natural", "clamped", "not-a-knot", "periodic"]),
    heading=_CURVE,
    help="End condition; periodic closes the curve.  [default: periodic where closed, else not-a-knot]",
)
@option(
    "--start-direction", metavar="DEG", type=float, heading=_CURVE, help="Direction of travel at the start, from x."
)
@option("--end-direction", metavar="DEG", type=float, heading=_CURVE, help="Direction of travel at the end, from x.")
@option(
    "--parameter",
    type=click.Choice(["chord", "centripetal", "uniform"]),
    default="chord",
    show_default=True,
    heading=_CURVE,
    help="Parameter of the stations: chord length, sum of its roots, or their number.",
)
@option(
    "--corner-angle",
    metavar="DEG",
    type=click.FloatRange(0.0, 180.0),
    heading=_CURVE,
    help="Take every station where the chords turn by more as a corner.  [default: those marked in a table]",
)
@option(
    "--chord-error",
    type=LengthType(),
    heading=_POINTS,
    help="Largest distance between the curve and what stands for it.  [default: a tenth of the tolerance, or 1e-4 of "
    "the extent, where one is needed]",
)
@option("--max-step", type=LengthType(), heading=_POINTS, help="Longest segment.")
@option("--max-turn", metavar="DEG", type=float, heading=_POINTS, help="Largest turn at a vertex that is no corner.")
@option("--stations", metavar="keep", type=click.Choice(["keep"]), heading=_POINTS, help="Make every station a vertex.")
@option(
    "--table", metavar="FILE", type=click.Path(path_type=Path), heading=_ORDINATES, help="Write ordinates of the curve."
)
@option(
    "--spacing",
    type=click.Choice(["even", "cosine"]),
    default="even",
    show_default=True,
    heading=_ORDINATES,
    help="Spacing along x.",
)
@option(
    "--count",
    metavar="N",
    type=click.IntRange(2, 1_000_000),
    default=21,
    show_default=True,
    heading=_ORDINATES,
    help="Ordinates on every branch on which x rises or falls throughout.",
)
@option(
    "--order",
    type=click.Choice(["drawing", "nearest"]),
    default="drawing",
    show_default=True,
    heading=INPUT,
    help="Order of the stations: as given, or along a short path through all of them.",
)
@gap_option
@units_option
@option(
    "--dxf-version",
    "version",
    type=click.Choice(_VERSIONS, case_sensitive=False),
    heading=OUTPUT,
    help="DXF version to write.  [default: that of IN; for a table R2010]",
)
@click.pass_context
def spring(
    context: click.Context,
    source: Path,
    output: Path | None,
    form: Any,
    tolerance: Length | None,
    layers: tuple[str, ...],
    report: Path | None,
    force: bool,
    quiet: bool,
    degree: str,
    ends: Any,
    start_direction: float | None,
    end_direction: float | None,
    parameter: Any,
    corner_angle: float | None,
    chord_error: Length | None,
    max_step: Length | None,
    max_turn: float | None,
    stations: str | None,
    table: Path | None,
    spacing: Any,
    count: int,
    order: Any,
    gap: Length | None,
    units: str | None,
    version: str | None,
) -> int:
    """Lay a curve through the stations of IN, a table (CSV or other text) or a DXF drawing.

    The stations are met exactly, or within a tolerance; the chords between them are no evidence. Stations that look
    mistyped, overshoot between stations and stations too far apart are named. Exit code 1 means that the stations are
    not met as asked; suspects alone do not change it.
    """
    from converter.jobs.spring import SpringSettings, spring_stations  # slow to import

    if output is not None and output.suffix.lower() not in (".dxf", ".csv"):
        raise click.UsageError(f"{output}: the ending says what is written; use .dxf or .csv", context)
    named = [path.resolve() for path in (output, report, table) if path is not None]
    if len(set(named)) < len(named):
        raise click.UsageError("two outputs have one name; choose another", context)
    if report is not None:
        check_output(report, force, [source])
    settings = SpringSettings(
        form=form,
        degree=int(degree),
        ends=ends,
        parameter=parameter,
        start_direction=start_direction,
        end_direction=end_direction,
        tolerance=tolerance,
        chord_error=chord_error,
        max_step=max_step,
        max_turn=max_turn,
        keep=stations is not None,
        corner_angle=corner_angle,
        spacing=spacing,
        count=count,
        order=order,
        layers=layers,
        gap=gap,
        units=units,
        version=version,
        force=force,
    )
    record = spring_stations(source, output, settings, table)
    if not quiet:
        _print(record)
    if report is not None:
        from converter.report import write_json

        write_json(report, record.as_json(), force, [source])
    return 0 if record.within_tolerance else 1


def _print(record: "SpringRecord") -> None:
    from converter.report import CAUTION
    from converter.spring_report import HEADINGS, RIGHT, check_lines, sentence, spring_rows

    print(f"{record.input} -> {record.output or 'nothing written'}, units: {record.units}")
    if record.understood is not None:
        print(f"read as: {record.understood}")
    for warning in record.warnings:
        print(f"note: {warning}")
    rows = spring_rows(record)
    print_table(HEADINGS, rows, right=RIGHT)
    if len(record.profiles) > len(rows):
        print(f"and {len(record.profiles) - len(rows)} more; --report lists them all")
    for line in check_lines(record):
        print(line)
    for item in record.skipped:
        print(f"not usable: {item['type']} {item['handle']}: {item['reason']}")
    passed = ", ".join(f"{count} {kind}" for kind, count in sorted(record.passed_through.items()))
    if passed and record.output is not None and not record.output.lower().endswith(".csv"):
        print(f"passed through untouched: {passed}")
    if record.table is not None:
        print(f"ordinates: {record.table}")
    print(sentence(record))
    if record.output is not None:
        print(CAUTION)
