"""Unitarity as a theoretical constraint: an annihilation cross section no theory could give has likelihood zero."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Self

import numpy as np
from pydantic import PositiveInt

from scanfit import validation
from scanfit.contracts import BuildContext, Observable, Term
from scanfit.errors import PointError

from .candidate import Candidate
from .constants import GEV_M2_TO_CM3_S
from .relic_abundance.unitarity import s_wave_bound


class UnitarityBoundOptions(validation.Options):
    """Keys of the term."""

    partial_waves: PositiveInt = 1
    """How many partial waves may contribute, J = 0 upwards; the bound grows as their number squared."""


class UnitarityBound(Term[Candidate]):
    """A hard bound on <sigma v> at freeze-out, with no data behind it.

    ln L is 0 where <sigma v> at freeze-out stays below the sum over J of (2 J + 1) times `s_wave_bound`, and minus
    infinity elsewhere. A constant likelihood leaves evidences comparable between models that take the same bound.
    """

    Options = UnitarityBoundOptions
    name = "unitarity-bound"
    summary = "annihilation at freeze-out no faster than unitarity of the s-wave allows; a constraint without data"
    cost = 1.0
    caveats = (
        "The unitarity bound tests the cross section at freeze-out alone, at tree level and against the sum of the "
        "allowed partial waves: a point that passes may still be beyond perturbation theory.",
    )

    def __init__(self, options: UnitarityBoundOptions, context: BuildContext) -> None:
        self.options = options

    def bound(self, candidate: Candidate) -> float:
        """Largest <sigma v> at freeze-out in cm^3/s."""
        waves = self.options.partial_waves**2
        return waves * s_wave_bound(candidate.mass, candidate.relic.x_freeze_out) * GEV_M2_TO_CM3_S

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        if not math.isfinite(prediction.relic.sigma_v_freeze_out):
            raise PointError("freeze-out could not be computed at this point")
        return 0.0 if prediction.relic.sigma_v_freeze_out <= self.bound(prediction) else -math.inf

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        predicted, limit = prediction.relic.sigma_v_freeze_out, self.bound(prediction)
        note = "unitarity bound at freeze-out"
        return (Observable("sigma_v_freeze_out", predicted, limit=limit, unit="cm³/s", note=note),)

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """Return itself: there are no data."""
        return self

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        """Return itself: there are no data."""
        return self
