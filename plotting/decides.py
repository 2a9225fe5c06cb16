"""Map of the search that decides in each cell of a plane."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, PathPatch
from matplotlib.path import Path as Outline
from numpy.typing import NDArray

from scanfit.priors import FloatArray
from scanfit.statistics.credible import CredibleRegion, credible_region
from scanfit.statistics.decides import NOTHING, DecisionMap, decision_map
from scanfit.statistics.scale import from_scale

from .material import Material
from .planes import outline
from .style import (
    BEST_FIT,
    FULL_WIDTH,
    TERM_COLOURS,
    TERM_HATCHES,
    UNDECIDED_COLOUR,
    marker_handle,
    new_figure,
    set_axis,
    tint,
)


@dataclass(frozen=True)
class DecidesData:
    """Numbers behind the map.

    Parameters
    ----------
    decisions : DecisionMap
        Deciding term of each cell.
    posterior : CredibleRegion or None
        Drawn on top, to show where the posterior lies.
    best_fit : pair of float
        Coordinates in declared units.
    """

    decisions: DecisionMap
    posterior: CredibleRegion | None
    best_fit: tuple[float, float]

    def share(self, code: int) -> float:
        """Share of the explored cells that the term with this index decides."""
        explored = np.isfinite(self.decisions.two_delta) | np.isposinf(self.decisions.two_delta)
        return float(np.mean(self.decisions.decider[explored] == code))


def decides_data(material: Material, x: str, y: str) -> DecidesData | None:
    """Compute the map over everything explored; None where the archive has no extent on the plane."""
    axes = (material.axes[x], material.axes[y])
    decisions = decision_map(material.points, axes, material.archive)
    if decisions is None:
        return None
    across, upward, weights = (material.posterior[name].to_numpy(dtype=float) for name in (x, y, "weight"))
    region = credible_region(across, upward, weights, axes)
    return DecidesData(decisions, region, (material.best_fit(x), material.best_fit(y)))


def draw_decides(data: DecidesData, footnote: str = "") -> Figure:
    """Draw cells in the colour and hatch of their deciding term; white cells hold no point."""
    figure = new_figure(FULL_WIDTH, 4.1, footnote)
    axes = figure.subplots()
    decisions = data.decisions
    edges = [from_scale(edge, axis) for edge, axis in zip(decisions.grid.edges, decisions.axes, strict=True)]
    for direction, axis, edge in zip("xy", decisions.axes, edges, strict=True):
        set_axis(axes, direction, axis, (float(edge[0]), float(edge[-1])))
    handles: list[Artist] = [_fill(axes, edges, decisions.decider == NOTHING, UNDECIDED_COLOUR, "", "nothing decides")]
    for code, term in enumerate(decisions.terms):
        style = code % len(TERM_COLOURS)
        chosen = decisions.decider == code
        handles.append(_fill(axes, edges, chosen, tint(TERM_COLOURS[style], 0.55), TERM_HATCHES[style], term))
    if data.posterior is not None:
        outline(axes, data.posterior, decisions.axes, colors=["#111111"], linewidths=[0.9, 1.5])
        handles.append(Line2D([], [], color="#111111", linewidth=1.3, label="posterior, 68 and 95 %"))
    axes.scatter(*data.best_fit, **BEST_FIT)
    handles.append(marker_handle(BEST_FIT, "best fit"))
    handles.append(Patch(facecolor="white", edgecolor="#BBBBBB", linewidth=0.6, label="not explored"))
    axes.legend(handles=handles, loc="center left", bbox_to_anchor=(1.01, 0.5), handlelength=2.2, handleheight=1.5)
    return figure


def _fill(
    axes: Axes,
    edges: list[FloatArray],
    chosen: NDArray[np.bool_],
    colour: str | tuple[float, float, float],
    hatch: str,
    label: str,
) -> Patch:
    """Fill the chosen cells as one shape, so that the hatch runs across cells, and return the legend's handle."""
    handle = Patch(facecolor=colour, edgecolor="#333333", hatch=hatch, linewidth=0.0, label=label)
    columns, rows = np.nonzero(chosen)
    if len(columns) == 0:
        return handle
    x, y = edges
    left, right, bottom, top = x[columns], x[columns + 1], y[rows], y[rows + 1]
    around = ((left, bottom), (right, bottom), (right, top), (left, top), (left, bottom))
    corners = np.stack([np.stack(corner, axis=-1) for corner in around], axis=1)
    codes = np.tile([Outline.MOVETO, Outline.LINETO, Outline.LINETO, Outline.LINETO, Outline.CLOSEPOLY], len(columns))
    shape = Outline(corners.reshape(-1, 2), codes)
    axes.add_patch(PathPatch(shape, facecolor=colour, edgecolor="#333333", hatch=hatch, linewidth=0.0))
    return handle
