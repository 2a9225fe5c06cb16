"""The direct-detection term: events that one experiment counted."""

from __future__ import annotations

import copy
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Self

import numpy as np

from scanfit.contracts import BuildContext, LimitCurve, Observable, Term
from scanfit.errors import MissingPrediction
from scanfit.priors import FloatArray
from scanfit.validation import Options

from .counting import BinnedCounts
from .data import Data, build_data
from .experiment import Experiment, read_experiment
from .folding import CountingResponse
from .halo import HALO_NUISANCES, Halo
from .isotopes import mass_fractions
from .neutrinos import BORON8_FLUX, BORON8_NUISANCE
from .sensitivity import CURVES, FLOOR, USUAL_LEVEL, LimitMethod, ideal_experiment, limit_curve
from .spin_dependent import lacks_structure, nuclear_spin
from .velocity_table import read_velocity_table

if TYPE_CHECKING:
    from ..candidate import Candidate


class DirectDetectionOptions(Options):
    """Keys of a direct-detection term in a run file."""

    data: str
    """Experiment file, relative to the run file; `experiment` describes it field by field."""
    velocities: str | None = None
    """File with a tabulated distribution of speeds, relative to the run file, in place of the Maxwellian;
    `velocity_table` describes it. The speeds of the Maxwellian are then no parameters."""
    limit_method: LimitMethod = "flat-prior"
    """How ``scanfit limit`` makes limits of this experiment alone; a scan does not use it. The last three of
    flat-prior, likelihood-ratio, classical, cls and unified are for a single bin."""


