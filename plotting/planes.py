"""Posterior and profile likelihood side by side on a plane."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from scanfit.results import Axis
from scanfit.statistics.credible import CredibleRegion, credible_region
from scanfit.statistics.levels import LEVELS, likelihood_threshold
from scanfit.statistics.profile import SHOWN, Profile, profile
from scanfit.statistics.scale import bounds, from_scale, to_scale

from .material import Material
from .style import BEST_FIT, COLOURS, FULL_WIDTH, MEAN, marker_handle, new_figure, ramp, set_axis, tint


@dataclass(frozen=True)
class PlaneData:
    """Numbers behind one plane.

    Parameters
    ----------
    axes : pair of Axis
        Horizontal and vertical.
    posterior : CredibleRegion
        Of the first explorer.
    others : mapping of str to CredibleRegion
        Of the other explorers.
    profile : Profile
        Best archived point in each cell.
    best_fit, mean : pair of float
        Coordinates in declared units; the mean is taken on the axis' scale.
    limits : pair of (low, high)
        Window in declared units.
    """

    axes: tuple[Axis, Axis]
    posterior: CredibleRegion
    others: Mapping[str, CredibleRegion]
    profile: Profile
    best_fit: tuple[float, float]
    mean: tuple[float, float]
    limits: tuple[tuple[float, float], tuple[float, float]]


def plane_data(material: Material, x: str, y: str) -> PlaneData | None:
    """Compute a plane; None where the posterior or the archive has no extent on it."""
    axes = (material.axes[x], material.axes[y])
    regions: dict[str, CredibleRegion | None] = {
        explorer: credible_region(
            frame[x].to_numpy(dtype=float), frame[y].to_numpy(dtype=float), frame["weight"].to_numpy(dtype=float), axes
        )
        for explorer, frame in material.posteriors.items()
    }
    first, *rest = regions
    posterior, cells = regions[first], profile(material.points, axes, material.archive)
    if posterior is None or cells is None:
        return None
    weights = material.posterior["weight"].to_numpy(dtype=float)
    coordinates = []
    for name, axis in zip((x, y), axes, strict=True):
        scaled = to_scale(material.posterior[name].to_numpy(dtype=float), axis)
        shown = np.isfinite(scaled)
        mean = np.average(scaled[shown], weights=weights[shown])
        coordinates.append(float(from_scale(np.array(mean), axis)))
    found = [region for region in regions.values() if region is not None]
    return PlaneData(
        axes=axes,
        posterior=posterior,
        others={name: region for name in rest if (region := regions[name]) is not None},
        profile=cells,
        best_fit=(material.best_fit(x), material.best_fit(y)),
        mean=(coordinates[0], coordinates[1]),
        limits=(_limits(found, cells, 0), _limits(found, cells, 1)),
    )


def _limits(regions: Sequence[CredibleRegion], cells: Profile, direction: int) -> tuple[float, float]:
    """Window that holds the credible regions and the profile region of the higher level, with a margin."""
    axis = cells.axes[direction]
    held = [cells.places[direction][cells.two_delta <= likelihood_threshold(LEVELS["95"], 2) + 2.0]]
    for region in regions:
        inside = region.density.height >= region.heights["95"]
        held.append(region.density.centres[direction][np.any(inside, axis=1 - direction)])
    low, high = min(places.min() for places in held), max(places.max() for places in held)
    margin = 0.07 * (high - low)
    floor, ceiling = bounds(axis)
    ends = from_scale(np.array([max(floor, low - margin), min(ceiling, high + margin)]), axis)
    return float(ends[0]), float(ends[1])


def draw_plane(data: PlaneData, footnote: str = "") -> Figure:
    """Draw posterior regions on the left and profile-likelihood regions on the right, in one window."""
    figure = new_figure(FULL_WIDTH, 3.95, footnote)
    left, right = figure.subplots(1, 2, sharex=True, sharey=True)
    for axes in (left, right):
        set_axis(axes, "x", data.axes[0], data.limits[0])
        set_axis(axes, "y", data.axes[1], data.limits[1])
        axes.scatter(*data.best_fit, **BEST_FIT)
        axes.scatter(*data.mean, **MEAN)
    right.set_ylabel("")
    left.set_title("Posterior")
    right.set_title("Profile likelihood")
    _fill_credible(left, data)
    _fill_profile(right, data.profile, figure)
    _legend(figure, data)
    return figure


def outline(axes: Axes, region: CredibleRegion, scale: tuple[Axis, Axis], **line: Any) -> None:
    """Draw the boundaries of the credible regions."""
    x, y = (from_scale(centre, axis) for centre, axis in zip(region.density.centres, scale, strict=True))
    heights = sorted(region.heights.values())
    axes.contour(x, y, region.density.height.T, levels=heights, **line)


def _fill_credible(axes: Axes, data: PlaneData) -> None:
    region, colour = data.posterior, COLOURS["posterior"]
    x, y = (from_scale(centre, axis) for centre, axis in zip(region.density.centres, data.axes, strict=True))
    heights = [region.heights["95"], region.heights["68"], float(region.density.height.max()) * 1.001]
    axes.contourf(x, y, region.density.height.T, levels=heights, colors=[tint(colour, 0.3), tint(colour, 0.72)])
    outline(axes, region, data.axes, colors=[colour], linewidths=0.8)
    for other in data.others.values():
        outline(axes, other, data.axes, colors=[COLOURS["other explorer"]], linewidths=1.1, linestyles="--")


def _fill_profile(axes: Axes, cells: Profile, figure: Figure) -> None:
    x, y = (from_scale(edge, axis) for edge, axis in zip(cells.grid.edges, cells.axes, strict=True))
    shade = np.ma.masked_invalid(cells.two_delta.T)
    shade = np.ma.masked_greater(shade, SHOWN)
    mesh = axes.pcolormesh(x, y, shade, cmap=ramp(COLOURS["profile"]), vmin=0.0, vmax=SHOWN, rasterized=True)
    middle = [from_scale(centre, axis) for centre, axis in zip(cells.grid.centres, cells.axes, strict=True)]
    filled = np.where(np.isnan(cells.two_delta), 1e3, cells.two_delta).T
    thresholds = [likelihood_threshold(level, 2) for level in LEVELS.values()]
    axes.contour(*middle, filled, levels=thresholds, colors=["#5c2500"], linewidths=[1.1, 0.8], linestyles=["-", "--"])
    bar = figure.colorbar(mesh, ax=axes, pad=0.02, aspect=28)
    bar.set_label(r"$-2\,\Delta\ln L$", fontsize=9.5)
    bar.ax.tick_params(direction="out", right=True, left=False)
    for threshold, style in zip(thresholds, ("-", "--"), strict=True):
        bar.ax.axhline(threshold, color="#5c2500", linewidth=1.0, linestyle=style)


def _legend(figure: Figure, data: PlaneData) -> None:
    posterior = COLOURS["posterior"]
    handles: list[object] = [
        Patch(facecolor=tint(posterior, 0.72), edgecolor=posterior, linewidth=0.8, label="68 % credible"),
        Patch(facecolor=tint(posterior, 0.3), edgecolor=posterior, linewidth=0.8, label="95 % credible"),
    ]
    handles += [
        Line2D([], [], color="#5c2500", linewidth=1.1, label="68 % profile"),
        Line2D([], [], color="#5c2500", linewidth=0.8, linestyle="--", label="95 % profile"),
        marker_handle(BEST_FIT, "best fit"),
        marker_handle(MEAN, "posterior mean"),
    ]
    handles += [
        Line2D([], [], color=COLOURS["other explorer"], linestyle="--", linewidth=1.1, label=f"credible, {name}")
        for name in data.others
    ]
    figure.legend(handles=handles, loc="outside upper center", ncols=4, handlelength=1.6, columnspacing=1.8)
