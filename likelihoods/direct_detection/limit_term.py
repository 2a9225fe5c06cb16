"""The term of a published limit curve; `published_limit` describes its file and its approximation."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Self

import numpy as np

from scanfit.contracts import BuildContext, LimitCurve, Observable, Quantity, Term
from scanfit.errors import InputError, MissingPrediction, Problem
from scanfit.validation import Options

from .halo import HALO_NUISANCES
from .published_limit import EffectiveCrossSection, read_published_limit

if TYPE_CHECKING:
    from ..candidate import Candidate


class DirectDetectionLimitOptions(Options):
    """Keys of the term in a run file."""

    data: str
    """File with the curve, relative to the run file; `published_limit` describes it field by field."""


class DirectDetectionLimit(Term["Candidate"]):
    """Approximate likelihood of a published limit on scattering off nucleons.

    The ratio x of the candidate's cross section to the excluded one scales with its fraction of the dark matter and
    with the local density. In the Poisson form the data are a number of events, none as published; in the half-Gaussian
    form a best fit of x, zero as published. The normalisation is that of these stand-ins, so evidences compare models
    only among runs with the same curve.

    Parameters
    ----------
    options : DirectDetectionLimitOptions
        Which curve.
    context : BuildContext
        Where the run file is.

    Raises
    ------
    InputError
        If the file is missing or breaks a rule.
    """

    Options = DirectDetectionLimitOptions
    name = "direct-detection-limit"
    summary = "a published limit curve of direct detection, read as an approximate likelihood"
    cost = 0.01
    nuisances = tuple(parameter for parameter in HALO_NUISANCES if parameter.name == "local_density")
    curves = {"published": "the published curve as it was read"}

    def __init__(self, options: DirectDetectionLimitOptions, context: BuildContext) -> None:
        self.limit, self.data_files = read_published_limit(context.folder / options.data)
        try:
            self._effective = EffectiveCrossSection(self.limit.target, self.limit.interaction)
        except InputError as error:
            raise InputError(error.problems, str(self.data_files[0])) from None
        self.datum = 0.0
        limit = self.limit
        form = "a background-free count" if limit.likelihood == "poisson" else "half a Gaussian centred on zero"
        masses = limit.masses
        outside = "points outside are rejected" if limit.outside == "reject" else "no limit is applied outside"
        self.caveats = (
            *((f"{limit.title}: invented data, not a measurement",) if limit.invented else ()),
            f"{limit.title}: approximate likelihood, the {100.0 * limit.level:g} % limit curve is read as {form}; good "
            "to 25-50 % in the cross section, with the paper's halo speeds and without suppressed couplings",
            f"{limit.title}: the curve spans {masses[0]:g} to {masses[-1]:g} GeV; {outside}",
        )

    def ratio(self, prediction: Candidate, values: Mapping[str, float]) -> float | None:
        """Cross section over the excluded one, or None where the curve says nothing.

        Raises
        ------
        MissingPrediction
            If the model says nothing about scattering on nucleons.
        PointError
            If the mass lies outside the curve and the file does not allow it.
        """
        if prediction.nucleon is None:
            raise MissingPrediction("scattering on nucleons")
        excluded = self.limit.at(prediction.mass)
        if excluded is None:
            return None
        flux = prediction.dm_fraction * values["local_density"] / self.limit.local_density
        return flux * self._effective(prediction.mass, prediction.nucleon) / excluded

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        ratio = self.ratio(prediction, values)
        if ratio is None:
            return 0.0
        if self.limit.likelihood == "half-gaussian":
            return -0.5 * self.limit.curvature * (ratio - self.datum) ** 2
        expected, events = self.limit.events_at_limit * ratio, self.datum
        if events == 0.0:
            return -expected
        return events * math.log(expected) - expected - math.lgamma(events + 1.0) if expected > 0.0 else -math.inf

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        ratio = self.ratio(prediction, values)
        note = f"{100.0 * self.limit.level:g} % confidence, approximate likelihood"
        if ratio is None:
            return (Observable("cross section over the excluded one", math.nan, note="mass outside the curve"),)
        return (
            Observable(
                f"{self.limit.interaction} cross section on a nucleon, scaled by abundance and density",
                ratio * (self.limit.at(prediction.mass) or math.nan),
                limit=self.limit.at(prediction.mass),
                unit="cm²",
                note=note,
            ),
        )

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        ratio = self.ratio(prediction, values) or 0.0
        if self.limit.likelihood == "poisson":
            return self._holding(float(rng.poisson(self.limit.events_at_limit * ratio)))
        return self._holding(float(rng.normal(ratio, 1.0 / math.sqrt(self.limit.curvature))))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        ratio = self.ratio(prediction, values) or 0.0
        return self._holding(self.limit.events_at_limit * ratio if self.limit.likelihood == "poisson" else ratio)

    def limit_curve(
        self,
        curve: str,
        *,
        level: float | None = None,
        points: int = 40,
        pseudo_experiments: int = 200,
        rng: np.random.Generator | None = None,
    ) -> LimitCurve:
        """Return the curve as published, at its own level and masses; there are no bands."""
        if curve not in self.curves:
            return super().limit_curve(curve)
        if level is not None and not math.isclose(level, self.limit.level):
            raise InputError([Problem("level", f"the curve is published at {self.limit.level:g} only", level)])
        symbol = {"i": r"\sigma^\mathrm{SI}", "p": r"\sigma^\mathrm{SD}_p", "n": r"\sigma^\mathrm{SD}_n"}
        kind = "i" if self.limit.interaction == "spin-independent" else self.limit.interaction.split("-")[2][0]
        description = f"{self.limit.interaction} cross section on a nucleon"
        return LimitCurve(
            title=self.limit.title,
            x=Quantity("mass", "GeV", "m", "dark-matter mass"),
            y=Quantity("cross_section", "cm²", symbol[kind], description),
            level=self.limit.level,
            x_values=self.limit.masses,
            observed=self.limit.cross_sections,
            bands=None,
            caveats=self.caveats,
        )

    def _holding(self, datum: float) -> Self:
        twin = copy.copy(self)
        twin.datum = datum
        return twin
