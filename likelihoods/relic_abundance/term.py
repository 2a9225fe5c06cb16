"""The measured abundance of dark matter as a likelihood."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from typing import Literal, Self

import numpy as np
from pydantic import Field, NonNegativeFloat, PositiveFloat

from scanfit import validation
from scanfit.contracts import BuildContext, Observable, Term
from scanfit.errors import PointError

from ..candidate import Candidate
from ..constants import OMEGA_H2_OBSERVED

ErrorFlag = Literal[
    "narrow_resonance",
    "outside_degrees_of_freedom_table",
    "never_in_equilibrium",
    "above_unitarity_bound",
    "thermal_average_uncertain",
]
"""Flags of `RELIC_FLAGS` that leave an abundance, if a doubtful one."""


class RelicAbundanceOptions(validation.Options):
    """Keys of the term; defaults: the measurement of arXiv:1807.06209, and the spread between equations of state."""

    mode: Literal["measured", "upper-limit"] = "measured"
    """Whether the candidate must be all of the dark matter, or may leave room for another component."""
    omega_h2: PositiveFloat = OMEGA_H2_OBSERVED
    error: PositiveFloat = 0.0012
    """Of the measurement."""
    theory_error: NonNegativeFloat = 0.05
    """Of the prediction, relative."""
    flag_theory_errors: Mapping[ErrorFlag, NonNegativeFloat] = Field(default_factory=dict)
    """Relative theory errors where a validity flag is raised, by flag; the largest that applies counts."""


class RelicAbundance(Term[Candidate]):
    r"""Gaussian likelihood of the measured abundance.

    ln L = -(1/2) ((t - d)/e)^2 - ln(sqrt(2 pi) e),  e^2 = error^2 + (theory_error t)^2,

    with d the measurement and t the total abundance at the point. In mode "measured" t is the candidate's abundance. In
    mode "upper-limit" an unknown component fills up what the candidate leaves, so t is the larger of the candidate's
    abundance and d: the likelihood is flat below the measurement and falls as half a Gaussian above it.

    The theory error scales with the prediction because the prediction is what is uncertain. The logarithm keeps the
    likelihood normalised over the data, so that a large prediction does not profit from its large error.
    """

    Options = RelicAbundanceOptions
    name = "relic-abundance"
    summary = "abundance from freeze-out against the measured dark-matter density, all of it or as an upper limit"
    cost = 1.0
    caveats = (
        "The relic abundance assumes kinetic equilibrium during freeze-out; near a narrow resonance that can change it "
        "by up to a factor of ten (arXiv:1706.07433). Such points carry the flag narrow_resonance.",
        "Published degrees of freedom of the primordial plasma differ by several per cent; the theory error covers it, "
        "or the nuisance equation_of_state_shift, when it is free, carries it.",
    )

    def __init__(self, options: RelicAbundanceOptions, context: BuildContext) -> None:
        self.options = options
        self.observed = options.omega_h2

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        total, error = self._total_and_error(prediction)
        pull = (total - self.observed) / error
        return -0.5 * pull * pull - math.log(math.sqrt(2.0 * math.pi) * error)

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        _, error = self._total_and_error(prediction)
        if self.options.mode == "upper-limit":
            note = f"measured abundance of all dark matter; less is as good, more costs with an error of {error:.2g}"
            return (Observable("omega_h2", prediction.omega_h2, limit=self.observed, note=note),)
        note = "uncertainty of measurement and theory"
        return (Observable("omega_h2", prediction.omega_h2, self.observed, error, note=note),)

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        total, error = self._total_and_error(prediction)
        return self._holding(rng.normal(total, error))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        return self._holding(self._total_and_error(prediction)[0])

    def _holding(self, observed: float) -> Self:
        other = copy.copy(self)
        other.observed = observed
        return other

    def _total_and_error(self, prediction: Candidate) -> tuple[float, float]:
        """Total abundance and its error, that of the measurement included."""
        total = prediction.omega_h2
        if not math.isfinite(total):
            raise PointError("the relic abundance could not be computed at this point")
        if self.options.mode == "upper-limit":
            total = max(total, self.observed)
        flags = prediction.relic.flags
        raised = [error for flag, error in self.options.flag_theory_errors.items() if flags[flag]]
        theory_error = max(self.options.theory_error, *raised, 0.0)
        return total, math.hypot(self.options.error, theory_error * total)
