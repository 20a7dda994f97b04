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

GOOD, BAD, CAREFUL, STRONG, FAINT = "green", "bold red", "yellow", "bold", "dim"


def is_terminal() -> bool:
    return sys.stdout.isatty()


def console() -> Console:
    from rich.console import Console

    width = None if is_terminal() else _UNWRAPPED
    return Console(highlight=False, markup=False, emoji=False, width=width)


def say(*parts: str | tuple[str, str], indent: int = 0) -> None:
    """One paragraph of pieces, each plain or with its style; wrapped lines keep the indent."""
    if not is_terminal():
        click.echo(" " * indent + "".join(part if isinstance(part, str) else part[0] for part in parts))
        return
    from rich.padding import Padding
    from rich.text import Text

    console().print(Padding(Text.assemble(*parts), (0, 0, 0, indent), expand=False))


def table(columns: Sequence[str], rows: Iterable[Sequence[str]], *, indent: int = 0, wrapping: int = 1) -> None:
    """Aligned columns under their headings, ">" before one for numbers that stand right.

    The last ``wrapping`` columns wrap when the terminal is narrow.
    """
    from rich.padding import Padding
    from rich.table import Table

    grid = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style=STRONG)
    for index, heading in enumerate(columns):
        side: Literal["left", "right"] = "right" if heading.startswith(">") else "left"
        grid.add_column(heading.removeprefix(">"), justify=side, no_wrap=index < len(columns) - wrapping)
    for row in rows:
        grid.add_row(*row)
    screen = console()
    with screen.capture() as drawn:
        screen.print(Padding(grid, (0, 0, 0, indent), expand=False))
    for line in drawn.get().splitlines():
        click.echo(line.rstrip())
