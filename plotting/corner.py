"""Posterior of all free parameters, two at a time, with the same regions as everywhere else."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from scanfit.statistics.credible import CredibleRegion, credible_region, inside_intervals, marginal_density
from scanfit.statistics.density import Density
from scanfit.statistics.levels import LEVELS
from scanfit.statistics.scale import to_scale

from .material import Material
from .style import COLOURS, new_figure, tint

MOST: Final = 8
"""Parameters shown at most; model parameters come first."""
_PANEL: Final = 1.3
"""Side of a panel, inches."""


@dataclass(frozen=True)
class CornerData:
    """Numbers behind the corner plot.

    Parameters
    ----------
    names, labels : sequence of str
        Columns, and their axis labels; logarithmic axes are shown as log10.
    densities : sequence of Density
        One a parameter, on the scale of its axis.
    regions : mapping of (int, int) to CredibleRegion or None
        By the places of the horizontal and the vertical parameter in `names`.
    best_fit : sequence of float
        On the scale of the axes.
    left_out : sequence of str
        Free parameters that there was no room for, or that have no extent.
    """

    names: Sequence[str]
    labels: Sequence[str]
    densities: Sequence[Density]
    regions: Mapping[tuple[int, int], CredibleRegion | None]
    best_fit: Sequence[float]
    left_out: Sequence[str]


def corner_data(material: Material) -> CornerData | None:
    """Estimate all densities; None where fewer than two parameters have extent."""
    run, posterior = material.run, material.posterior
    ordered = [*run.model_names, *(name for name in run.free_names if name not in run.model_names)]
    weights = posterior["weight"].to_numpy(dtype=float)
    columns = {name: posterior[name].to_numpy(dtype=float) for name in ordered[:MOST]}
    found = {name: marginal_density(column, weights, material.axes[name]) for name, column in columns.items()}
    densities = {name: density for name, density in found.items() if density is not None}
    if len(densities) < 2:
        return None
    names = list(densities)
    items = {item["name"]: item for item in run.summary["parameters"]}
    regions = {
        (x, y): credible_region(
            columns[names[x]],
            columns[names[y]],
            weights,
            (material.axes[names[x]], material.axes[names[y]]),
        )
        for x, y in itertools.combinations(range(len(names)), 2)
    }
    return CornerData(
        names=names,
        labels=[_label(items[name]) for name in names],
        densities=list(densities.values()),
        regions=regions,
        best_fit=[float(to_scale(np.array(material.best_fit(name)), material.axes[name])) for name in names],
        left_out=[name for name in ordered if name not in densities],
    )


def _label(item: dict[str, Any]) -> str:
    if item["scale"] == "linear":
        return str(item["label"])
    symbol = f"${item['symbol']}$" if item["symbol"] else item["name"].replace("_", " ")
    return r"$\log_{10}\,$" + (f"({symbol}/{item['unit']})" if item["unit"] else symbol)


def draw_corner(data: CornerData, footnote: str = "") -> Figure:
    """Draw densities on the diagonal and 68 and 95 % regions below it; lines mark the best fit."""
    size = len(data.names)
    side = 0.7 + _PANEL * size
    figure = new_figure(side, side, footnote, w_pad=0.02, h_pad=0.02, hspace=0.0, wspace=0.0)
    grid = figure.subplots(size, size, squeeze=False, sharex="col")
    for (row, column), axes in np.ndenumerate(grid):
        if column > row:
            axes.set_visible(False)
            continue
        density = data.densities[column]
        axes.set_xlim(density.edges[0][0], density.edges[0][-1])
        axes.axvline(data.best_fit[column], color=COLOURS["mark"], linewidth=0.7)
        if column == row:
            _draw_density(axes, density)
        else:
            axes.set_ylim(data.densities[row].edges[0][0], data.densities[row].edges[0][-1])
            axes.axhline(data.best_fit[row], color=COLOURS["mark"], linewidth=0.7)
            _draw_region(axes, data.regions[column, row])
        _label_panel(axes, data, row, column)
    figure.align_labels()
    colour = COLOURS["posterior"]
    handles = [
        Patch(facecolor=tint(colour, 0.72), edgecolor=colour, linewidth=0.8, label="68 % credible"),
        Patch(facecolor=tint(colour, 0.3), edgecolor=colour, linewidth=0.8, label="95 % credible"),
        Line2D([], [], color=COLOURS["mark"], linewidth=0.7, label="best fit"),
    ]
    figure.legend(handles=handles, loc="upper right", bbox_to_anchor=(0.98, 0.98), handlelength=1.6)
    return figure


def _draw_density(axes: Axes, density: Density) -> None:
    colour, x = COLOURS["posterior"], density.centres[0]
    for level, strength in (("95", 0.3), ("68", 0.72)):
        inside = inside_intervals(density, LEVELS[level])
        axes.fill_between(x, density.height, where=inside.tolist(), color=tint(colour, strength), linewidth=0)
    axes.plot(x, density.height, color=colour, linewidth=1.0)
    axes.set_ylim(0.0, 1.1 * float(density.height.max()))


def _draw_region(axes: Axes, region: CredibleRegion | None) -> None:
    if region is None:
        return
    colour, height = COLOURS["posterior"], region.density.height.T
    levels = [region.heights["95"], region.heights["68"], float(height.max()) * 1.001]
    axes.contourf(*region.density.centres, height, levels=levels, colors=[tint(colour, 0.3), tint(colour, 0.72)])
    axes.contour(*region.density.centres, height, levels=levels[:2], colors=[colour], linewidths=0.6)


def _label_panel(axes: Axes, data: CornerData, row: int, column: int) -> None:
    axes.tick_params(labelsize=7.5, labelrotation=0)
    axes.xaxis.set_major_locator(MaxNLocator(3, prune="both"))
    if row == column:
        axes.set_yticks([])
    else:
        axes.yaxis.set_major_locator(MaxNLocator(3, prune="both"))
    if row == len(data.names) - 1:
        axes.set_xlabel(data.labels[column], fontsize=9.5)
    else:
        axes.tick_params(labelbottom=False)
    if column == 0 and row > 0:
        axes.set_ylabel(data.labels[row], fontsize=9.5)
    else:
        axes.tick_params(labelleft=False)
