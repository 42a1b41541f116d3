"""The command line `fairbatten`: finds the command, and turns errors into one line and an exit code.

Commands are imported only when they are called, so that `--help` and `--version` answer at once.
"""

import importlib
import io
import os
import sys
from collections.abc import Sequence
from typing import Any, NoReturn

import click

from converter import __version__
from converter.errors import ConverterError
from geometry.errors import GeometryError

__all__ = ["cli", "main"]

_COMMANDS = {
    "inspect": ("converter.commands.inspect", "Show what is in a drawing and what to do with it."),
    "fair": ("converter.commands.fair", "Fair traced outlines within a proven tolerance."),
    "spring": ("converter.commands.spring", "Lay a curve through sparse stations of a table or a drawing."),
    "compare": ("converter.commands.compare", "Compare two revisions: certified deviation and a deviation map."),
}
_UNUSABLE = 2


class LazyGroup(click.Group):
    """A group that knows its commands by name and imports each when it is called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Return the names of the commands in the order of everyday use."""
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Return a command, or None for an unknown name."""
        if cmd_name not in _COMMANDS:
            return None
        command: click.Command = getattr(importlib.import_module(_COMMANDS[cmd_name][0]), cmd_name)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the list of commands without importing them."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in _COMMANDS.items()])


@click.group(cls=LazyGroup, invoke_without_command=True, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="fairbatten", message="%(prog)s %(version)s")
@click.pass_context
def cli(context: click.Context) -> None:
    """Fair jagged DXF outlines within a proven tolerance and write them as few, machine-friendly curves."""
    if context.invoked_subcommand is None:
        click.echo(context.get_help())


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """Run the command line and end the process.

    Exit codes: 0 done; 1 the job ran but a stated requirement is not met; 2 the input or the options cannot be used;
    130 interrupted.
    """
    sys.exit(_run(list(sys.argv[1:] if arguments is None else arguments)))


def _run(arguments: list[str]) -> int:
    _quieten_libraries()
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="backslashreplace")  # names from a drawing may not fit the terminal's encoding
    try:
        result = _invoke(arguments)
        sys.stdout.flush()
    except click.UsageError as error:
        where = error.ctx.command_path if error.ctx is not None else "fairbatten"
        return _fail(f"{error.format_message().rstrip('.')}; see `{where} --help`")
    except click.ClickException as error:
        return _fail(error.format_message())
    except (ConverterError, GeometryError) as error:
        return _fail(str(error))
    except (click.Abort, KeyboardInterrupt):
        _say("interrupted")
        return 130
    except BrokenPipeError:  # the reader of our output has gone: nothing is wrong, and nobody is left to tell
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except MemoryError:
        return _fail("the drawing is too large for the memory of this machine; split it")
    except OSError as error:
        return _fail(f"{error.filename or 'the system'}: {error.strerror or error}; check the path and its permissions")
    except Exception as error:
        if os.environ.get("FAIRBATTEN_TRACEBACK"):
            raise
        kind = type(error).__name__
        return _fail(f"a fault of this program ({kind}: {error}); please report it; FAIRBATTEN_TRACEBACK=1 shows where")
    return result if isinstance(result, int) else 0


def _invoke(arguments: list[str]) -> Any:
    """Return what the command returns; unlike click's own `main` this hides no error of the system."""
    try:
        with cli.make_context("fairbatten", arguments) as context:
            return cli.invoke(context)
    except click.exceptions.Exit as stop:  # after --help and --version
        return stop.exit_code


def _quieten_libraries() -> None:
    """Keep the drawing library's notes off the screen: what matters of them is in our own warnings."""
    import logging

    logging.getLogger("ezdxf").addHandler(logging.NullHandler())
    logging.getLogger("ezdxf").propagate = False


def _fail(message: str) -> int:
    _say(f"error: {message}")
    return _UNUSABLE


def _say(line: str) -> None:
    print(" ".join(line.split()), file=sys.stderr)
