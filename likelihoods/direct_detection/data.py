"""What an experiment saw, in the form in which likelihoods are computed.

Both kinds hold expected signal and background in *cells*. For binned counts the cells are the bins. For an event list
they are one vanishingly narrow bin around each event, with one count, and the rest of the window, with none: the
product of their Poisson probabilities is the extended likelihood exp(-s-b) prod_i (ds/dE + db/dE)(E_i), up to the
widths, whose logarithms are added back. So one treatment of uncertain backgrounds serves both.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final, Self, TypeAlias

import numpy as np

from scanfit.contracts import InnerNuisances
from scanfit.priors import FloatArray

from .acceptance import Acceptance, event_acceptance
from .counting import BinnedCounts
from .experiment import Experiment
from .folding import CountingResponse, cubic_stencil, fold, fold_spectrum
from .neutrinos import BORON8_FLUX, FLUXES, neutrino_rate
from .velocity_table import VelocityTable

SignalIn: TypeAlias = Callable[[CountingResponse], FloatArray]
"""Gives expected signal events in the cells of a response."""

_WIDTH: Final = 1e-9
"""Width in keV of the cell around an event: small beside any structure, large beside rounding."""
_GRID: Final = 401
"""Measured energies at which densities are tabulated; between them a cubic, good to 1e-5 with any usual resolution."""
_GROUP: Final = 10
"""Grid points in one bin of the expected data of an event list."""


@dataclass(frozen=True)
class Data:
    """Counts in cells, with everything that is expected there.

    Parameters
    ----------
    response : CountingResponse
        Gives the signal in the cells.
    counting : BinnedCounts
        Observed counts and background.
    neutrinos : ndarray, shape (2, n_cells)
        Expected events from boron-8 at its reference flux, and from all other neutrinos.
    offset : float
        What must be added to the logarithm of the likelihood of the cells.
    """

    response: CountingResponse
    counting: BinnedCounts
    neutrinos: FloatArray
    offset: float = 0.0

    def neutrino_events(self, boron8_flux: float) -> FloatArray:
        """Expected neutrino events in each cell; flux in 1e6 /cm^2/s."""
        return np.asarray(self.neutrinos[0] * (boron8_flux / BORON8_FLUX) + self.neutrinos[1])

    def log_likelihood(self, signal: FloatArray, boron8_flux: float) -> float:
        """Log-likelihood of a signal in the cells."""
        return self.counting.log_likelihood(signal + self.neutrino_events(boron8_flux)) + self.offset

    def draw(self, signal: SignalIn, boron8_flux: float, rng: np.random.Generator) -> Self:
        """Pseudo-data; backgrounds vary within their uncertainty."""
        counts = self.counting.draw(signal(self.response) + self.neutrino_events(boron8_flux), rng)
        return replace(self, counting=counts)

    def expected(self, signal: SignalIn, boron8_flux: float) -> Data:
        """Expected (Asimov) data."""
        counts = self.counting.asimov(signal(self.response) + self.neutrino_events(boron8_flux))
        return replace(self, counting=counts)

    def neutrinos_in_background(self) -> BinnedCounts:
        """Counts whose background holds the neutrinos, with uncertain fluxes to first order in their logarithm."""
        counting = self.counting
        if not self.neutrinos.any():
            return counting
        background = counting.background + self.neutrinos.sum(axis=0)
        share = np.divide(1.0, background, out=np.zeros_like(background), where=background > 0.0)
        others = [flux.uncertainty for name, flux in FLUXES.items() if name != "boron-8"]
        fluxes = self.neutrinos * np.array([[FLUXES["boron-8"].uncertainty], [max(others)]])
        columns = [counting.loading * (counting.background * share)[:, None]]
        columns += [(row * share)[:, None] for row in fluxes if row.any()]
        return replace(counting, background=background, loading=np.ascontiguousarray(np.hstack(columns)))


@dataclass(frozen=True)
class EventData(Data):
    """An event list; see the head of this module.

    Parameters
    ----------
    grid : EventGrid
        Densities from which the cells of any list follow.
    """

    grid: EventGrid | None = None

    def draw(self, signal: SignalIn, boron8_flux: float, rng: np.random.Generator) -> Self:
        """Pseudo-data with energies of their own."""
        assert self.grid is not None  # set wherever this class is made
        drawn = self.grid.holding(self.grid.draw(signal, boron8_flux, rng))
        return replace(self, response=drawn.response, counting=drawn.counting, neutrinos=drawn.neutrinos,
                       offset=drawn.offset)  # fmt: skip

    def expected(self, signal: SignalIn, boron8_flux: float) -> Data:
        """Expected data, in narrow bins."""
        assert self.grid is not None
        return self.grid.binned().expected(signal, boron8_flux)


@dataclass(frozen=True)
class EventGrid:
    """Densities over the measured energies of a window.

    Parameters
    ----------
    energies : ndarray, shape (n,)
        Measured energies in keV, evenly spaced over the window.
    response : CountingResponse
        Signal per keV at each of them, and in a last column in the whole window.
    background : ndarray, shape (n + 1,)
        Background alike.
    neutrinos : ndarray, shape (2, n + 1)
        Neutrinos alike; see `Data`.
    spread : float
        Standard deviation of the log of the background; zero where it is exact.
    treatment : {"marginal", "profile"}
        How that is removed.
    """

    energies: FloatArray
    response: CountingResponse
    background: FloatArray
    neutrinos: FloatArray
    spread: float
    treatment: InnerNuisances

    def holding(self, events: FloatArray) -> EventData:
        """Data of a list of measured energies in keV."""
        low, high = self.energies[0], self.energies[-1]
        first, weights = cubic_stencil((events - low) / (high - low), self.energies.size)

        def cells(densities: FloatArray) -> FloatArray:
            # Gather four neighbours: a product with a matrix would touch every energy of the grid.
            at_events = sum(densities[..., first + j] * (_WIDTH * weights[j]) for j in range(4))
            return np.ascontiguousarray(np.concatenate([at_events, densities[..., -1:]], axis=-1))

        observed = np.append(np.ones(events.size), 0.0)
        counting = BinnedCounts(
            observed, np.maximum(cells(self.background), 0.0), self._loading(observed.size), self.treatment
        )
        return EventData(
            response=replace(self.response, matrix=cells(self.response.matrix)),
            counting=counting,
            neutrinos=np.maximum(cells(self.neutrinos), 0.0),
            offset=-events.size * math.log(_WIDTH),
            grid=self,
        )

    def draw(self, signal: SignalIn, boron8_flux: float, rng: np.random.Generator) -> FloatArray:
        """Measured energies of pseudo-data."""
        varied = math.exp(self.spread * rng.standard_normal())
        neutrinos = self.neutrinos[0] * (boron8_flux / BORON8_FLUX) + self.neutrinos[1]
        expected = signal(self.response) + varied * self.background + neutrinos
        # The number follows the window's own integral, the energies the trapezia of the grid.
        count = rng.poisson(expected[-1])
        density = expected[:-1]
        cumulative = np.concatenate([[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]))])
        return np.asarray(np.interp(rng.random(count) * cumulative[-1], cumulative, self.energies))

    def binned(self) -> Data:
        """Data in narrow bins, without any count; the template of expected data."""
        step = self.energies[1] - self.energies[0]
        weights = np.full(self.energies.size, step)
        weights[[0, -1]] = 0.5 * step
        starts = np.arange(0, self.energies.size, _GROUP)

        def cells(densities: FloatArray) -> FloatArray:
            return np.asarray(np.add.reduceat(densities[..., :-1] * weights, starts, axis=-1))

        background = cells(self.background)
        counting = BinnedCounts(background, background, self._loading(starts.size), self.treatment)
        response = replace(self.response, matrix=np.ascontiguousarray(cells(self.response.matrix)))
        return Data(response, counting, cells(self.neutrinos))

    def _loading(self, cells: int) -> FloatArray:
        return np.full((cells, 1), self.spread) if self.spread > 0.0 else np.zeros((cells, 0))


def build_data(
    experiment: Experiment, treatment: InnerNuisances, velocities: VelocityTable | None = None
) -> Data | EventData:
    """Fold an experiment and take its data; a planned one holds its background-only expectation."""
    if experiment.bins is not None:
        response = fold(experiment, velocities=velocities)
        neutrinos = _neutrinos(experiment, lambda spectrum: fold_spectrum(experiment, spectrum))
        background = np.array(experiment.bins.background)
        observed = experiment.bins.observed
        counting = BinnedCounts(
            observed=background + neutrinos.sum(axis=0) if observed is None else np.array(observed, dtype=float),
            background=background,
            loading=experiment.background_loading(),
            treatment=treatment,
        )
        return Data(response, counting, neutrinos)
    events = experiment.events
    assert events is not None  # the schema holds that one of the two is there
    energies = np.linspace(*events.window_kev, _GRID)
    seen = event_acceptance(experiment, energies, events.window_kev)
    loading = experiment.background_loading()
    grid = EventGrid(
        energies=energies,
        response=fold(experiment, seen=seen, velocities=velocities),
        background=np.append(events.background_density(energies), events.background),
        neutrinos=_neutrinos(experiment, lambda spectrum: _densities(seen, spectrum)),
        spread=float(loading[0, 0]) if loading.size else 0.0,
        treatment=treatment,
    )
    if events.energies_kev is None:
        template = grid.binned()
        return template.expected(lambda response: np.zeros(template.counting.background.size), BORON8_FLUX)
    return grid.holding(np.array(events.energies_kev))


def _densities(seen: Acceptance, spectrum: Callable[[FloatArray], FloatArray]) -> FloatArray:
    return np.asarray(spectrum(seen.energy) @ seen.weights)


def _neutrinos(experiment: Experiment, seen: Callable[[Callable[[FloatArray], FloatArray]], FloatArray]) -> FloatArray:
    """Neutrinos in each cell: boron-8, and all others."""

    def rate(name: str) -> FloatArray:
        return seen(lambda energy: neutrino_rate(energy, experiment.target, name))  # type: ignore[arg-type]

    nothing = seen(lambda energy: np.zeros_like(energy))
    boron8 = rate("boron-8") if "boron-8" in experiment.neutrinos else nothing
    others = [rate(name) for name in sorted(set(experiment.neutrinos) - {"boron-8"})]
    return np.vstack([boron8, sum(others, nothing)])
