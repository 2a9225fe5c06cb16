"""How each explorer came to rest, from the curves that it recorded."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import EngFormatter

from scanfit.priors import FloatArray

from .style import COLOURS, FULL_WIDTH, new_figure

Curves = Mapping[str, FloatArray]

_MOST_POINTS: Final = 1500
"""Points drawn a curve; longer ones are thinned."""


def panels(history: Curves) -> list[Callable[[Axes], None]]:
    """Choose what can be drawn from the curves that are there; unknown names are passed over.

    Parameters
    ----------
    history : mapping of str to ndarray
        As from `Run.history`: ``calls`` and any of ``autocorrelation_time``, ``chain_length``, ``r_hat``,
        ``log_evidence``, ``log_likelihood`` with ``log_prior_volume``, ``efficiency``; each of shape (m,) or (m, k).
    """
    curves = {name: _thinned(values) for name, values in history.items()}
    chosen: list[Callable[[Axes], None]] = []
    calls = curves.get("calls")
    against_calls: tuple[tuple[str, str, float | None], ...] = (
        ("autocorrelation_time", "autocorrelation time [steps]", None),
        ("chain_length", "length [autocorrelation times]", None),
        ("r_hat", r"$\hat{R} - 1$ between ensembles", 0.01),
        ("log_evidence", r"$\ln Z$", None),
        ("efficiency", "efficiency", None),
    )
    for name, label, reference in against_calls:
        values = curves.get(name)
        if calls is not None and values is not None and len(values) == len(calls) and np.isfinite(values).any():
            chosen.append(_against_calls(name, calls, values, label, reference))
    volume, likelihood = curves.get("log_prior_volume"), curves.get("log_likelihood")
    if volume is not None and likelihood is not None and len(volume) == len(likelihood):
        chosen.append(_likelihood_panel(volume, likelihood))
    return chosen


def draw_convergence(history: Curves, footnote: str = "") -> Figure | None:
    """Draw the curves of one explorer side by side; None where there is nothing to draw."""
    chosen = panels(history)
    if not chosen:
        return None
    figure = new_figure(min(FULL_WIDTH, 3.5 * len(chosen)), 2.75, footnote)
    for axes, draw in zip(figure.subplots(1, len(chosen), squeeze=False)[0], chosen, strict=True):
        draw(axes)
    return figure


def _against_calls(
    name: str, calls: FloatArray, values: FloatArray, label: str, reference: float | None
) -> Callable[[Axes], None]:
    def draw(axes: Axes) -> None:
        # Some curves start from nothing, at -1e300 or at 1 exactly, which no axis can show.
        shown = np.maximum(values - 1.0, 1e-5) if name == "r_hat" else np.maximum(values, np.nanmax(values) - 1e5)
        columns = shown[:, np.newaxis] if shown.ndim == 1 else shown
        many = columns.shape[1] > 1
        if many:
            axes.plot(calls, columns, color=COLOURS["posterior"], alpha=0.45, linewidth=0.9)
            axes.plot(calls, np.fmax.reduce(columns, axis=1), color=COLOURS["mark"], linewidth=1.5)
            axes.set_title("black: the worst", fontsize=8.5)
        else:
            axes.plot(calls, columns, color=COLOURS["posterior"])
        if name == "r_hat":
            axes.set_yscale("log")
        elif name == "log_evidence":
            # The first steps lie far below and would flatten the approach to the end.
            finite = columns[np.isfinite(columns)]
            last = float(finite[-1])
            axes.set_ylim(max(float(finite.min()), last - 12.0), last + 1.0)
        else:
            axes.set_ylim(bottom=0.0)
        if reference is not None:
            axes.axhline(reference, color=COLOURS["prior"], linestyle=":", linewidth=1.0)
        axes.set(xlabel="likelihood calls", ylabel=label)
        axes.xaxis.set_major_formatter(EngFormatter(sep=""))
        axes.locator_params(axis="x", nbins=4)

    return draw


def _likelihood_panel(volume: FloatArray, likelihood: FloatArray) -> Callable[[Axes], None]:
    def draw(axes: Axes) -> None:
        known = np.isfinite(volume) & np.isfinite(likelihood)
        x, y = volume[known], likelihood[known]
        if len(y):
            axes.plot(-x, np.maximum(y, y.max() - 1e5), color=COLOURS["posterior"])
            # The start of a run climbs from arbitrarily bad points; what matters is the end.
            axes.set_ylim(max(float(y.min()), float(y.max()) - 40.0), float(y.max()) + 2.0)
            mass = np.exp(y - y.max() + x - (x[np.argmax(y + x)]))
            twin = axes.twinx()
            twin.fill_between(-x, mass / mass.max(), color=COLOURS["profile"], alpha=0.25, linewidth=0)
            twin.set(ylim=(0.0, 1.05), yticks=[])
            axes.set_title("shaded: share of the evidence", fontsize=8.5)
        axes.set(xlabel=r"$-\ln$ prior volume", ylabel=r"$\ln L$")

    return draw


def _thinned(values: FloatArray) -> FloatArray:
    step = max(1, -(-len(values) // _MOST_POINTS))
    return values if step == 1 else np.concatenate([values[:-1:step], values[-1:]])
