"""Options of the command line: lengths with units, help under headings, and the options that commands share."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, TypeVar

import click

from converter.errors import LengthError
from converter.units import Length, parse_length, unit_from_name

__all__ = [
    "EVERYDAY",
    "INPUT",
    "OUTPUT",
    "GroupedCommand",
    "GroupedOption",
    "LengthType",
    "SignedLength",
    "SignedLengthType",
    "UnitType",
    "gap_option",
    "layer_option",
    "option",
    "units_option",
]

EVERYDAY, INPUT, OUTPUT = "Everyday options", "Reading the drawing", "Writing"
_Function = TypeVar("_Function", bound=Callable[..., Any])


class LengthType(click.ParamType):  # type: ignore[type-arg]  # generic only in newer releases
    """A length: a number in drawing units, or a number with a unit; words such as `auto` where they are allowed."""

    name = "LEN"

    def __init__(self, *words: str) -> None:
        self.words = words

    def get_metavar(self, *_: Any, **__: Any) -> str:
        """Return the placeholder shown in the help."""
        return "|".join(["LEN", *self.words])

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Length | str:
        """Return the length, or the word as it is."""
        if isinstance(value, Length) or value in self.words:
            return value
        try:
            return parse_length(str(value))
        except LengthError as error:
            self.fail(str(error), param, ctx)


@dataclass(frozen=True, slots=True)
class SignedLength:
    """A length with a direction."""

    size: Length
    negative: bool


class SignedLengthType(click.ParamType):  # type: ignore[type-arg]
    """A length that may have a sign in front."""

    name = "LEN"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> SignedLength:
        """Return the length and its sign."""
        if isinstance(value, SignedLength):
            return value
        text = str(value).strip()
        try:
            return SignedLength(parse_length(text[1:] if text[:1] in ("+", "-") else text), text.startswith("-"))
        except LengthError as error:
            self.fail(str(error), param, ctx)


class UnitType(click.ParamType):  # type: ignore[type-arg]
    """The name of a unit."""

    name = "UNIT"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> str:
        """Return the symbol of the unit."""
        try:
            return unit_from_name(str(value)).symbol
        except LengthError as error:
            self.fail(str(error), param, ctx)


class GroupedOption(click.Option):
    """An option that stands under a heading in the help."""

    def __init__(self, *args: Any, heading: str = EVERYDAY, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.heading = heading


class GroupedCommand(click.Command):
    """A command whose help shows the everyday options first and the others under headings by purpose."""

    def format_options(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the options, heading by heading in the order in which headings first appear."""
        groups: dict[str, list[tuple[str, str]]] = {EVERYDAY: []}
        for parameter in self.get_params(ctx):
            record = parameter.get_help_record(ctx) if isinstance(parameter, click.Option) else None
            if record is not None:
                groups.setdefault(getattr(parameter, "heading", EVERYDAY), []).append(record)
        for heading, records in groups.items():
            if records:
                with formatter.section(heading):
                    formatter.write_dl(records)


def option(*names: str, heading: str = EVERYDAY, **settings: Any) -> Callable[[_Function], _Function]:
    """Return a decorator for an option under a heading."""
    return click.option(*names, cls=GroupedOption, heading=heading, **settings)


layer_option = option(
    "--layer", "layers", metavar="NAME", multiple=True, help="Take profiles from this layer only; may be repeated."
)
gap_option = option(
    "--gap",
    type=LengthType(),
    heading=INPUT,
    help="Join ends that lie no farther apart than this.  [default: 1e-6 of the extent]",
)
units_option = option(
    "--units", type=UnitType(), heading=INPUT, help="Unit of the drawing, in place of what the file states."
)
