"""The term: a search for missing momentum with a spin-one mediator."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, ClassVar, Final, Protocol, Self

import numpy as np
from pydantic import Field, PositiveFloat

from scanfit.contracts import BuildContext, ExclusionPlane, LimitCurve, Observable, Term
from scanfit.errors import InputError, MissingPrediction, PointError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options as BaseOptions

from ..candidate import Candidate, SpinOneMediator
from ..exclusion_plane import MASS_PLANES, mass_plane
from .analysis import read_analysis, read_background
from .histfactory import HistFactoryLikelihood
from .limits import confidence, coupling_curve
from .rates import OwnRates, Rates, ShippedRates
from .signal import load_table
from .simplified_likelihood import SimplifiedLikelihood

FB_PER_PB: Final = 1000.0
SHOWER_FACTOR: Final = 1.12
"""Of the parton shower on the leading order: 1.07 to 1.14 with the generator of the tables."""
PLANE_MASSES: Final = (50.0, 3000.0)
"""Mediator masses of a plane in GeV, unless the analysis or the user says otherwise."""

SPIN_ZERO: Final = (
    "mono-x production of anything but a spin-one mediator: a spin-zero one comes from gluons through a top loop, "
    "whose amplitude with a hard jet is not tabulated here, and its heavy-top limit fails where the search looks, "
    "above the top mass"
)


class Counts(Protocol):
    """What the term asks of its likelihood, simplified or full."""

    @property
    def sampled(self) -> bool: ...

    @property
    def observed(self) -> FloatArray: ...

    def profile(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float: ...

    def marginal(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float: ...

    def central(self) -> tuple[FloatArray, FloatArray]: ...

    def drawn(self, signal: FloatArray, log_uncertainty: FloatArray, rng: np.random.Generator) -> Self: ...

    def asimov(self, signal: FloatArray) -> Self: ...


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
        shower_factor: PositiveFloat | None = None
        """Factor on the signal; when left out 1.12 for the shipped leading-order tables, and 1 for one's own table."""
        signal_uncertainty: Annotated[float, Field(ge=0.0, le=1.0)] = 0.10
        """Relative uncertainty of the signal in all bins together."""
        scale_uncertainty: bool = True
        """Whether the spread among scale choices, or one's own table's uncertainty, adds to it: about 18 % at 1 TeV."""

    name: ClassVar[str] = "mono-x"
    summary: ClassVar[str] = "collider search for dark matter recoiling against a jet or photon, in correlated bins"
    cost: ClassVar[float] = 0.2
    curves: ClassVar[Mapping[str, str]] = {
        "vector": "quark coupling against mediator mass; vector couplings, g_dark = 1, light dark matter",
        "axial": "quark coupling against mediator mass; axial couplings, g_dark = 1, light dark matter",
    }
    planes: ClassVar[Mapping[str, str]] = MASS_PLANES

    def __init__(self, options: Options, context: BuildContext) -> None:
        self.options = options
        path = Path(context.folder) / options.data
        self.analysis = read_analysis(path)
        self._profiled = context.inner_nuisances == "profile"
        try:
            self._likelihood, files = self._read_likelihood(path)
            self._rates: Rates
            if self.analysis.signal is None:
                table = load_table(self.analysis.signature, self.analysis.sqrt_s)
                self._rates, factor = ShippedRates(table, self.analysis.bin_edges), SHOWER_FACTOR
            else:
                self._rates, factor = OwnRates(self.analysis, path.parent), 1.0
        except InputError as error:
            raise InputError(error.problems, error.source or str(path)) from None
        factor = factor if options.shower_factor is None else options.shower_factor
        efficiency = np.ones(self.analysis.count) if self.analysis.efficiency is None else self.analysis.efficiency
        self._events_per_pb = factor * self.analysis.luminosity * FB_PER_PB * np.asarray(efficiency)
        self.data_files = (path, *files, *self._rates.files)
        self.caveats = self._caveats(factor)

    def signal(self, prediction: Candidate) -> tuple[FloatArray, FloatArray]:
        """Return expected signal events per bin and their log uncertainty, each of shape (n_bins,).

        Raises
        ------
        MissingPrediction
            If the candidate has no spin-one mediator, or is no fermion.
        PointError
            If the mediator's width is not positive, a Majorana particle is given a vector coupling, or the point lies
            outside the analysis's range of validity or the user's table, and the analysis says to refuse it.
        """
        mediator = prediction.mediator
        if mediator is None:
            raise MissingPrediction("a spin-one mediator")
        if not isinstance(mediator, SpinOneMediator):
            raise MissingPrediction(SPIN_ZERO)
        if prediction.spin_degrees_of_freedom != 2:
            raise MissingPrediction("a spin-one mediator that decays into a fermion")
        if prediction.self_conjugate and any(
            current.g_dark != 0.0 and not current.axial for current in mediator.currents
        ):
            raise PointError("a Majorana particle has no vector coupling")
        if not mediator.width > 0.0:
            raise PointError(f"the mediator's width must be positive (it is {mediator.width:g} GeV)")
        try:
            refusal = self.analysis.validity.refusal(mediator.mass, mediator.width, prediction.mass)
            if refusal:
                raise PointError(f"{self.analysis.title}: {refusal}")
            share = 0.5 if prediction.self_conjugate else 1.0
            cross_section, scales = self._rates(mediator, prediction.mass, share)
        except PointError:
            if self.analysis.validity.outside == "refuse":
                raise
            return np.zeros(self.analysis.count), np.zeros(self.analysis.count)
        own = math.log1p(self.options.signal_uncertainty)
        uncertainty = np.hypot(own, scales) if self.options.scale_uncertainty else np.full(len(scales), own)
        return self._events_per_pb * cross_section, uncertainty

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        signal, uncertainty = self.signal(prediction)
        if self._profiled:
            return self._likelihood.profile(signal, uncertainty)
        return self._likelihood.marginal(signal, uncertainty)

    def confidence(self, prediction: Candidate) -> tuple[float, float]:
        """Observed CLs of the candidate, and the median one without signal; nuisances are profiled."""
        return confidence(self._likelihood, *self.signal(prediction))

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        signal, uncertainty = self.signal(prediction)
        above = f" above {self.analysis.edges[0]:g} GeV" if self.analysis.edges and not self.analysis.signal else ""
        rows = [
            Observable(
                name=f"signal cross section{above}",
                predicted=float(signal.sum()) / self.analysis.luminosity,
                unit="fb",
                note=f"{self.analysis.signature}, after selection",
            )
        ]
        background, deviation = self._likelihood.central()
        for index, expected in enumerate(background):
            rows.append(
                Observable(
                    name=f"events in {self.analysis.bin_name(index)}",
                    predicted=float(expected + signal[index]),
                    observed=float(self._likelihood.observed[index]),
                    uncertainty=math.sqrt(deviation[index] ** 2 + expected),
                    unit="events",
                    note=f"signal {signal[index]:.4g} within {100.0 * math.expm1(uncertainty[index]):.0f} %; "
                    "uncertainty of the background with its Poisson fluctuation",
                )
            )
        return rows

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """Return the term with counts drawn at this point; the inner nuisances are drawn from their densities."""
        return self._with_likelihood(self._likelihood.drawn(*self.signal(prediction), rng))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        """Return the term holding the counts expected at this point with every inner nuisance at its centre."""
        return self._with_likelihood(self._likelihood.asimov(self.signal(prediction)[0]))

    def limit_curve(
        self,
        curve: str,
        *,
        level: float | None = None,
        points: int = 40,
        pseudo_experiments: int = 200,
        rng: np.random.Generator | None = None,
    ) -> LimitCurve:
        """Limits of this search alone, with CLs and the large-sample formulas: no pseudo-data are drawn."""
        if curve not in self.curves:
            return super().limit_curve(curve)
        result = coupling_curve(
            self._likelihood, self.signal, "axial" if curve == "axial" else "vector",
            level=0.95 if level is None else level, points=points,
        )  # fmt: skip
        if not pseudo_experiments:
            result["bands"] = None
        return LimitCurve(title=f"{self.analysis.title}: {self.curves[curve]}", caveats=self.caveats, **result)

    def exclusion_plane(self, plane: str, settings: Mapping[str, Any], *, points: int = 40) -> ExclusionPlane:
        """Plane of mediator mass and dark-matter mass; `settings` are keys of `MassPlaneOptions`."""
        if plane not in self.planes:
            return super().exclusion_plane(plane, settings)
        low, high = self.analysis.validity.mediator_mass or PLANE_MASSES
        return mass_plane(self, self.analysis.title, plane, settings, (max(low, PLANE_MASSES[0]), high), points)

    def _read_likelihood(self, path: Path) -> tuple[Counts, tuple[Path, ...]]:
        analysis = self.analysis
        if analysis.workspace is None:
            background = read_background(analysis, path)
            return SimplifiedLikelihood(background, np.array(analysis.observed, dtype=float)), ()
        if not self._profiled:
            rule = 'a full likelihood can only be profiled: set `inner_nuisances = "profile"` in [run]'
            raise InputError([Problem("workspace", rule)])
        workspace = path.parent / analysis.workspace
        likelihood = HistFactoryLikelihood(workspace, analysis.channels or (), analysis.measurement)
        if likelihood.count != analysis.count:
            rule = f"the channels hold {likelihood.count} bins, this file {analysis.count}"
            raise InputError([Problem("channels", rule)])
        return likelihood, (workspace,)

    def _caveats(self, factor: float) -> tuple[str, ...]:
        analysis, likelihood = self.analysis, self._likelihood
        found = [f"{analysis.title}: invented data"] if analysis.invented else []
        kind = "simplified likelihood" if analysis.workspace is None else "full likelihood"
        if analysis.signal is None:
            found.append(
                f"mono-x signal: leading order times {factor:g}, universal quark couplings, no detector simulation; "
                f"{kind}"
            )
        else:
            found.append(
                f"mono-x signal: own table {analysis.signal.table} times {factor:g}, brought to other couplings and "
                f"widths with leading-order rates; {kind}"
            )
        if likelihood.sampled and not self._profiled:
            found.append(
                "mono-x background within three standard deviations of zero: marginalised by importance sampling, to "
                "about 0.01 in ln L"
            )
        if analysis.validity.outside == "ignore":
            found.append(f"{analysis.title}: says nothing outside its range of validity")
        return tuple(found)

    def _with_likelihood(self, likelihood: Counts) -> Self:
        other: Any = copy.copy(self)
        other._likelihood = likelihood
        return other  # type: ignore[no-any-return]
