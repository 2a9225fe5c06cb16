"""``scanfit point --show NAME``: what a prediction can tell beyond a row of the archive, printed, drawn and written."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd
from rich.console import Console

from scanfit import plugins
from scanfit.cli.printing import table
from scanfit.contracts import Detail, Detailed, Prediction
from scanfit.errors import InputError, Problem

_MOST_ROWS: Final = 24
"""Rows of a table that people get to see unless the detail chooses them; JSON and files hold all."""


def find_details(prediction: Prediction, names: Sequence[str]) -> dict[str, Detail]:
    """Work out details by name.

    Raises
    ------
    InputError
        If the prediction has no detail of a name.
    """
    choices = tuple(prediction.details) if isinstance(prediction, Detailed) else ()
    unknown = [name for name in names if name not in choices]
    if unknown:
        rule = "the model has no detail of this name" if choices else "the model has no details to show"
        raise InputError([Problem("--show", rule, name, choices) for name in unknown], "point")
    return {name: prediction.detail(name) for name in names} if isinstance(prediction, Detailed) else {}


def print_detail(screen: Console, detail: Detail) -> None:
    """Print one detail for people."""
    rows = [[quantity.name, value, quantity.unit, quantity.description] for quantity, value in detail.numbers]
    screen.print()
    screen.print(table(detail.title, ["", "value", "unit", ""], rows))
    if detail.curves:
        headings = [f"{item.name} [{item.unit}]" if item.unit else item.name for item, _ in detail.curves]
        length = len(detail.curves[0][1])
        spread = np.linspace(0, length - 1, min(length, _MOST_ROWS)).round().astype(int).tolist()
        columns = [values[list(detail.rows or spread)].tolist() for _, values in detail.curves]
        screen.print()
        screen.print(table("", headings, [list(row) for row in zip(*columns, strict=True)]))
    for note in detail.notes:
        screen.print(note, highlight=False, soft_wrap=True)


def detail_as_json(detail: Detail) -> dict[str, Any]:
    """Everything in a detail as plain values."""
    return {
        "title": detail.title,
        "numbers": {
            quantity.name: {"value": value, "unit": quantity.unit, "description": quantity.description}
            for quantity, value in detail.numbers
        },
        "curves": {
            quantity.name: {"unit": quantity.unit, "description": quantity.description, "values": values.tolist()}
            for quantity, values in detail.curves
        },
        "notes": list(detail.notes),
    }


def write_detail(name: str, detail: Detail, folder: Path) -> list[Path]:
    """Write the curves as a table and, where a plug-in draws this detail, the figure; return the files.

    Raises
    ------
    InputError
        If the folder cannot be written to.
    """
    if not detail.curves:
        return []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        written = [folder / f"{name}.csv"]
        pd.DataFrame({quantity.name: values for quantity, values in detail.curves}).to_csv(written[0], index=False)
        drawings = plugins.installed("drawings")
        if name in drawings:
            written += drawings[name].load()(detail, folder / name)
    except OSError as error:
        raise InputError([Problem("--out", f"cannot be written: {error.strerror}", str(folder))], "point") from None
    return written
