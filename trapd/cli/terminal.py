"""Words and tables for people: coloured and wrapped in a terminal, plain and unwrapped anywhere else.

Colour never says anything that the words do not. NO_COLOR is honoured (by rich, which is imported only here).
"""

from __future__ import annotations

import sys
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Literal

import click

if TYPE_CHECKING:
    from rich.console import Console

_UNWRAPPED = 10_000
_LEAST = 20
"""Columns that a cell of text needs to be read; a narrower one is no table any more."""

_GAP = 2

GOOD, BAD, CAREFUL, STRONG, FAINT = "green", "bold red", "yellow", "bold", "dim"


def is_terminal() -> bool:
    return sys.stdout.isatty()


def console() -> Console:
    from rich.console import Console

    width = None if is_terminal() else _UNWRAPPED
    return Console(highlight=False, markup=False, emoji=False, width=width)


def say(*parts: str | tuple[str, str], indent: int = 0) -> None:
    """One paragraph of pieces, each plain or with its style; wrapped lines keep the indent."""
    if not (parts and is_terminal()):
        click.echo(" " * indent + "".join(part if isinstance(part, str) else part[0] for part in parts))
        return
    from rich.padding import Padding
    from rich.text import Text

    console().print(Padding(Text.assemble(*parts), (0, 0, 0, indent), expand=False))


def table(columns: Sequence[str], rows: Iterable[Sequence[str]], *, indent: int = 0, wrapping: int = 1) -> None:
    """Aligned columns under their headings, ">" before one for numbers that stand right.

    The last ``wrapping`` columns wrap when the terminal is narrow. Where that is not enough each cell is a line of its own:
    nothing is ever cut off.
    """
    screen, rows = console(), list(rows)
    if rows and indent + _needed(columns, rows, wrapping) > screen.width:
        _show_upright(columns, rows, indent)
        return
    from rich.padding import Padding
    from rich.table import Table

    grid = Table(box=None, pad_edge=False, padding=(0, _GAP, 0, 0), header_style=STRONG)
    for index, heading in enumerate(columns):
        side: Literal["left", "right"] = "right" if heading.startswith(">") else "left"
        kept = index < len(columns) - wrapping
        grid.add_column(heading.removeprefix(">"), justify=side, no_wrap=kept, overflow="fold")
    for row in rows:
        grid.add_row(*row)
    with screen.capture() as drawn:
        screen.print(Padding(grid, (0, 0, 0, indent), expand=False))
    for line in drawn.get().splitlines():
        click.echo(line.rstrip())


def _needed(columns: Sequence[str], rows: Sequence[Sequence[str]], wrapping: int) -> int:
    """The least width at which no number is broken and text can be read."""
    cells = [
        [heading.removeprefix(">"), *column] for heading, column in zip(columns, zip(*rows, strict=True), strict=True)
    ]
    fixed = len(columns) - wrapping
    widths = [max(map(len, column)) for column in cells[:fixed]] + [_least(column) for column in cells[fixed:]]
    return sum(widths) + _GAP * (len(widths) - 1)


def _least(column: Sequence[str]) -> int:
    natural, word = max(map(len, column)), max(len(word) for cell in column for word in [*cell.split(), ""])
    return min(natural, _LEAST) if natural > 2 * _LEAST else min(word, 2 * _LEAST)


def _show_upright(columns: Sequence[str], rows: Sequence[Sequence[str]], indent: int) -> None:
    headings = [heading.removeprefix(">") for heading in columns]
    widest = max(map(len, headings))
    for number, row in enumerate(rows):
        if number:
            say()
        for heading, cell in zip(headings, row, strict=True):
            if cell:
                say((f"{heading:<{widest}}  ", STRONG), cell, indent=indent)
