"""Likelihood of a search for dark matter recoiling against a jet or a photon, for models with a spin-one mediator."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, ClassVar, Final, Self

import numpy as np
from pydantic import Field, PositiveFloat

from scanfit.contracts import BuildContext, Observable, Term
from scanfit.errors import InputError, MissingPrediction, PointError
from scanfit.priors import FloatArray
from scanfit.validation import Options as BaseOptions

from ..candidate import Candidate
from ..mediator_widths import FERMION_CHANNELS, FERMION_STATES
from .analysis import read_analysis
from .signal import SpinOneSignal, load_table
from .simplified_likelihood import SimplifiedLikelihood

FB_PER_PB: Final = 1000.0
NEUTRINO_COUPLING: Final = math.sqrt(float(FERMION_STATES[FERMION_CHANNELS.index("nunu")]))
"""All neutrinos together, as one Dirac fermion, in units of the lepton coupling."""


class MonoX(Term[Candidate]):
    """Counts in bins of missing transverse momentum against background plus mediator production.

    The rate follows from the mediator alone and does not scale with the fraction of the dark matter that the candidate
    makes up. What the term removes itself, profiled or marginalised as the run says, are the correlated uncertainties
    of the background and one of the signal, common to all bins: log-normal, the shower's and the scales' in quadrature.
    """

    class Options(BaseOptions):
        """Keys of the term in a run file."""

        data: str
        """Analysis file, relative to the run file; see `Analysis`."""
        shower_factor: PositiveFloat = 1.12
        """Factor on the leading-order signal for the parton shower (1.07 to 1.14 with the generator of the table)."""
        signal_uncertainty: Annotated[float, Field(ge=0.0, le=1.0)] = 0.10
        """Relative uncertainty of `shower_factor`."""
        scale_uncertainty: bool = True
        """Whether the spread among scale choices adds to it: about 18 % at a mediator mass of 1 TeV."""

    name: ClassVar[str] = "mono-x"
    summary: ClassVar[str] = "collider search for dark matter recoiling against a jet or photon, in correlated bins"
    cost: ClassVar[float] = 0.2

    def __init__(self, options: Options, context: BuildContext) -> None:
        self.options = options
        path = Path(context.folder) / options.data
        self.analysis, self._background = read_analysis(path)
        try:
            table = load_table(self.analysis.signature, self.analysis.sqrt_s)
            self._spin_one = SpinOneSignal(table, self.analysis.bin_edges)
        except InputError as error:
            raise InputError(error.problems, error.source or str(path)) from None
        efficiency = np.ones(self.analysis.count) if self.analysis.efficiency is None else self.analysis.efficiency
        self._events_per_pb = options.shower_factor * self.analysis.luminosity * FB_PER_PB * np.asarray(efficiency)
        self._profiled = context.inner_nuisances == "profile"
        self._likelihood = SimplifiedLikelihood(self._background, np.array(self.analysis.observed, dtype=float))
        self.data_files = (path, table.path)
        self.caveats = (
            *((f"{self.analysis.title}: invented data",) if self.analysis.invented else ()),
            *self._near_zero(),
            f"mono-x signal: leading order times {options.shower_factor:g}, universal quark couplings, no detector "
            "simulation; simplified likelihood",
        )

    def signal(self, prediction: Candidate) -> tuple[FloatArray, FloatArray]:
        """Return expected signal events per bin and their log uncertainty, each of shape (n_bins,).

        Raises
        ------
        MissingPrediction
            If the candidate has no spin-one mediator, or is no fermion.
        PointError
            If the mediator's width is not positive, or a Majorana particle is given a vector coupling.
        """
        mediator = prediction.mediator
        if mediator is None:
            raise MissingPrediction("a spin-one mediator")
        if prediction.spin_degrees_of_freedom != 2:
            raise MissingPrediction("a spin-one mediator that decays into a fermion")
        if prediction.self_conjugate and mediator.coupling == "vector":
            raise PointError("a Majorana particle has no vector coupling")
        if not mediator.width > 0.0:
            raise PointError(f"the mediator's width must be positive (it is {mediator.width:g} GeV)")
        axial = mediator.coupling == "axial"
        cross_section, scales = self._spin_one(
            mediator.mass, mediator.width, axial, prediction.mass, mediator.g_quark, mediator.g_dark
        )
        if prediction.self_conjugate:
            cross_section = 0.5 * cross_section
        if mediator.g_lepton != 0.0:
            # Neutrinos are as invisible as dark matter; interference with the Z boson is left out.
            neutrinos, neutrino_scales = self._spin_one(
                mediator.mass, mediator.width, axial, 0.0, mediator.g_quark, NEUTRINO_COUPLING * mediator.g_lepton
            )
            total = cross_section + neutrinos
            weighted = cross_section * scales + neutrinos * neutrino_scales
            scales = np.divide(weighted, total, out=np.zeros_like(total), where=total > 0.0)
            cross_section = total
        shower = math.log1p(self.options.signal_uncertainty)
        uncertainty = np.hypot(shower, scales) if self.options.scale_uncertainty else np.full(len(scales), shower)
        return self._events_per_pb * cross_section, uncertainty

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        signal, uncertainty = self.signal(prediction)
        if self._profiled:
            return self._likelihood.profile(signal, uncertainty)
        return self._likelihood.marginal(signal, uncertainty)

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        signal, uncertainty = self.signal(prediction)
        rows = [
            Observable(
                name=f"signal cross section above {self.analysis.edges[0]:g} GeV",
                predicted=float(signal.sum()) / self.analysis.luminosity,
                unit="fb",
                note=f"{self.analysis.signature}, after selection",
            )
        ]
        variance = np.diag(self.analysis.covariance_matrix())
        for index, background in enumerate(self.analysis.background):
            rows.append(
                Observable(
                    name=f"events in {self.analysis.bin_name(index)}",
                    predicted=background + float(signal[index]),
                    observed=float(self._likelihood.observed[index]),
                    uncertainty=math.sqrt(variance[index] + background),
                    unit="events",
                    note=f"signal {signal[index]:.4g} within {100.0 * math.expm1(uncertainty[index]):.0f} %; "
                    "uncertainty of the background with its Poisson fluctuation",
                )
            )
        return rows

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """Return the term with counts drawn at this point; the inner nuisances are drawn from their densities."""
        signal, uncertainty = self.signal(prediction)
        theta = self._background.lower @ rng.standard_normal(self._background.count)
        mean = self._background.expected(theta) + signal * np.exp(uncertainty * rng.standard_normal())
        return self._with_counts(rng.poisson(mean).astype(float))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        """Return the term holding the counts expected at this point with every inner nuisance at its centre."""
        signal, _ = self.signal(prediction)
        return self._with_counts(self._background.expected(np.zeros(self._background.count)) + signal)

    def _near_zero(self) -> tuple[str, ...]:
        """Bins where Laplace's method is coarse, because the background's uncertainty reaches down to zero."""
        background = self._background
        lowest = np.minimum(background.expected(-3.0 * np.ones(background.count)), background.constant)
        bins = [self.analysis.bin_name(int(index)) for index in np.flatnonzero(lowest < 0.01 * background.constant)]
        if self._profiled or not bins:
            return ()
        return (
            f"mono-x background within three standard deviations of zero ({', '.join(bins)}): its marginalisation is "
            "approximate; third moments, or profiling, treat it better",
        )

    def _with_counts(self, counts: FloatArray) -> Self:
        other: Any = copy.copy(self)
        other._likelihood = SimplifiedLikelihood(self._background, counts)
        return other  # type: ignore[no-any-return]
