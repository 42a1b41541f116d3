"""The command `fair`."""

from collections.abc import Sequence
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
from converter.report import (
    CAUTION,
    CHOICE_HEADINGS,
    FAIR_HEADINGS,
    FAIRNESS_HEADINGS,
    choice_rows,
    fair_rows,
    fair_sentence,
    fairness_rows,
    write_json,
)
from converter.units import Length
from geometry.errors import GeometryError

if TYPE_CHECKING:
    from converter.jobs.records import FairRecord

__all__ = ["fair"]

_CURVE = "The curve"
_LIMITS = "Limits of one form"
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
    "forms",
    type=click.Choice(["spline", "arcs", "lines"]),
    multiple=True,
    default=("spline",),
    help="Write SPLINE entities, lines and arcs (LWPOLYLINE with bulges), or vertices only. May be repeated: all are "
    "counted for choosing, and the first is written if there is somewhere to write to.  [default: spline]",
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
    "--budget",
    metavar="N",
    type=click.IntRange(2),
    heading=_CURVE,
    help="Most control points, arcs and lines, or vertices a profile; takes the smallest chord error that keeps it.",
)
@option(
    "--degree", type=click.Choice(["2", "3"]), default="3", show_default=True, heading=_CURVE, help="Degree of splines."
)
@option("--redraw", is_flag=True, heading=_CURVE, help="Draw true curves (circles, arcs, splines) afresh as well.")
@option(
    "--vertices",
    type=click.Choice(["free", "on-curve"]),
    default="free",
    show_default=True,
    heading=_LIMITS,
    help="Lines: vertices about the curve, fewest of them, or on the curve.",
)
@option("--max-step", type=LengthType(), heading=_LIMITS, help="Lines: longest segment.")
@option(
    "--max-turn", metavar="DEG", type=float, heading=_LIMITS, help="Lines: largest turn at a vertex that is no corner."
)
@option("--least-radius", type=LengthType(), heading=_LIMITS, help="Arcs: smallest radius; named where it is not kept.")
@option("--most-radius", type=LengthType(), heading=_LIMITS, help="Arcs: largest radius; named where it is not kept.")
@gap_option
@units_option
@option(
    "--decimals",
    metavar="N",
    type=click.IntRange(0, 15),
    heading=OUTPUT,
    help="Round coordinates to N places; what is certified is the rounded curve.  [default: in full]",
)
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
    forms: tuple[Any, ...],
    layers: tuple[str, ...],
    report: Path | None,
    force: bool,
    quiet: bool,
    corner_angle: float | None,
    corners_on: str | None,
    chord_error: Length | None,
    budget: int | None,
    degree: str,
    redraw: bool,
    vertices: str,
    max_step: Length | None,
    max_turn: float | None,
    least_radius: Length | None,
    most_radius: Length | None,
    gap: Length | None,
    units: str | None,
    decimals: int | None,
    version: str | None,
) -> int:
    """Fair the traced profiles of the drawings IN within a tolerance, keep their true corners, and write new drawings.

    What needs no fairing (circles, arcs, splines, clean polygons) and everything that is not a profile stays as it
    is. Exit code 1 means that a profile misses its tolerance or the budget; the summary and the record name it.
    """
    from converter.jobs.fair import FairSettings, fair_drawing  # slow to import, and the help needs none of it

    settings = FairSettings(
        tolerance=tolerance if isinstance(tolerance, Length) else None,
        form=forms[0],
        also=tuple(dict.fromkeys(form for form in forms if form != forms[0])),
        degree=int(degree),
        chord_error=chord_error,
        budget=budget,
        on_curve=vertices == "on-curve",
        max_step=max_step,
        max_turn=max_turn,
        least_radius=least_radius,
        most_radius=most_radius,
        decimals=decimals,
        corner_angle=corner_angle,
        corners_on=corners_on,
        redraw=redraw,
        layers=layers,
        gap=gap,
        units=units,
        version=version,
        force=force,
    )
    places = _outputs(context, drawings, output, out_dir, needed=not settings.also)
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
    return 0 if all(record.within_tolerance and record.within_budget for record in records) else 1


def _outputs(
    context: click.Context, drawings: tuple[Path, ...], output: Path | None, out_dir: Path | None, needed: bool
) -> Sequence[Path | None]:
    """Return where each drawing is written to, None for nowhere."""
    if output is None and out_dir is None and not needed:
        return [None] * len(drawings)
    if (output is None) == (out_dir is None):
        raise click.UsageError("state where to write: -o OUT for one drawing, or --out-dir DIR", context)
    if output is not None:
        if len(drawings) > 1:
            raise click.UsageError("several drawings need --out-dir DIR in place of -o", context)
        if output.suffix.lower() != ".dxf":
            raise click.UsageError(f"{output}: what is written is DXF; give a name that ends in .dxf", context)
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
    print(f"{record.input} -> {record.output or 'nothing written'}, units: {record.units}")
    for warning in record.warnings:
        print(f"note: {warning}")
    _print_rows(FAIR_HEADINGS, fair_rows(record), right=("corners", "deviation", "of", "mean"))
    _print_rows(FAIRNESS_HEADINGS, fairness_rows(record), right=FAIRNESS_HEADINGS[1:])
    _print_rows(CHOICE_HEADINGS, choice_rows(record), right=CHOICE_HEADINGS[2:])
    told: dict[str, list[str]] = {}
    for profile in record.profiles:
        drawn = profile.left_as_drawn
        if drawn is None:
            told.setdefault(f"tolerance {profile.tolerance:.4g}: {profile.tolerance_reason}", []).append(profile.id)
        elif not any(drawn in warning for warning in profile.warnings):  # which say it themselves
            told.setdefault(f"left as drawn: {drawn}", []).append(profile.id)
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


def _print_rows(headings: Sequence[str], rows: list[tuple[str, ...]], right: Sequence[str]) -> None:
    if not rows:
        return
    print_table(headings, rows[:_SHOWN], right=right)
    if len(rows) > _SHOWN:
        print(f"and {len(rows) - _SHOWN} more; --report lists them all")
