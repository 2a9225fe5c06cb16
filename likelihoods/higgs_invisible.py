"""Likelihood of searches for Higgs bosons that decay invisibly."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from typing import Annotated, Any, ClassVar, Final, Literal, Self

import numpy as np
from pydantic import Field, model_validator

from scanfit.contracts import BuildContext, Observable, Term
from scanfit.errors import MissingPrediction
from scanfit.validation import Options as BaseOptions

from .candidate import Candidate

HIGGS_WIDTH_SM: Final = 4.07e-3
"""Width of the Standard Model Higgs boson at 125 GeV in GeV; from memory, of the tables behind arXiv:1307.1347."""

ONE_SIDED_95: Final = 2.705543454095404
"""2 Delta ln L at which a half chi-squared variate of one degree of freedom reaches 95 %: 1.6449 squared."""

Paper = Literal["arxiv-2301.10731", "arxiv-2303.01214", "prd-105-092007", "arxiv-2202.07953", "prl-122-231801"]

LIMITS: Final[dict[str, tuple[float, float | None]]] = {
    "arxiv-2301.10731": (0.107, 0.077),
    "arxiv-2303.01214": (0.15, 0.08),
    "prd-105-092007": (0.18, 0.10),
    "arxiv-2202.07953": (0.145, None),
    "prl-122-231801": (0.26, 0.17),
}
"""Observed and expected upper limits on the invisible branching ratio at 95 % confidence, by paper. Those of
arXiv:2202.07953 are from memory, the others from the papers' abstracts."""


class HiggsInvisible(Term[Candidate]):
    """A published upper limit on the invisible branching ratio BR, read as half a Gaussian centred on zero.

        ln L = -(k/2) (BR/BR_95)^2,  k = 2.706,  BR = Gamma_inv/(Gamma_SM + Gamma_inv)

    so that 2 Delta ln L = k at the published limit. The normalisation is that of the best fit, L(BR = 0) = 1: a limit
    alone does not tell the density of the data, so evidences compare models only among runs with the same limit.
    """

    class Options(BaseOptions):
        """Keys of the term in a run file."""

        limit: Paper | None = None
        """Paper whose limit is used; arxiv-2301.10731, a combination, when neither this nor `limit_95` is given."""
        limit_95: Annotated[float, Field(gt=0.0, lt=1.0)] | None = None
        """One's own upper limit at 95 % confidence, instead."""
        use_expected: bool = False
        """Use the limit that the paper expected without a signal rather than the observed one."""

        @model_validator(mode="after")
        def _one_limit(self) -> HiggsInvisible.Options:
            if self.limit is not None and self.limit_95 is not None:
                raise ValueError("give `limit` or `limit_95`, not both")
            if self.use_expected and (self.limit_95 is not None or LIMITS[self.paper][1] is None):
                raise ValueError("no expected limit is known for this choice; leave `use_expected` out")
            return self

        @property
        def paper(self) -> str:
            """The paper in force when `limit_95` is not given."""
            return self.limit or "arxiv-2301.10731"

    name: ClassVar[str] = "higgs-invisible"
    summary: ClassVar[str] = "published limits on the invisible branching ratio of the Higgs boson"
    cost: ClassVar[float] = 0.01

    def __init__(self, options: Options, context: BuildContext) -> None:
        self.options = options
        if options.limit_95 is not None:
            self.limit_95, self.source = options.limit_95, "own limit"
        else:
            observed, expected = LIMITS[options.paper]
            self.limit_95 = expected if options.use_expected and expected is not None else observed
            self.source = options.paper + (", expected" if options.use_expected else "")
        self.best_fit = 0.0
        self.caveats = (
            f"invisible Higgs decays: the limit BR < {self.limit_95:g} ({self.source}) is read as half a Gaussian "
            "with its best fit at zero",
        )

    @property
    def spread(self) -> float:
        """Standard deviation of the Gaussian."""
        return self.limit_95 / math.sqrt(ONE_SIDED_95)

    def branching_ratio(self, prediction: Candidate) -> float:
        """Invisible branching ratio; raises MissingPrediction when the candidate has no invisible Higgs width."""
        width = prediction.higgs_invisible_width
        if width is None:
            raise MissingPrediction("an invisible Higgs width")
        return width / (HIGGS_WIDTH_SM + width)

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        return -0.5 * ((self.branching_ratio(prediction) - self.best_fit) / self.spread) ** 2

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        return (
            Observable(
                name="invisible branching ratio of the Higgs boson",
                predicted=self.branching_ratio(prediction),
                limit=self.limit_95,
                note=f"95 % confidence, {self.source}",
            ),
        )

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """Return the term with a best fit drawn around this point's branching ratio; it may be negative."""
        return self._with_best_fit(float(rng.normal(self.branching_ratio(prediction), self.spread)))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        """Return the term whose best fit is this point's branching ratio."""
        return self._with_best_fit(self.branching_ratio(prediction))

    def _with_best_fit(self, best_fit: float) -> Self:
        other: Any = copy.copy(self)
        other.best_fit = best_fit
        return other  # type: ignore[no-any-return]
