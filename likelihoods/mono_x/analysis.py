"""The analysis file: what one mono-X search expected and saw, in TOML.

Every key is described at `Analysis`; ``runs/demo/brackwater_mono_jet.toml`` is a commented example.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import Field, NonNegativeInt, PositiveFloat

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options, check, read_toml

from .simplified_likelihood import CorrelatedBackground

Fraction = Annotated[float, Field(ge=0.0, lt=1.0)]
Correlation = Annotated[float, Field(ge=-1.0, le=1.0)]


class Analysis(Options):
    """A search in bins of missing transverse momentum.

    The background's covariance is given in one of two ways: `covariance`; or the size of each bin's uncertainty
    (`uncertainty` in events, or `relative_uncertainty`) with `correlation` or `correlated_fraction`, uncorrelated when
    neither is given. It holds systematic uncertainties only: Poisson fluctuations of the counts come on top.
    """

    title: str
    source: str
    """Paper by arXiv or journal number; for invented data, how they were made."""
    invented: bool
    """Whether these are no real data; said wherever the result is shown."""
    note: str = ""
    """Anything that a reader must know: cuts, or where the signal model does not hold."""
    signature: Literal["mono-jet", "mono-photon"]
    """What recoils against the missing momentum."""
    sqrt_s: PositiveFloat
    """Collision energy, TeV."""
    luminosity: PositiveFloat
    """Integrated luminosity, 1/fb."""
    edges: Annotated[tuple[PositiveFloat, ...], Field(min_length=1)]
    """Bin edges in missing transverse momentum, GeV, rising; n + 1 of them, or n with `overflow`."""
    overflow: bool = False
    """Whether the last bin holds everything above the last edge."""
    background: tuple[PositiveFloat, ...]
    """Expected background events per bin."""
    observed: tuple[NonNegativeInt, ...]
    """Observed events per bin."""
    efficiency: tuple[PositiveFloat, ...] | None = None
    """Selected over generated signal events per bin, beyond jet rapidity and missing momentum; 1 when left out."""
    covariance: tuple[tuple[float, ...], ...] | None = None
    """Of the background expectations, events squared."""
    uncertainty: tuple[PositiveFloat, ...] | None = None
    """Standard deviation of each bin's background expectation, events."""
    relative_uncertainty: tuple[PositiveFloat, ...] | None = None
    """The same as a fraction of the background."""
    correlation: tuple[tuple[Correlation, ...], ...] | None = None
    """Correlation matrix of the background expectations."""
    correlated_fraction: Fraction | None = None
    """Correlation between any two bins: the share of the variance that comes from one common source."""
    third_moments: tuple[float, ...] | None = None
    """Central third moments of the background expectations, events cubed: the skew of arXiv:1809.05548."""

    @property
    def bin_edges(self) -> tuple[float, ...]:
        """The n + 1 edges of the bins, infinity included."""
        return (*self.edges, math.inf) if self.overflow else self.edges

    @property
    def count(self) -> int:
        """Number of bins."""
        return len(self.bin_edges) - 1

    def bin_name(self, index: int) -> str:
        """Range of bin `index` in words."""
        low, high = self.bin_edges[index : index + 2]
        return f"above {low:g} GeV" if math.isinf(high) else f"{low:g}-{high:g} GeV"

    def covariance_matrix(self) -> FloatArray:
        """Covariance of the background expectations, shape (n, n), however it was given."""
        if self.covariance is not None:
            return np.array(self.covariance)
        if self.uncertainty is not None:
            sizes = np.array(self.uncertainty)
        else:
            sizes = np.array(self.background) * np.array(self.relative_uncertainty)
        if self.correlation is not None:
            matrix = np.array(self.correlation)
        else:
            common = self.correlated_fraction or 0.0
            matrix = common + (1.0 - common) * np.eye(self.count)
        return np.asarray(np.outer(sizes, sizes) * matrix)

    def background_model(self) -> CorrelatedBackground:
        """Expected background with its correlated, possibly skewed uncertainties; raises InputError."""
        skew = None if self.third_moments is None else np.array(self.third_moments)
        return CorrelatedBackground.from_moments(np.array(self.background), self.covariance_matrix(), skew)

    def problems(self) -> list[Problem]:
        """Broken rules that concern several keys."""
        found = []
        if self.count < 1:
            found.append(Problem("edges", "at least one bin is needed: give two edges, or one and `overflow = true`"))
        if any(high <= low for low, high in zip(self.edges[:-1], self.edges[1:], strict=True)):
            found.append(Problem("edges", "must rise from bin to bin", self.edges))
        for key in ("background", "observed", "efficiency", "uncertainty", "relative_uncertainty", "third_moments"):
            values = getattr(self, key)
            if values is not None and len(values) != self.count:
                found.append(
                    Problem(key, f"must have one value for each of the {self.count} bins", f"{len(values)} values")
                )
        for key in ("covariance", "correlation"):
            matrix = getattr(self, key)
            if matrix is not None and {len(matrix), *(len(row) for row in matrix)} != {self.count}:
                found.append(Problem(key, f"must have {self.count} rows of {self.count} values, as there are bins"))
        sizes = [key for key in ("covariance", "uncertainty", "relative_uncertainty") if getattr(self, key) is not None]
        if len(sizes) != 1:
            rule = "give exactly one of `covariance`, `uncertainty` and `relative_uncertainty`"
            found.append(Problem("", rule, " and ".join(sizes) or "none"))
        if self.correlation is not None and self.correlated_fraction is not None:
            found.append(Problem("correlated_fraction", "cannot stand beside `correlation`"))
        if self.covariance is not None:
            found += [
                Problem(key, "cannot stand beside `covariance`, which holds it")
                for key in ("correlation", "correlated_fraction")
                if getattr(self, key) is not None
            ]
        if self.correlation is not None and any(row[i : i + 1] != (1.0,) for i, row in enumerate(self.correlation)):
            found.append(Problem("correlation", "must have ones on its diagonal"))
        return found


def read_analysis(path: Path) -> tuple[Analysis, CorrelatedBackground]:
    """Read and check an analysis file.

    Raises
    ------
    InputError
        With every broken rule.
    """
    analysis = check(Analysis, read_toml(path), source=str(path))
    problems = analysis.problems()
    if problems:
        raise InputError(problems, str(path))
    try:
        return analysis, analysis.background_model()
    except InputError as error:
        raise InputError(_in_terms_of(analysis, error.problems), str(path)) from None


def _in_terms_of(analysis: Analysis, problems: tuple[Problem, ...]) -> list[Problem]:
    """Name the key that the user wrote rather than the matrix made from it."""
    key = "covariance" if analysis.covariance is not None else "correlation"
    return [Problem(key, p.rule, p.given) if p.where == "covariance" else p for p in problems]
