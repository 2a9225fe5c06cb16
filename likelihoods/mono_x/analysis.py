"""The analysis file: what one mono-X search expected and saw, in TOML.

Every key is described at `Analysis`; ``runs/demo/brackwater_mono_jet.toml`` is a commented example.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
from pydantic import Field, NonNegativeFloat, NonNegativeInt, PositiveFloat

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options, check, read_toml

from .simplified_likelihood import CorrelatedBackground

Fraction = Annotated[float, Field(ge=0.0, lt=1.0)]
Correlation = Annotated[float, Field(ge=-1.0, le=1.0)]


class OwnSignal(Options):
    """Keys of ``[signal]``: the user's own signal, see `OwnRates`."""

    table: str
    """CSV or Parquet file, relative to the analysis file."""
    unit: Literal["pb", "fb"] = "pb"
    """Of the table's cross section x acceptance."""
    coupling: Literal["vector", "axial"]
    """Kind of couplings that the table was made with."""
    g_quark: PositiveFloat
    """Coupling to quarks that the table was made with."""
    g_dark: PositiveFloat
    """Coupling to dark matter that the table was made with."""
    g_lepton: NonNegativeFloat = 0.0
    """Coupling to leptons that the table was made with."""


class Validity(Options):
    """Keys of ``[validity]``: where the analysis may be used."""

    mediator_mass: tuple[NonNegativeFloat, PositiveFloat] | None = None
    """Smallest and largest mediator mass, GeV."""
    dark_mass: tuple[NonNegativeFloat, PositiveFloat] | None = None
    """Smallest and largest dark-matter mass, GeV."""
    width_ratio_below: PositiveFloat | None = None
    """Largest width of the mediator over its mass."""
    outside: Literal["refuse", "ignore"] = "refuse"
    """What a point outside gets: likelihood zero with a message, or that of the background alone (no say)."""

    def refusal(self, mediator_mass: float, width: float, dark_mass: float) -> str:
        """Why a point (GeV) is outside, in words; empty when it is inside."""
        for name, value, bounds in (
            ("mediator mass", mediator_mass, self.mediator_mass),
            ("dark-matter mass", dark_mass, self.dark_mass),
        ):
            if bounds is not None and not bounds[0] <= value <= bounds[1]:
                return f"the {name} of {value:g} GeV lies outside its range, {bounds[0]:g} to {bounds[1]:g} GeV"
        if self.width_ratio_below is not None and width > self.width_ratio_below * mediator_mass:
            ratio = width / mediator_mass
            return f"the mediator's width of {ratio:.3g} of its mass is above the limit of {self.width_ratio_below:g}"
        return ""


