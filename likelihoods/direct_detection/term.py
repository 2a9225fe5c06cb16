"""The direct-detection term: events in bins of recoil energy."""

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
from .experiment import Experiment, read_experiment
from .halo import HALO_NUISANCES, Halo
from .isotopes import mass_fractions
from .sensitivity import CURVES, USUAL_LEVEL, LimitMethod, limit_curve
from .spectrum import CountingResponse, fold
from .spin_dependent import lacks_structure, nuclear_spin

if TYPE_CHECKING:
    from ..candidate import Candidate


class DirectDetectionOptions(Options):
    """Keys of a direct-detection term in a run file."""

    data: str
    """Experiment file, relative to the run file; `experiment` describes it field by field."""
    limit_method: LimitMethod = "flat-prior"
    """How ``scanfit limit`` makes limits of this experiment alone; a scan does not use it. The last three of
    flat-prior, likelihood-ratio, classical, cls and unified are for a single bin."""


class DirectDetection(Term["Candidate"]):
    """Poisson likelihood of the events that one experiment counted.

    Spin-independent and spin-dependent scattering with separate proton and neutron couplings, in a Maxwellian halo
    whose parameters are shared with every other term that names them. The signal scales with the candidate's fraction
    of the dark matter. The background's uncertainty is profiled or marginalised as the run says.

    Parameters
    ----------
    options : DirectDetectionOptions
        Which experiment.
    context : BuildContext
        Where the run file is, and how inner nuisances are treated.

    Raises
    ------
    InputError
        If the experiment file is missing or breaks a rule.
    """

    Options = DirectDetectionOptions
    name = "direct-detection"
    summary = "events in a direct-detection experiment, binned in recoil energy, with uncertain backgrounds"
    cost = 0.03
    nuisances = HALO_NUISANCES
    curves = CURVES

    def __init__(self, options: DirectDetectionOptions, context: BuildContext) -> None:
        path = context.folder / options.data
        self._limit_method = options.limit_method
        self.experiment: Experiment = read_experiment(path)
        self.data_files = (path,)
        self.caveats = _caveats(self.experiment)
        self._response: CountingResponse = fold(self.experiment)
        background = np.array(self.experiment.bins.background)
        observed = self.experiment.bins.observed
        self.counting = BinnedCounts(
            observed=background.copy() if observed is None else np.array(observed, dtype=float),
            background=background,
            loading=self.experiment.background_loading(),
            treatment=context.inner_nuisances,
        )

    def signal(self, candidate: Candidate, values: Mapping[str, float]) -> FloatArray:
        """Expected signal events in each bin, shape (n_bins,).

        Raises
        ------
        MissingPrediction
            If the model says nothing about scattering on nucleons.
        """
        if candidate.nucleon is None:
            raise MissingPrediction("scattering on nucleons")
        counts = self._response.counts(candidate.mass, candidate.nucleon, Halo.from_values(values))
        return counts * candidate.dm_fraction

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        return self.counting.log_likelihood(self.signal(prediction, values))

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        signal = self.signal(prediction, values)
        counting = self.counting
        kind = "expected, not measured" if self.experiment.planned else ""
        lines = [
            Observable("signal events", float(signal.sum()), unit="events"),
            Observable("background events", float(counting.background.sum()), unit="events"),
            Observable(
                "background events favoured by the data",
                float(counting.most_likely_background(signal).sum()),
                unit="events",
                note="maximises the likelihood together with this signal",
            ),
        ]
        for index, (low, high) in enumerate(self.experiment.bins.intervals_kev):
            lines.append(
                Observable(
                    f"events in {low:g}-{high:g} keV",
                    float(signal[index] + counting.background[index]),
                    observed=float(counting.observed[index]),
                    unit="events",
                    note=", ".join(part for part in (f"signal {signal[index]:.3g}", kind) if part),
                )
            )
        return lines

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        return self._holding(self.counting.draw(self.signal(prediction, values), rng))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        return self._holding(self.counting.asimov(self.signal(prediction, values)))

    def limit_curve(
        self,
        curve: str,
        *,
        level: float | None = None,
        points: int = 40,
        pseudo_experiments: int = 200,
        rng: np.random.Generator | None = None,
    ) -> LimitCurve:
        return limit_curve(
            self.experiment.title,
            self._response,
            self.counting,
            lambda generator: (self._response, self.counting.draw(np.zeros_like(self.counting.background), generator)),
            curve,
            level=USUAL_LEVEL if level is None else level,
            points=points,
            pseudo_experiments=pseudo_experiments,
            rng=rng or np.random.default_rng(1),
            method=self._limit_method,
            observed=not self.experiment.planned,
            caveats=self.caveats,
        )

    def _holding(self, counting: BinnedCounts) -> Self:
        """The same term with other data; the folded response is shared, it never changes."""
        twin = copy.copy(self)
        twin.counting = counting
        return twin


def _caveats(experiment: Experiment) -> tuple[str, ...]:
    title = experiment.title
    caveats = []
    if experiment.invented:
        caveats.append(f"{title}: invented data, not a measurement")
    if experiment.planned:
        caveats.append(f"{title}: planned, so its counts are the background-only expectation")
    isotopes = mass_fractions(experiment.target)
    if any(nuclear_spin(isotope) > 0.0 for isotope in isotopes):
        caveats.append(
            f"{title}: spin-dependent signals, where the model has any, rest on structure functions quoted from memory"
        )
    unknown = [isotope.name for isotope in isotopes if lacks_structure(isotope)]
    if unknown:
        caveats.append(f"{title}: spin-dependent scattering on {', '.join(unknown)} is left out")
    return tuple(caveats)
