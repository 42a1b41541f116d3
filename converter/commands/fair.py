"""The command `fair`."""

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from converter.console import print_table
from converter.errors import ConverterError
from converter.files import check_output
from converter.options import (
    OUTPUT,
    GroupedCommand,
    LengthType,
    gap_option,
    layer_option,
    option,
    units_option,
)
from converter.report import CAUTION, FAIR_HEADINGS, fair_rows, fair_sentence, write_json
from converter.units import Length
from geometry.errors import GeometryError

if TYPE_CHECKING:
    from converter.jobs.records import FairRecord

__all__ = ["fair"]

_CURVE = "The curve"
_SHOWN = 40
_VERSIONS = ("R12", "R2000", "R2004", "R2007", "R2010", "R2013", "R2018")


@click.command(cls=GroupedCommand, short_help="Fair traced outlines within a proven tolerance.")
@click.argument("drawings", metavar="IN...", nargs=-1, required=True, type=click.Path(path_type=Path))
@option("-o", "--output", metavar="OUT", type=click.Path(path_type=Path), help="DXF file to write.")
@option("--out-dir", metavar="DIR", type=click.Path(path_type=Path), help="Folder to write to, names kept.")
@option(
    "--tolerance",
    type=LengthType("auto"),
    default="auto",
    show_default=True,
    help="Largest distance between what is given and what is written, both ways; auto reads it off each profile.",
)
@option(
    "--as",
    "form",
    type=click.Choice(["spline", "arcs", "lines"]),
    default="spline",
    show_default=True,
    help="Write SPLINE entities, lines and arcs (LWPOLYLINE with bulges), or vertices only.",
)
@layer_option
@option("--report", metavar="FILE", type=click.Path(path_type=Path), help="Write the record of the job as JSON.")
@option("--force", is_flag=True, help="Allow replacing files that exist.")
@option("--quiet", is_flag=True, help="Print nothing but errors.")
@option(
    "--corner-angle",
    metavar="DEG",
    type=click.FloatRange(0.0, 180.0),
    heading=_CURVE,
    help="Take every vertex that turns by more as a corner: 0 all that turn, 180 none.  [default: find true corners]",
)
@option(
    "--corners-on",
    metavar="NAME",
    heading=_CURVE,
    help="Put a corner at every POINT on this layer that lies on a profile.",
)
@option(
    "--chord-error",
    type=LengthType(),
    heading=_CURVE,
    help="Share of the tolerance that writing few entities may spend.  [default: a tenth of it]",
)
@option(
    "--degree", type=click.Choice(["2", "3"]), default="3", show_default=True, heading=_CURVE, help="Degree of splines."
)
@option("--redraw", is_flag=True, heading=_CURVE, help="Draw true curves (circles, arcs, splines) afresh as well.")
@gap_option
@units_option
@option(
    "--dxf-version",
    "version",
    type=click.Choice(_VERSIONS, case_sensitive=False),
    heading=OUTPUT,
    help="DXF version to write.  [default: that of IN]",
)
@click.pass_context
def fair(
    context: click.Context,
    drawings: tuple[Path, ...],
    output: Path | None,
    out_dir: Path | None,
    tolerance: Length | str,
    form: Any,
    layers: tuple[str, ...],
    report: Path | None,
    force: bool,
    quiet: bool,
    corner_angle: float | None,
    corners_on: str | None,
    chord_error: Length | None,
    degree: str,
    redraw: bool,
    gap: Length | None,
    units: str | None,
    version: str | None,
) -> int:
    """Fair the traced profiles of the drawings IN within a tolerance, keep their true corners, and write new drawings.

    What needs no fairing (circles, arcs, splines, clean polygons) and everything that is not a profile stays as it
    is. Exit code 1 means that a profile misses its tolerance; the summary and the record name it.
    """
    from converter.jobs.fair import FairSettings, fair_drawing  # slow to import, and the help needs none of it

    settings = FairSettings(
        tolerance=tolerance if isinstance(tolerance, Length) else None,
        form=form,
        degree=int(degree),
        chord_error=chord_error,
        corner_angle=corner_angle,
        corners_on=corners_on,
        redraw=redraw,
        layers=layers,
        gap=gap,
        units=units,
        version=version,
        force=force,
    )
    places = _outputs(context, drawings, output, out_dir)
    if report is not None:
        check_output(report, force, drawings)
        if report in places:
            raise click.UsageError("--report and the drawing have one name; choose another", context)
    records: list[FairRecord] = []
    failed: list[str] = []
    for source, place in zip(drawings, places, strict=True):
        try:
            record = fair_drawing(source, place, settings)
        except (ConverterError, GeometryError) as error:
            if len(drawings) == 1:
                raise
            failed.append(str(error))  # one file must not stop the others
            click.echo(f"error: {error}", err=True)
            continue
        records.append(record)
        if not quiet:
            _print(record)
    if report is not None:
        whole: dict[str, Any] = (
            records[0].as_json()
            if len(drawings) == 1
            else {
                "command": "fair",
                "files": [record.as_json() for record in records],
                "failed": failed,
            }
        )
        write_json(report, whole, force, list(drawings))
    if records and not quiet:
        print(CAUTION)
    if failed:
        return 2
    return 0 if all(record.within_tolerance for record in records) else 1


def _outputs(
    context: click.Context, drawings: tuple[Path, ...], output: Path | None, out_dir: Path | None
) -> list[Path]:
    """Return where each drawing is written to."""
    if (output is None) == (out_dir is None):
        raise click.UsageError("state where to write: -o OUT for one drawing, or --out-dir DIR", context)
    if output is not None:
        if len(drawings) > 1:
            raise click.UsageError("several drawings need --out-dir DIR in place of -o", context)
        return [output]
    assert out_dir is not None
    names = [drawing.name for drawing in drawings]
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise click.UsageError(f"two drawings are named {twice[0]}; write them to different folders", context)
    if not out_dir.exists():
        out_dir.mkdir(parents=True)
    return [out_dir / name for name in names]


def _print(record: "FairRecord") -> None:
    print(f"{record.input} -> {record.output}, units: {record.units}")
    for warning in record.warnings:
        print(f"note: {warning}")
    rows = fair_rows(record)
    print_table(FAIR_HEADINGS, rows[:_SHOWN], right=("corners", "deviation", "of", "mean", "inflections"))
    if len(rows) > _SHOWN:
        print(f"and {len(rows) - _SHOWN} more; --report lists them all")
    told: dict[str, list[str]] = {}
    for profile in record.profiles:
        if profile.left_as_drawn is None:
            reason = f"tolerance {profile.tolerance:.4g}: {profile.tolerance_reason}"
        else:
            reason = f"left as drawn: {profile.left_as_drawn}"
        told.setdefault(reason, []).append(profile.id)
        for warning in profile.warnings:
            told.setdefault(warning, []).append(profile.id)
    for line, ids in told.items():
        few = ", ".join(ids[:6]) + (f" and {len(ids) - 6} more" if len(ids) > 6 else "")
        print(f"{few}: {line}")
    for item in record.skipped:
        print(f"not usable: {item['type']} {item['handle']}: {item['reason']}")
    passed = ", ".join(f"{count} {kind}" for kind, count in sorted(record.passed_through.items()))
    if passed:
        print(f"passed through untouched: {passed}")
    print(fair_sentence(record))
