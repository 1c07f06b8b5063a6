"""How tables are laid out in a terminal of any width."""

from __future__ import annotations

from collections.abc import Sequence

from rich import box
from rich.console import Console, ConsoleOptions
from rich.measure import Measurement
from rich.table import Table


def figure_table(columns: Sequence[str], figures: Sequence[str] = (), unbroken: Sequence[str] = ()) -> Table:
    """Return an empty table; columns named in `figures` are flush right, those and `unbroken` ones never wrap."""
    table = Table(box=box.SIMPLE_HEAD, show_edge=False, pad_edge=False, padding=(0, 1, 0, 0))
    for column in columns:
        if column in figures:
            table.add_column(column, justify="right", no_wrap=True)
        elif column in unbroken:
            table.add_column(column, no_wrap=True, overflow="ignore")
        else:
            longest = max(map(len, column.split()), default=0)
            table.add_column(column, overflow="fold", min_width=longest)
    return table


def label_table() -> Table:
    """Return an empty table of labels and texts, which wrap beside them."""
    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    table.add_column(no_wrap=True, style="bold")
    table.add_column(ratio=1)
    return table


def fits(table: Table, console: Console, options: ConsoleOptions) -> bool:
    """Whether the table can be shown without wrapping a cell."""
    unlimited = options.update(max_width=10_000)
    return Measurement.get(console, unlimited, table).maximum <= options.max_width
