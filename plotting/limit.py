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
    strip = 0.125 * len(lines) + (0.08 if lines else 0.0)
    height = 4.4 + strip
    figure = new_figure(FULL_WIDTH, height, rect=(0.0, strip / height, 1.0, 1.0 - strip / height))  # type: ignore[arg-type]
    axes = figure.subplots()
    x, colour = curve.x_values, COLOURS["posterior"]
    if curve.bands is not None:
        # A band that is infinite on one side has no edge to draw.
        shown = [np.where(np.isfinite(band), band, np.nan) for band in curve.bands.T]
        axes.fill_between(x, shown[0], shown[4], color=tint(colour, 0.22), linewidth=0.0, label="expected, 95 %")
        axes.fill_between(x, shown[1], shown[3], color=tint(colour, 0.5), linewidth=0.0, label="expected, 68 %")
        axes.plot(x, shown[2], color=colour, linestyle="--", label="expected, median")
    if curve.observed is not None:
        observed = np.where(np.isfinite(curve.observed), curve.observed, np.nan)
        axes.plot(x, observed, color=COLOURS["mark"], linewidth=1.8, label="observed")
    set_axis(axes, "x", _axis(curve.x), (float(x.min()), float(x.max())))
    set_axis(axes, "y", _axis(curve.y), _window(curve))
    axes.set_title(f"{curve.title}: upper limits at {100.0 * curve.level:g} %")
    axes.legend(loc="best")
    for number, line in enumerate(reversed(lines)):
        figure.text(
            0.012, (0.05 + 0.125 * number) / height, line,
            fontsize=7.5, style="italic", color=COLOURS["warning"], va="bottom",
        )  # fmt: skip
    return figure


def _axis(quantity: Quantity) -> Axis:
    return Axis(quantity.name, quantity.label, quantity.scale)


def _window(curve: LimitCurve) -> tuple[float, float] | None:
    """A logarithmic axis shows at most five decades above the best limit: where a search goes blind, limits explode."""
    drawn = [values for values in (curve.observed, curve.bands) if values is not None]
    finite = np.concatenate([np.ravel(values)[np.isfinite(np.ravel(values))] for values in drawn])
    if finite.size == 0 or curve.y.scale != "log":
        return None
    low, high = float(finite.min()), float(finite.max())
    return 0.6 * low, min(1.6 * high, 1e5 * low)
