"""Errors of the converter: one line each that says what, where (file, handle, layer) and what to do.

The command line prints them as `error: ...` and ends with exit code 2.
"""

__all__ = [
    "ConverterError",
    "LengthError",
    "NoProfileError",
    "OutputError",
    "ReadError",
    "SettingsError",
    "VersionError",
]


class ConverterError(Exception):
    """Base of every error of the converter; its text is the whole message, on one line."""

    def __init__(self, message: str) -> None:
        line = " ".join(message.split())
        line = "".join(sign if sign.isprintable() else "?" for sign in line)  # pieces of damaged files get in here
        super().__init__(line)  # one plain argument, so the error can cross a process pool


class ReadError(ConverterError):
    """A file cannot be read as a drawing."""


class NoProfileError(ConverterError):
    """The drawing, or the chosen layers of it, hold no profile."""


class LengthError(ConverterError):
    """A length or a unit on the command line cannot be used."""


class SettingsError(ConverterError):
    """Settings contradict one another or are out of range."""


class OutputError(ConverterError):
    """An output cannot or must not be written."""


class VersionError(ConverterError):
    """A DXF version cannot express what is to be written."""
