"""Tables and JSON on standard output."""

import json
from collections.abc import Iterable, Sequence

import typer
from rich.console import Console
from rich.table import Table
from rich.text import Text


def print_table(columns: Sequence[str], rows: Iterable[Sequence[object]], styles: Sequence[str] = ()) -> None:
    """Print a table.

    Args:
        columns: headings.
        rows: the cells of each row, in the columns' order.
        styles: a colour for each row; none of them where it is empty.

    """
    table = Table(box=None, pad_edge=False)
    for column in columns:
        table.add_column(column, overflow="fold")
    for number, row in enumerate(rows):
        table.add_row(*(Text(str(cell)) for cell in row), style=styles[number] if styles else None)
    Console().print(table)


def print_json(value: object) -> None:
    """Print a value as JSON."""
    typer.echo(json.dumps(value, indent=2, ensure_ascii=False))
