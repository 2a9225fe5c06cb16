"""Upper limits of one search alone: observed, and expected without a signal."""

from __future__ import annotations

import textwrap
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from scanfit.contracts import LimitCurve, Quantity
from scanfit.results import Axis

from .style import COLOURS, FULL_WIDTH, figure_style, new_figure, set_axis, tint

_LINE_OF_CAVEATS = 130
_LINE_OF_TITLE = 90
"""Characters that fit across the figure."""


def draw_limit(curve: LimitCurve, stem: Path) -> list[Path]:
    """Draw `curve` and save it as PNG and PDF.

    Parameters
    ----------
    curve : LimitCurve
        What to draw.
    stem : Path
        Path of the files without their endings.

    Returns
    -------
    list of Path
        The files.
    """
    with figure_style():
        figure = limit_figure(curve)
        paths = [stem.with_name(stem.name + ending) for ending in (".png", ".pdf")]
        for path in paths:
            # Without a date, equal curves give equal bytes.
            figure.savefig(path, metadata={"CreationDate": None} if path.suffix == ".pdf" else {})
    return paths


def limit_figure(curve: LimitCurve) -> Figure:
    """Observed limit solid, median expectation dashed, 68 and 95 % bands; the caveats stand below."""
    lines = [line for caveat in curve.caveats for line in textwrap.wrap(caveat, _LINE_OF_CAVEATS)]
    figure = new_figure(FULL_WIDTH, 4.4 + 0.125 * len(lines), "\n".join(lines))
    axes = figure.subplots()
    x, colour, window = curve.x_values, COLOURS["posterior"], _window(curve)
    if curve.bands is not None:
        median = np.where(np.isfinite(curve.bands[:, 2]), curve.bands[:, 2], np.nan)
        # Edges that become infinite leave the figure at its top.
        edges = np.minimum(curve.bands, 10.0 * window[1] if window else 1.0).T
        axes.fill_between(x, edges[0], edges[4], color=tint(colour, 0.22), linewidth=0.0, label="expected, 95 %")
        axes.fill_between(x, edges[1], edges[3], color=tint(colour, 0.5), linewidth=0.0, label="expected, 68 %")
        axes.plot(x, median, color=colour, linestyle="--", label="expected, median")
    if curve.observed is not None:
        observed = np.where(np.isfinite(curve.observed), curve.observed, np.nan)
        axes.plot(x, observed, color=COLOURS["mark"], linewidth=1.8, label="observed")
    set_axis(axes, "x", _axis(curve.x), (float(x.min()), float(x.max())))
    set_axis(axes, "y", _axis(curve.y), window)
    parts = curve.title.split(": ", 1) if len(curve.title) > _LINE_OF_TITLE else [curve.title]
    axes.set_title("\n".join(textwrap.fill(part, _LINE_OF_TITLE) for part in parts))
    axes.legend(loc="best", title=f"upper limits at {100.0 * curve.level:g} %", alignment="left")
    return figure


def _axis(quantity: Quantity) -> Axis:
    return Axis(quantity.name, quantity.label, quantity.scale)


def _window(curve: LimitCurve) -> tuple[float, float] | None:
    """A logarithmic axis shows at most five decades above the best limit: where a search goes blind, limits explode."""
    drawn = [values for values in (curve.observed, curve.bands) if values is not None]
    finite = np.concatenate([np.ravel(values)[np.isfinite(np.ravel(values))] for values in drawn])
    if finite.size == 0:
        return None
    low, high = float(finite.min()), float(finite.max())
    if curve.y.scale != "log":
        return min(low, 0.0), 1.05 * high
    return 0.6 * low, min(1.6 * high, 1e5 * low)
