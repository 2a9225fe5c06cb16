"""Tables and numbers for people, JSON for programs."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from typing import Any

import click
from rich.console import Console
from rich.markup import escape
from rich.table import Table

_WIDTH_OF_A_FILE = 160


def number(value: Any) -> str:
    """Four significant digits; a dash for what does not exist."""
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return "-"
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def table(title: str, columns: Sequence[str], rows: Sequence[Sequence[Any]]) -> Table:
    """A plain table: first column left, the others right unless they hold words."""
    made = Table(
        title=escape(title), title_justify="left", title_style="bold", box=None, pad_edge=False, padding=(0, 2)
    )
    for index, column in enumerate(columns):
        words = index == 0 or any(isinstance(row[index], str) for row in rows)
        # Brackets hold units here, not styles.
        made.add_column(escape(column), justify="left" if words else "right", style=None, header_style="dim")
    for row in rows:
        made.add_row(*(escape(item) if isinstance(item, str) else number(item) for item in row))
    return made


def print_json(value: Mapping[str, Any]) -> None:
    """Standard JSON: what is not finite becomes null."""
    click.echo(json.dumps(_finite(value), indent=2, ensure_ascii=False))


def console(stderr: bool = False) -> Console:
    """A console on standard output or standard error; lines in a file or a pipe may be long."""
    made = Console(stderr=stderr)
    return made if made.is_terminal else Console(stderr=stderr, width=_WIDTH_OF_A_FILE)


def _finite(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