class Analysis(Options):
    """A search in bins of missing transverse momentum, or in regions with a signal table of their own.

    What was expected and seen is either written here or read from a HistFactory `workspace`. Written here, the
    background's covariance is given in one of two ways: `covariance`; or the size of each bin's uncertainty
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
    edges: Annotated[tuple[PositiveFloat, ...], Field(min_length=1)] | None = None
    """Bin edges in missing transverse momentum, GeV, rising; n + 1 of them, or n with `overflow`."""
    overflow: bool = False
    """Whether the last bin holds everything above the last edge."""
    regions: Annotated[tuple[str, ...], Field(min_length=1)] | None = None
    """Names of the bins, instead of `edges`, for any other selection; needs a table of one's own in `[signal]`."""
    background: tuple[PositiveFloat, ...] | None = None
    """Expected background events per bin."""
    observed: tuple[NonNegativeInt, ...] | None = None
    """Observed events per bin."""
    workspace: str | None = None
    """HistFactory JSON file, relative to this one, instead of background, observed counts and uncertainties."""
    channels: Annotated[tuple[str, ...], Field(min_length=1)] | None = None
    """Channels of the workspace whose bins, in this order, are the bins of this file."""
    measurement: str | None = None
    """Measurement of the workspace; its first one when left out."""
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

    signal: OwnSignal | None = None
    """The user's own signal table instead of the shipped ones."""
    validity: Validity = Validity()
    """Where the analysis may be used."""

    @property
    def bin_edges(self) -> tuple[float, ...]:
        """The n + 1 edges of the bins, infinity included; empty when the bins are named `regions`."""
        if self.edges is None:
            return ()
        return (*self.edges, math.inf) if self.overflow else self.edges

    @property
    def count(self) -> int:
        """Number of bins."""
        return len(self.bin_edges) - 1 if self.regions is None else len(self.regions)

    def bin_name(self, index: int) -> str:
        """Range or name of bin `index` in words."""
        if self.regions is not None:
            return self.regions[index]
        low, high = self.bin_edges[index : index + 2]
        return f"above {low:g} GeV" if math.isinf(high) else f"{low:g}-{high:g} GeV"

    def covariance_matrix(self) -> FloatArray:
        """Covariance of the background expectations, shape (n, n), however it was given."""
        if self.covariance is not None:
            return np.array(self.covariance)
        if self.uncertainty is not None:
            sizes = np.array(self.uncertainty)
        else:
            sizes = np.array(self.background, dtype=float) * np.array(self.relative_uncertainty, dtype=float)
        if self.correlation is not None:
            matrix = np.array(self.correlation)
        else:
            common = self.correlated_fraction or 0.0
            matrix = common + (1.0 - common) * np.eye(self.count)
        return np.asarray(np.outer(sizes, sizes) * matrix)

    def background_model(self) -> CorrelatedBackground:
        """Expected background with its correlated, possibly skewed uncertainties; raises InputError."""
        skew = None if self.third_moments is None else np.array(self.third_moments)
        return CorrelatedBackground.from_moments(np.array(self.background, dtype=float), self.covariance_matrix(), skew)

    def problems(self) -> list[Problem]:
        """Broken rules that concern several keys."""
        found = self._problems_of_bins()
        written = ("background", "observed", "uncertainty", "relative_uncertainty", "third_moments")
        for key in (*written, "efficiency"):
            values = getattr(self, key)
            if values is not None and len(values) != self.count:
                found.append(
                    Problem(key, f"must have one value for each of the {self.count} bins", f"{len(values)} values")
                )
        if self.workspace is not None:
            found += [
                Problem(key, "is read from the `workspace`")
                for key in (*written, "covariance", "correlation", "correlated_fraction")
                if getattr(self, key) is not None
            ]
            if self.channels is None:
                found.append(Problem("channels", "name the channels of the `workspace` that are the bins of this file"))
            return found
        found += [
            Problem(key, "this key is required, or a `workspace`")
            for key in ("background", "observed")
            if getattr(self, key) is None
        ]
        found += [
            Problem(key, "belongs to a `workspace`")
            for key in ("channels", "measurement")
            if getattr(self, key) is not None
        ]
        return found + self._problems_of_covariance()

    def _problems_of_bins(self) -> list[Problem]:
        found = []
        if (self.edges is None) == (self.regions is None):
            found.append(Problem("edges", "give either `edges` or `regions`"))
        elif self.count < 1:
            found.append(Problem("edges", "at least one bin is needed: give two edges, or one and `overflow = true`"))
        if self.edges and any(high <= low for low, high in zip(self.edges[:-1], self.edges[1:], strict=True)):
            found.append(Problem("edges", "must rise from bin to bin", self.edges))
        if self.regions is not None and self.overflow:
            found.append(Problem("overflow", "belongs to `edges`"))
        if self.regions is not None and self.signal is None:
            found.append(Problem("regions", "need a table of one's own: the shipped ones know missing momentum only"))
        if self.signal is not None and self.efficiency is not None:
            found.append(Problem("efficiency", "is part of one's own table's acceptance"))
        for key in ("mediator_mass", "dark_mass"):
            bounds = getattr(self.validity, key)
            if bounds is not None and bounds[0] >= bounds[1]:
                found.append(Problem(f"validity.{key}", "must run from the smaller to the larger", bounds))
        return found

    def _problems_of_covariance(self) -> list[Problem]:
        found = []
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


def read_analysis(path: Path) -> Analysis:
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
    return analysis


def read_background(analysis: Analysis, path: Path) -> CorrelatedBackground:
    """Background model of an analysis without a workspace; `path` is its file.

    Raises
    ------
    InputError
        If the covariance is not positive definite, or the third moments are too large.
    """
    try:
        return analysis.background_model()
    except InputError as error:
        raise InputError(_in_terms_of(analysis, error.problems), str(path)) from None


def _in_terms_of(analysis: Analysis, problems: tuple[Problem, ...]) -> list[Problem]:
    """Name the key that the user wrote rather than the matrix made from it."""
    key = "covariance" if analysis.covariance is not None else "correlation"
    return [Problem(key, p.rule, p.given) if p.where == "covariance" else p for p in problems]
