"""What one collider search alone excludes in a plane, as a figure."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import Final, Literal

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from scanfit.contracts import ExclusionPlane, Quantity
from scanfit.priors import FloatArray

from .style import COLOURS, figure_style, new_figure, tint

_SMALLEST: Final = 1e-8
"""CLs below which nothing more is to be seen; keeps the logarithm finite."""

_LINE_OF_NOTES: Final = 94
"""Characters that fit across the figure."""


def draw_exclusion_plane(plane: ExclusionPlane, stem: Path, level: float = 0.95) -> list[Path]:
    """Draw the observed line (solid, excluded side shaded) and the median expected one (dashed); save PNG and PDF.

    Parameters
    ----------
    plane : ExclusionPlane
        What to show.
    stem : Path
        Of the files; ``.png`` and ``.pdf`` are added.
    level : float
        Confidence level of the lines.

    Returns
    -------
    list of Path
        The files.
    """
    notes = (f"CLs of this search alone; {plane.fixed}", *plane.caveats)
    lines = [line for note in notes for line in textwrap.wrap(note, _LINE_OF_NOTES)]
    with figure_style():
        figure = new_figure(5.2, 4.0 + 0.125 * len(lines), "\n".join(lines))
        axes = figure.add_subplot()
        colour = COLOURS["profile"]
        observed, expected = (_excess(values, level) for values in (plane.observed, plane.expected))
        handles: list[Line2D | Patch] = []
        if np.any(observed > 0.0):
            axes.contourf(plane.x_values, plane.y_values, observed, levels=[0.0, np.inf], colors=[tint(colour, 0.18)])
        if _crosses(observed):
            axes.contour(plane.x_values, plane.y_values, observed, levels=[0.0], colors=[colour], linewidths=1.8)
            handles.append(Line2D([], [], color=colour, linewidth=1.8, label="observed"))
        if _crosses(expected):
            axes.contour(plane.x_values, plane.y_values, expected, levels=[0.0], colors=[COLOURS["mark"]],
                         linestyles=["dashed"], linewidths=1.3)  # fmt: skip
            handles.append(
                Line2D([], [], color=COLOURS["mark"], linestyle="--", linewidth=1.3, label="expected, median")
            )
        if not _crosses(observed):
            much = "everything" if np.any(observed > 0.0) else "nothing"
            axes.text(0.5, 0.5, f"{much} on this plane is excluded at {100 * level:g} %", ha="center",
                      transform=axes.transAxes)  # fmt: skip
        if np.isnan(plane.observed).any():
            axes.contourf(plane.x_values, plane.y_values, np.isnan(plane.observed).astype(float),
                          levels=[0.5, 1.5], colors="none", hatches=["///"])  # fmt: skip
            handles.append(Patch(facecolor="none", edgecolor=COLOURS["prior"], hatch="///", label="not covered"))
        _on_shell_line(axes, plane)
        axes.set(xlabel=_label(plane.x), ylabel=_label(plane.y), xscale=_scale(plane.x_values),
                 yscale=_scale(plane.y_values))  # fmt: skip
        axes.set_xlim(plane.x_values[0], plane.x_values[-1])
        axes.set_ylim(plane.y_values[0], plane.y_values[-1])
        axes.set_title(plane.title)
        if handles:
            axes.legend(handles=handles, title=f"excluded at {100 * level:g} %", alignment="left",
                        loc=_emptier_corner(observed), frameon=True, edgecolor="none")  # fmt: skip
        png, pdf = (stem.with_name(f"{stem.name}.{kind}") for kind in ("png", "pdf"))
        # Neither date nor version: equal results are equal bytes.
        figure.savefig(png, metadata={"Software": None})
        figure.savefig(pdf, metadata={"CreationDate": None, "Creator": None, "Producer": None})
    return [png, pdf]


def _excess(confidence: FloatArray, level: float) -> FloatArray:
    """Positive where a point is excluded; smooth across the line."""
    return np.asarray(np.log(1.0 - level) - np.log(np.maximum(confidence, _SMALLEST)))


def _crosses(excess: FloatArray) -> bool:
    return bool(np.nanmin(excess) < 0.0 < np.nanmax(excess)) if not np.isnan(excess).all() else False


def _emptier_corner(excess: FloatArray) -> Literal["upper left", "lower right"]:
    """Place of the legend: the corner of the two off the diagonal in which less is excluded."""
    rows, columns = (size // 2 for size in excess.shape)
    upper_left, lower_right = (excess[rows:, :columns] > 0.0).mean(), (excess[:rows, columns:] > 0.0).mean()
    return "upper left" if upper_left <= lower_right else "lower right"


def _on_shell_line(axes: Axes, plane: ExclusionPlane) -> None:
    """Where the mediator is just heavy enough for a pair of dark-matter particles."""
    if (plane.x.name, plane.y.name) != ("mediator_mass", "mass"):
        return
    x = np.array([plane.x_values[0], plane.x_values[-1]])
    axes.plot(x, 0.5 * x, color=COLOURS["prior"], linewidth=0.8, linestyle=":")
    place = 0.75 * min(float(x[1]), 2.0 * float(plane.y_values[-1]))
    axes.annotate("$2 m_\\chi = M$", (place, 0.5 * place), xytext=(3, -10), textcoords="offset points", fontsize=8,
                  color=COLOURS["prior"])  # fmt: skip


def _label(quantity: Quantity) -> str:
    name = quantity.description or quantity.name
    return f"{name} {quantity.label}"


def _scale(values: FloatArray) -> str:
    """Logarithmic where the values are spaced so."""
    steps = np.diff(values)
    return "log" if len(values) > 2 and steps[-1] > 1.5 * steps[0] else "linear"
