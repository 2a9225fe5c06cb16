"""How every figure looks: fonts, sizes, and colours with one meaning each.

Nothing here touches matplotlib's global settings: figures are drawn and saved inside ``with figure_style():``.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from types import MappingProxyType
from typing import Any, Final

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap, to_rgb
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine
from matplotlib.lines import Line2D
from matplotlib.ticker import LogFormatterSciNotation

from scanfit.results import Axis

# The hues are a published set that colour-blind readers can tell apart: Nature Methods 8 (2011) 441.
COLOURS: Final = MappingProxyType(
    {
        "posterior": "#0072B2",
        "profile": "#D55E00",
        "other explorer": "#009E73",
        "prior": "#7A7A7A",
        "mark": "#111111",
        "warning": "#9A3412",
    }
)
"""Colour by role."""

TERM_COLOURS: Final = ("#E69F00", "#56B4E9", "#CC79A7", "#009E73", "#F0E442", "#0072B2", "#D55E00", "#999999")
TERM_HATCHES: Final = ("////", "....", "\\\\\\\\", "xxxx", "----", "||||", "++++", "oooo")
"""Colour and hatch of the terms in their order: the hatch carries the meaning where colour cannot."""
UNDECIDED_COLOUR: Final = "#E9E9E4"

_SUPERSCRIPTS: Final = "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"
_LOWERED: Final = str.maketrans(_SUPERSCRIPTS, "-0123456789")

FULL_WIDTH: Final = 7.1
"""Width of a figure across a page, inches."""

BEST_FIT: Final[Mapping[str, Any]] = MappingProxyType(
    {"marker": "P", "s": 62, "facecolor": "white", "edgecolor": "#111111", "linewidth": 1.0, "zorder": 6}
)
MEAN: Final[Mapping[str, Any]] = MappingProxyType(
    {"marker": "D", "s": 30, "facecolor": "#111111", "edgecolor": "white", "linewidth": 0.8, "zorder": 6}
)
"""Markers of the best fit and of the posterior mean, as keywords of `Axes.scatter`."""

_SETTINGS: Final[dict[str, Any]] = {
    "font.family": "STIXGeneral",
    "mathtext.fontset": "stix",
    "font.size": 10.0,
    "axes.labelsize": 11.0,
    "axes.titlesize": 10.5,
    "legend.fontsize": 8.8,
    "xtick.labelsize": 9.0,
    "ytick.labelsize": 9.0,
    "axes.linewidth": 0.7,
    "axes.edgecolor": "#333333",
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.major.width": 0.7,
    "ytick.major.width": 0.7,
    "xtick.minor.width": 0.5,
    "ytick.minor.width": 0.5,
    "lines.linewidth": 1.4,
    "legend.frameon": False,
    "hatch.linewidth": 0.5,
    "figure.dpi": 100.0,
    "savefig.dpi": 200.0,
    "pdf.fonttype": 42,
    "axes.formatter.use_mathtext": True,
    "axes.unicode_minus": True,
}


@contextmanager
def figure_style() -> Iterator[None]:
    """Draw and save with scanfit's settings; whatever was set before comes back afterwards."""
    # Start from the library's defaults, so that a user's own matplotlibrc does not shine through; backends stay alone.
    settings: dict[Any, Any] = {key: mpl.rcParamsDefault[key] for key in mpl.rcParamsDefault if "backend" not in key}
    settings.update(_SETTINGS)
    with mpl.rc_context(settings):
        yield


def new_figure(width: float, height: float, footnote: str = "", **spacing: float) -> Figure:
    """Make an empty figure that lays itself out and keeps a strip for a footnote.

    Parameters
    ----------
    width, height : float
        Inches.
    footnote : str
        Small print at the bottom, of one or more lines: what a reader of the bare figure must know.
    spacing : float
        Keywords of matplotlib's `ConstrainedLayoutEngine`.
    """
    lines = footnote.splitlines()
    strip = (0.045 + 0.125 * len(lines)) / height if lines else 0.0
    options: dict[str, Any] = {"rect": (0.0, strip, 1.0, 1.0 - strip), **spacing}
    engine = ConstrainedLayoutEngine(**options)
    figure = Figure(figsize=(width, height), layout=engine)
    for number, line in enumerate(reversed(lines)):
        figure.text(
            0.012, (0.05 + 0.125 * number) / height, line,
            fontsize=7.5, style="italic", color=COLOURS["warning"], va="bottom",
        )  # fmt: skip
    return figure


class PlainLogFormatter(LogFormatterSciNotation):
    """Powers of ten, but plain numbers from 0.001 to 9999."""

    def __call__(self, x: float, pos: int | None = None) -> str:
        text = super().__call__(x, pos)
        return f"{x:g}" if text and 1e-3 <= x < 1e4 else text


def set_axis(axes: Axes, direction: str, axis: Axis, limits: tuple[float, float] | None = None) -> None:
    """Give one direction ("x" or "y") its scale, label and limits in declared units."""
    axes.set(**{f"{direction}scale": axis.scale, f"{direction}label": _raised(axis.label)})
    if axis.scale == "log":
        side = axes.xaxis if direction == "x" else axes.yaxis
        side.set_major_formatter(PlainLogFormatter())
        side.set_minor_formatter(PlainLogFormatter(labelOnlyBase=False, minor_thresholds=(1.5, 0.5)))
    if limits is not None:
        axes.set(**{f"{direction}lim": limits})


def _raised(label: str) -> str:
    """Superscripts as mathematics: the text font draws ² and ³ bold."""
    return re.sub(f"[{_SUPERSCRIPTS}]+", lambda found: f"$^{{{found[0].translate(_LOWERED)}}}$", label)


def tint(colour: str, strength: float) -> tuple[float, float, float]:
    """Mix a colour with white; strength 1 is the colour itself."""
    red, green, blue = (1.0 - strength * (1.0 - part) for part in to_rgb(colour))
    return red, green, blue


def ramp(colour: str) -> LinearSegmentedColormap:
    """Colour map from the full colour to almost white."""
    return LinearSegmentedColormap.from_list("ramp", [tint(colour, s) for s in (1.0, 0.62, 0.34, 0.16, 0.05)])


def marker_handle(style: Mapping[str, Any], label: str) -> Line2D:
    """Legend entry of one of the markers above."""
    return Line2D(
        [],
        [],
        linestyle="",
        marker=style["marker"],
        markersize=float(style["s"]) ** 0.5,
        markerfacecolor=style["facecolor"],
        markeredgecolor=style["edgecolor"],
        label=label,
    )
