"""How a candidate froze out: yield and thermal average against x = m/T."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from scanfit.contracts import Detail, Quantity
from scanfit.priors import FloatArray

from .style import COLOURS, PlainLogFormatter, figure_style, new_figure

Columns = Mapping[str, tuple[Quantity, FloatArray]]

_LAST_X: Final = 1e4
"""Hardly anything happens later; the table has it all."""
_BELOW: Final = 1e-3
"""How far below the final yield the axis reaches."""


def thermal_columns(detail: Detail) -> Columns:
    """Curves of a thermal history by name, up to the x that the figure shows."""
    x = detail.curves[0][1]
    shown = x <= _LAST_X
    return {quantity.name: (quantity, values[shown]) for quantity, values in detail.curves}


def draw_thermal(detail: Detail, stem: Path) -> list[Path]:
    """Draw the detail ``thermal`` and write it as PNG and PDF.

    Parameters
    ----------
    detail : Detail
        With the curves ``x``, ``yield``, ``equilibrium_yield`` and ``sigma_v``, and the number ``x_freeze_out``.
    stem : Path
        Path of the files without their suffix.

    Returns
    -------
    list of Path
        What was written.
    """
    with figure_style():
        figure = thermal_figure(detail)
        files = [stem.with_name(f"{stem.name}.{kind}") for kind in ("png", "pdf")]
        for file in files:
            figure.savefig(file)
    return files


def thermal_figure(detail: Detail) -> Figure:
    """Build the figure; to be used inside `figure_style`."""
    numbers = {quantity.name: value for quantity, value in detail.numbers}
    columns = thermal_columns(detail)
    figure = new_figure(5.2, 5.0)
    upper, lower = figure.subplots(2, 1, sharex=True, height_ratios=(1.9, 1.0))
    _draw_yield(upper, columns)
    _draw_average(lower, columns)
    x_f = numbers["x_freeze_out"]
    for axes in (upper, lower):
        axes.axvline(x_f, color=COLOURS["mark"], linewidth=0.8, linestyle=(0, (1, 2)))
        axes.set_xscale("log")
    label = rf"$x_f = {x_f:.1f}$" + "\n" + rf"$T_f = {numbers['freeze_out_temperature']:.3g}$ GeV"
    upper.annotate(label, (x_f, 0.97), (6, 0), upper.get_xaxis_transform(), "offset points", va="top", fontsize=9.0)
    lower.set(xlabel=columns["x"][0].label, xlim=(1.0, _LAST_X))
    lower.xaxis.set_major_formatter(PlainLogFormatter())
    upper.set_title(rf"$\Omega h^2 = {numbers['omega_h2']:.4g}$", loc="left")
    return figure


def _draw_yield(axes: Axes, columns: Columns) -> None:
    x, (_, number), (_, equilibrium) = columns["x"][1], columns["yield"], columns["equilibrium_yield"]
    axes.plot(x, number, color=COLOURS["posterior"], linewidth=1.8, label="yield $Y = n/s$")
    positive = equilibrium > 0.0
    axes.plot(
        x[positive],
        equilibrium[positive],
        color=COLOURS["profile"],
        linestyle="--",
        label=r"in equilibrium, $Y_\mathrm{eq}$",
    )
    axes.set(yscale="log", ylabel="number density / entropy density", ylim=(_BELOW * number[-1], 3.0 * number[0]))
    axes.legend(loc="upper right")


def _draw_average(axes: Axes, columns: Columns) -> None:
    x, (quantity, average) = columns["x"][1], columns["sigma_v"]
    axes.plot(x, average, color=COLOURS["posterior"])
    low, high = float(np.min(average)), float(np.max(average))
    if low > 0.0 and high > 3.0 * low:
        axes.set(yscale="log", ylim=(0.5 * low, 2.0 * high))
    else:
        axes.set_ylim(0.0, 1.25 * high)
    axes.set_ylabel(quantity.label)
