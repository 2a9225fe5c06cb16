"""Posterior density and profile likelihood of each free parameter, one panel each."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from scanfit.priors import FloatArray, Prior
from scanfit.results import Axis
from scanfit.statistics.credible import inside_intervals, marginal_density
from scanfit.statistics.density import Density
from scanfit.statistics.levels import LEVELS
from scanfit.statistics.profile import Profile, profile
from scanfit.statistics.scale import from_scale

from .material import Material, free_priors
from .style import COLOURS, FULL_WIDTH, new_figure, set_axis, tint

_ACROSS = 3


@dataclass(frozen=True)
class MarginalData:
    """Numbers behind one panel.

    Parameters
    ----------
    axis : Axis
        The parameter.
    density : Density
        Posterior density on the axis' scale.
    profile : Profile
        Best archived point in each cell.
    prior : ndarray
        Prior density at the density's cell centres, on the axis' scale.
    best_fit : float
        In declared units.
    """

    axis: Axis
    density: Density
    profile: Profile
    prior: FloatArray
    best_fit: float


def marginal_data(material: Material, names: Sequence[str]) -> list[MarginalData]:
    """Compute the panels; parameters without extent are left out."""
    weights = material.posterior["weight"].to_numpy(dtype=float)
    priors = free_priors(material.run)
    panels = []
    for name in names:
        axis = material.axes[name]
        density = marginal_density(material.posterior[name].to_numpy(dtype=float), weights, axis)
        curve = profile(material.points, (axis,), material.archive)
        if density is not None and curve is not None:
            prior = prior_density(priors[name], axis, density.centres[0])
            panels.append(MarginalData(axis, density, curve, prior, material.best_fit(name)))
    return panels


def prior_density(prior: Prior, axis: Axis, scaled: FloatArray) -> FloatArray:
    """Prior density per unit of the axis' scale at points on that scale."""
    # A bound may be missed by rounding on the way to the scale and back.
    values = np.clip(from_scale(scaled, axis), *prior.support)
    density = np.exp([prior.log_density(float(value)) for value in values])
    return density * values * math.log(10.0) if axis.scale == "log" else density


def draw_marginals(panels: Sequence[MarginalData], footnote: str = "") -> Figure:
    """Draw all panels, both curves relative to their maximum."""
    down = math.ceil(len(panels) / _ACROSS)
    figure = new_figure(FULL_WIDTH, 2.25 * down + 0.55, footnote)
    grid = figure.subplots(down, _ACROSS, squeeze=False, sharey=True)
    for axes, panel in zip(grid.flat, panels, strict=False):
        _draw_panel(axes, panel)
    for axes in grid.flat[len(panels) :]:
        axes.set_visible(False)
    for row in grid:
        row[0].set_ylabel("relative to maximum")
    posterior, curve = COLOURS["posterior"], COLOURS["profile"]
    handles = [
        Patch(facecolor=tint(posterior, 0.6), edgecolor=posterior, label="posterior, 68 %"),
        Patch(facecolor=tint(posterior, 0.25), edgecolor=posterior, label="posterior, 95 %"),
        Line2D([], [], color=curve, marker=".", markersize=4, label="profile likelihood"),
        Line2D([], [], color=COLOURS["prior"], linestyle=":", label="prior"),
        Line2D([], [], color=COLOURS["mark"], linewidth=0.9, label="best fit"),
    ]
    figure.legend(handles=handles, loc="outside upper center", ncols=len(handles), handlelength=1.6, columnspacing=1.5)
    return figure


def _draw_panel(axes: Axes, panel: MarginalData) -> None:
    axis, density, colour = panel.axis, panel.density, COLOURS["posterior"]
    grid, peak = from_scale(density.centres[0], axis), float(density.height.max())
    places = from_scale(panel.profile.places[0], axis)
    filled = np.isfinite(places)
    low = min(grid[0], places[filled].min())
    high = max(grid[-1], places[filled].max())
    set_axis(axes, "x", axis, (float(low), float(high)))
    axes.set_ylim(0.0, 1.09)
    for level, strength in (("95", 0.25), ("68", 0.6)):
        inside = inside_intervals(density, LEVELS[level])
        axes.fill_between(grid, density.height / peak, where=inside.tolist(), color=tint(colour, strength), linewidth=0)
    axes.plot(grid, density.height / peak, color=colour)
    axes.plot(grid, panel.prior / peak, color=COLOURS["prior"], linestyle=":", linewidth=1.2)
    relative = np.exp(-0.5 * panel.profile.two_delta)
    # A gap in the line is an empty cell.
    axes.plot(places, relative, color=COLOURS["profile"], marker=".", markersize=3.0, linewidth=1.1)
    axes.axvline(panel.best_fit, color=COLOURS["mark"], linewidth=0.9)