class DirectDetection(Term["Candidate"]):
    """Likelihood of the events that one experiment counted, in bins or one by one.

    Spin-independent and spin-dependent scattering with separate proton and neutron couplings, also where suppressed by
    momentum or velocity, in a halo whose parameters are shared with every other term that names them. The signal scales
    with the candidate's fraction of the dark matter. The background's uncertainty is profiled or marginalised as the
    run says; the flux of boron-8 neutrinos, where the experiment counts them, is a shared nuisance.

    Parameters
    ----------
    options : DirectDetectionOptions
        Which experiment.
    context : BuildContext
        Where the run file is, and how inner nuisances are treated.

    Raises
    ------
    InputError
        If a file is missing or breaks a rule.
    """

    Options = DirectDetectionOptions
    name = "direct-detection"
    summary = "events in a direct-detection experiment, in bins or one by one, with uncertain backgrounds"
    cost = 0.03
    nuisances = HALO_NUISANCES
    curves = CURVES

    def __init__(self, options: DirectDetectionOptions, context: BuildContext) -> None:
        path = context.folder / options.data
        self.experiment: Experiment = read_experiment(path)
        self.data_files = (path,)
        self.caveats = _caveats(self.experiment)
        self._limit_method = options.limit_method
        self._treatment = context.inner_nuisances
        velocities = None
        if options.velocities is not None:
            velocity_path = context.folder / options.velocities
            velocities = read_velocity_table(velocity_path)
            self.data_files = (path, velocity_path)
        self._maxwellian = velocities is None
        self._data: Data = build_data(self.experiment, context.inner_nuisances, velocities)
        halo = HALO_NUISANCES if self._maxwellian else (HALO_NUISANCES[0],)
        self.nuisances = (*halo, BORON8_NUISANCE) if "boron-8" in self.experiment.neutrinos else halo

    @property
    def counting(self) -> BinnedCounts:
        """Observed counts and background in bins, or in the cells of an event list (see `data`)."""
        return self._data.counting

    @property
    def response(self) -> CountingResponse:
        """The folded detector, which gives the signal in the same bins or cells."""
        return self._data.response

    def signal(self, candidate: Candidate, values: Mapping[str, float]) -> FloatArray:
        """Expected signal events in each bin, shape (n_bins,); for an event list see `data`.

        Raises
        ------
        MissingPrediction
            If the model says nothing about scattering on nucleons.
        """
        return self._signal_in(self._data.response, candidate, values)

    def _signal_in(self, response: CountingResponse, candidate: Candidate, values: Mapping[str, float]) -> FloatArray:
        if candidate.nucleon is None:
            raise MissingPrediction("scattering on nucleons")
        halo = Halo.from_values(values) if self._maxwellian else Halo(values["local_density"])
        return response.counts(candidate.mass, candidate.nucleon, halo) * candidate.dm_fraction

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        return self._data.log_likelihood(self.signal(prediction, values), values.get("boron8_flux", BORON8_FLUX))

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        signal = self.signal(prediction, values)
        counting, neutrinos = self._data.counting, self._data.neutrino_events(values.get("boron8_flux", BORON8_FLUX))
        best = counting.most_likely_background(signal + neutrinos)
        listed = counting.background.size != len(self.experiment.intervals_kev)
        if listed:
            # The last cell of a list is the whole window; expected data of a list are narrow bins.
            single = self._data.offset != 0.0 or counting.background.size == 1
            whole = slice(-1, None) if single else slice(None)
            signal, neutrinos, background, best = (
                np.array([array[whole].sum()]) for array in (signal, neutrinos, counting.background, best)
            )
            observed = np.array([counting.observed.sum()])
        else:
            background, observed = counting.background, counting.observed
        kind = "expected, not measured" if self.experiment.planned else ""
        lines = [
            Observable("signal events", float(signal.sum()), unit="events"),
            Observable("background events", float(background.sum()), unit="events"),
            Observable(
                "background events favoured by the data",
                float(best.sum()),
                unit="events",
                note="maximises the likelihood together with this signal",
            ),
        ]
        if self.experiment.neutrinos:
            lines.append(Observable("neutrino events", float(neutrinos.sum()), unit="events"))
        for index, (low, high) in enumerate(self.experiment.intervals_kev):
            lines.append(
                Observable(
                    f"events in {low:g}-{high:g} keV",
                    float(signal[index] + background[index] + neutrinos[index]),
                    observed=float(observed[index]),
                    unit="events",
                    note=", ".join(part for part in (f"signal {signal[index]:.3g}", kind) if part),
                )
            )
        return lines

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        flux = values.get("boron8_flux", BORON8_FLUX)
        return self._holding(self._data.draw(lambda cells: self._signal_in(cells, prediction, values), flux, rng))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        flux = values.get("boron8_flux", BORON8_FLUX)
        return self._holding(self._data.expected(lambda cells: self._signal_in(cells, prediction, values), flux))

    def limit_curve(
        self,
        curve: str,
        *,
        level: float | None = None,
        points: int = 40,
        pseudo_experiments: int = 200,
        rng: np.random.Generator | None = None,
    ) -> LimitCurve:
        floor = curve == FLOOR
        data, caveats = self._data, self.caveats
        if floor:
            ideal = ideal_experiment(self.experiment)
            data = build_data(ideal, self._treatment)
            caveats = (
                *(text for text in caveats if not text.endswith("background-only expectation")),
                "Floor: unit efficiency, perfect resolution, no background but neutrinos of all known sources",
                _rough_neutrinos(self.experiment.title),
            )
        return limit_curve(
            f"Neutrino floor of {self.experiment.title}" if floor else self.experiment.title,
            data,
            "si" if floor else curve,
            level=USUAL_LEVEL if level is None else level,
            points=points,
            pseudo_experiments=pseudo_experiments,
            rng=rng or np.random.default_rng(1),
            method="flat-prior" if floor else self._limit_method,
            observed=not (floor or self.experiment.planned),
            caveats=tuple(dict.fromkeys(caveats)),
        )

    def _holding(self, data: Data) -> Self:
        """The same term with other data; what is folded is shared, it never changes."""
        twin = copy.copy(self)
        twin._data = data
        return twin


def _caveats(experiment: Experiment) -> tuple[str, ...]:
    title = experiment.title
    caveats = []
    if experiment.invented:
        caveats.append(f"{title}: invented data, not a measurement")
    if experiment.planned:
        caveats.append(f"{title}: planned, so its counts are the background-only expectation")
    if {"supernovae", "atmospheric"} & set(experiment.neutrinos):
        caveats.append(_rough_neutrinos(title))
    isotopes = mass_fractions(experiment.target)
    if any(nuclear_spin(isotope) > 0.0 for isotope in isotopes):
        caveats.append(
            f"{title}: spin-dependent signals, where the model has any, rest on structure functions quoted from memory"
        )
    unknown = [isotope.name for isotope in isotopes if lacks_structure(isotope)]
    if unknown:
        caveats.append(f"{title}: spin-dependent scattering on {', '.join(unknown)} is left out")
    return tuple(caveats)


def _rough_neutrinos(title: str) -> str:
    return f"{title}: supernova and atmospheric neutrinos are rough, good to a factor of two"
