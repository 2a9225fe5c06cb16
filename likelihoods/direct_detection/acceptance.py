"""How a detector sees a recoil: efficiency, quenching, resolution and bins, on a fine grid of true energies."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np
from scipy.special import ndtr

from scanfit.priors import FloatArray

if TYPE_CHECKING:
    from .experiment import Experiment

WIDTHS_KEPT: Final = 6.0
"""Standard deviations of the resolution beyond which no recoil reaches a bin."""
_MOST_PANELS: Final = 2000


@dataclass(frozen=True)
class Acceptance:
    """Quadrature over true recoil energies.

    Parameters
    ----------
    energy : ndarray, shape (n,)
        True recoil energies in keV, ascending.
    weights : ndarray, shape (n, n_bins)
        Multiply a spectrum in events per tonne-year and keV by these and sum: expected events in each bin. For event
        energies a column gives expected events per keV of measured energy instead.
    """

    energy: FloatArray
    weights: FloatArray


def acceptance(experiment: Experiment, intervals: FloatArray | None = None) -> Acceptance:
    """Acceptance of the experiment's bins, or of other intervals of measured energy, shape (n_bins, 2)."""
    if intervals is None:
        intervals = np.array(experiment.intervals_kev)
    energy, weight = _fine_quadrature(experiment, intervals)
    seen = experiment.visible_energy(energy)
    lows, highs = intervals[None, :, 0], intervals[None, :, 1]
    if experiment.resolution.perfect:
        probability = np.asarray((seen[:, None] >= lows) & (seen[:, None] < highs), dtype=float)
    else:
        width = np.maximum(experiment.resolution.width(seen), 1e-12)[:, None]
        probability = ndtr((highs - seen[:, None]) / width) - ndtr((lows - seen[:, None]) / width)
    weights = probability * (experiment.exposure_tonne_year * weight * experiment.efficiency.at(energy))[:, None]
    return Acceptance(energy, np.asarray(weights))


def event_acceptance(experiment: Experiment, events: FloatArray, window: tuple[float, float]) -> Acceptance:
    """Acceptance at measured energies `events`, shape (n_events,), and, in a last column, of the whole window.

    Without resolution each event's energy is followed back to the one true energy that it can have.
    """
    whole = acceptance(experiment, np.array([window]))
    energy = whole.energy
    if experiment.resolution.perfect:
        true = experiment.true_energy(events)
        step = 1e-4 * np.maximum(true, 1e-3)
        slope = (experiment.visible_energy(true + step) - experiment.visible_energy(true - step)) / (2.0 * step)
        weights = np.zeros((energy.size + true.size, events.size + 1))
        weights[: energy.size, -1] = whole.weights[:, 0]
        own = experiment.exposure_tonne_year * experiment.efficiency.at(true) / slope
        weights[energy.size + np.arange(true.size), np.arange(true.size)] = own
        order = np.argsort(np.concatenate([energy, true]), kind="stable")
        return Acceptance(np.concatenate([energy, true])[order], weights[order])
    fine, weight = _fine_quadrature(experiment, np.array([window]))
    seen = experiment.visible_energy(fine)
    width = np.maximum(experiment.resolution.width(seen), 1e-12)[:, None]
    pulls = (events[None, :] - seen[:, None]) / width
    gauss = np.exp(-0.5 * pulls**2) / (np.sqrt(2.0 * np.pi) * width)
    density = gauss * (experiment.exposure_tonne_year * weight * experiment.efficiency.at(fine))[:, None]
    return Acceptance(fine, np.hstack([density, whole.weights]))


def _fine_quadrature(experiment: Experiment, intervals: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes in keV of true energy and weights, split wherever the acceptance bends."""
    efficiency, resolution = experiment.efficiency, experiment.resolution
    edges = np.unique(intervals)
    margins = WIDTHS_KEPT * resolution.width(edges)
    # The width grows with the energy: measure it where the margin ends, not where it begins.
    margins = WIDTHS_KEPT * resolution.width(edges + margins)
    lowest, highest = experiment.true_energy(np.array([np.min(edges - margins), np.max(edges + margins)]))
    first, last = experiment.accepted_kev
    low, high = max(float(lowest), first), min(float(highest), last)
    low = min(low, 0.999 * high)
    steps = np.linspace(-WIDTHS_KEPT, WIDTHS_KEPT, 13)
    around_edges = (edges[:, None] + steps[None, :] * resolution.width(edges)[:, None]).ravel()
    # Panels, the largest twice the mean, must not be wider than the narrowest Gaussian that they integrate.
    narrowest = float(resolution.width(np.array([max(edges[0], 0.0)]))[0])
    panels = 200 if narrowest == 0.0 else int(np.clip(2.0 * (high - low) / narrowest, 200, _MOST_PANELS))
    regular = low + (high - low) * np.linspace(0.0, 1.0, panels + 1) ** 2
    bends = experiment.true_energy(np.concatenate([edges, around_edges[around_edges > 0.0]]))
    cuts = np.concatenate([bends, efficiency.bends_kev, regular])
    cuts = np.unique(cuts[(cuts >= low) & (cuts <= high)])
    abscissae, weights = np.polynomial.legendre.leggauss(4)
    half = 0.5 * np.diff(cuts)[:, None]
    middle = 0.5 * (cuts[1:] + cuts[:-1])[:, None]
    return (middle + half * abscissae).ravel(), (half * weights).ravel()
