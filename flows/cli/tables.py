"""The printed tables of the commands: one look, 80 columns, no boxes."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text

WIDTH = 80


def console() -> Console:
    """A console for standard output: 80 columns where it is no terminal, at most 100 where it is."""
    screen = Console(highlight=False, soft_wrap=False)
    width = min(screen.width, 100) if screen.is_terminal else WIDTH
    return Console(highlight=False, soft_wrap=False, width=width)


def plain_table(headings: Sequence[tuple[str, str]], rows: Iterable[Sequence[str]]) -> Table:
    """A table with a thin rule under its head, where any column has a name.

    Parameters
    ----------
    headings
        Name and justification (`left` or `right`) of each column.
    rows
        Texts; each may run over several lines. They come from files and are printed as they stand.
    """
    named = any(name for name, _ in headings)
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1), show_edge=False, show_header=named)
    for name, justify in headings:
        table.add_column(name, justify="right" if justify == "right" else "left", overflow="fold")
    for row in rows:
        table.add_row(*(Text(cell) for cell in row))
    return table


def heading(screen: Console, text: str) -> None:
    """A line that opens a part of the output."""
    screen.print()
    screen.print(Text(text, style="bold"))
    screen.print()
