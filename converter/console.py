"""Tables for people: drawn by rich on a terminal, plain aligned text everywhere else."""

import sys
from collections.abc import Sequence

__all__ = ["print_table"]


def print_table(headings: Sequence[str], rows: Sequence[Sequence[str]], right: Sequence[str] = ()) -> None:
    """Print a table to standard output.

    Args:
        headings: of the columns.
        rows: cells, as many in each row as there are headings.
        right: headings of the columns whose cells stand at the right.
    """
    if sys.stdout.isatty():
        _print_rich(headings, rows, right)
        return
    widths = [max(len(cell) for cell in column) for column in zip(headings, *rows, strict=True)]
    for row in (headings, *rows):
        cells = [
            cell.rjust(width) if heading in right else cell.ljust(width)
            for cell, width, heading in zip(row, widths, headings, strict=True)
        ]
        print("  ".join(cells).rstrip())


def _print_rich(headings: Sequence[str], rows: Sequence[Sequence[str]], right: Sequence[str]) -> None:
    from rich import box
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for heading in headings:
        table.add_column(heading, justify="right" if heading in right else "left")
    for row in rows:
        table.add_row(*(Text(cell) for cell in row))  # as text: names may hold what rich takes for markup
    Console().print(table)
