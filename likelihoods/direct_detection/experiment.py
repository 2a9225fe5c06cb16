"""A direct-detection experiment as one TOML file.

Energies are nuclear-recoil energies in keV. Every key::

    title  = "..."                  # what plots and reports call it
    source = "..."                  # where the numbers come from: a paper, a data record, or how they were invented
    invented = true                 # (default false) say it wherever a result shows
    planned  = true                 # (default false) not built yet: [bins] has no `observed`, and the data are the
                                    # background-only expectation
    exposure_tonne_year = 4.0       # positive; a year has 365.25 days
    target = { Xe = 1 }             # numbers of atoms by element (natural abundances) or isotope ("Xe-131"); a
                                    # compound is written as its formula, { Ca = 1, W = 1, O = 4 }

    [efficiency]                    # probability to keep a recoil, against its true energy; straight lines between
    energy_kev = [3, 6, 60]         # points. It must cover every bin, and is zero outside the table: nothing is
    value      = [0, 0.8, 0.85]     # extrapolated. Energies ascend, values lie in [0, 1].

    [resolution]                    # optional; without it measured energy is true energy. Gaussian of width
    noise_kev  = 0.2                # sigma(E) = sqrt(noise_kev^2 + stochastic^2 E + (constant E)^2), E in keV, so that
    stochastic = 0.3                # `stochastic` is in sqrt(keV) and `constant` is a number; each defaults to 0
    constant   = 0.0

    [bins]
    intervals_kev = [[4, 9], [9, 14]]   # measured energy; ascending, without overlap, gaps allowed
    background    = [1.2, 0.8]          # expected background events in each bin
    observed      = [1, 0]              # events counted

    [background_uncertainty]        # optional; without it the background is exact
    relative = 0.2                  # one number for all bins, or one per bin: one standard deviation multiplies or
                                    # divides the expected background by 1 + relative
    absolute = [0.3, 0.2]           # or in events per bin, taken as relative = absolute / background
    correlation = 1.0               # between any two bins, 0 to 1; the default 1 is one shared normalisation
    correlation_matrix = [[1, 0.5], [0.5, 1]]   # or all of them

The uncertain backgrounds are log-normal with median `background`: they can never become negative, and agree with a
Gaussian as long as the uncertainty is small.
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import Annotated, Any, Self

import numpy as np
from pydantic import (
    Field,
    NonNegativeFloat,
    NonNegativeInt,
    PositiveFloat,
    ValidationInfo,
    field_validator,
    model_validator,
)

from scanfit.errors import nearest_name
from scanfit.priors import FloatArray
from scanfit.validation import Options, check, read_toml

from .isotopes import target_names

Probability = Annotated[float, Field(ge=0.0, le=1.0)]


class Efficiency(Options):
    """Table of the efficiency against true recoil energy; linear between points, zero outside."""

    energy_kev: tuple[NonNegativeFloat, ...] = Field(min_length=2)
    value: tuple[Probability, ...]

    @field_validator("energy_kev")
    @classmethod
    def _ascending(cls, energies: tuple[float, ...]) -> tuple[float, ...]:
        for low, high in pairwise(energies):
            if not low < high:
                raise ValueError(f"energies must ascend, but {high:g} follows {low:g}")
        return energies

    @field_validator("value")
    @classmethod
    def _one_per_energy(cls, values: tuple[float, ...], info: ValidationInfo) -> tuple[float, ...]:
        _same_length("value", values, "energy_kev", info.data.get("energy_kev"))
        return values

    def at(self, energy: FloatArray) -> FloatArray:
        """Efficiency at true energies in keV."""
        return np.asarray(np.interp(energy, self.energy_kev, self.value, left=0.0, right=0.0))

    @property
    def first_accepted(self) -> float:
        """Energy in keV at which the efficiency begins to differ from zero."""
        first = next((index for index, value in enumerate(self.value) if value > 0.0), len(self.value) - 1)
        return self.energy_kev[max(first - 1, 0)]


class Resolution(Options):
    """Width of the Gaussian by which a measured energy differs from the true one."""

    noise_kev: NonNegativeFloat = 0.0
    stochastic: NonNegativeFloat = 0.0
    constant: NonNegativeFloat = 0.0

    def width(self, energy: FloatArray) -> FloatArray:
        """Return sigma(E) in keV."""
        energy = np.asarray(energy, dtype=float)
        return np.sqrt(self.noise_kev**2 + self.stochastic**2 * energy + (self.constant * energy) ** 2)

    @property
    def perfect(self) -> bool:
        """Whether measured energy is true energy."""
        return self.noise_kev == self.stochastic == self.constant == 0.0


class Bins(Options):
    """What is counted where."""

    intervals_kev: tuple[tuple[NonNegativeFloat, NonNegativeFloat], ...] = Field(min_length=1)
    background: tuple[NonNegativeFloat, ...]
    observed: tuple[NonNegativeInt, ...] | None = None

    @field_validator("intervals_kev")
    @classmethod
    def _apart(cls, intervals: tuple[tuple[float, float], ...]) -> tuple[tuple[float, float], ...]:
        for low, high in intervals:
            if not low < high:
                raise ValueError(f"a bin must have its lower edge first and some width, but one is [{low:g}, {high:g}]")
        for first, second in pairwise(intervals):
            if second[0] < first[1]:
                raise ValueError(
                    "bins must ascend and not overlap, but "
                    f"[{second[0]:g}, {second[1]:g}] follows [{first[0]:g}, {first[1]:g}]"
                )
        return intervals

    @field_validator("background", "observed")
    @classmethod
    def _one_per_bin(cls, values: tuple[float, ...] | None, info: ValidationInfo) -> tuple[float, ...] | None:
        if values is not None:
            _same_length(info.field_name or "", values, "intervals_kev", info.data.get("intervals_kev"))
        return values


class BackgroundUncertainty(Options):
    """How well the expected backgrounds are known; see the head of this module."""

    relative: tuple[NonNegativeFloat, ...] | None = None
    absolute: tuple[NonNegativeFloat, ...] | None = None
    correlation: Probability = 1.0
    correlation_matrix: tuple[tuple[float, ...], ...] | None = None

    @field_validator("relative", mode="before")
    @classmethod
    def _number_or_list(cls, relative: Any) -> Any:
        return (relative,) if isinstance(relative, int | float) else relative

    @field_validator("correlation_matrix")
    @classmethod
    def _is_correlation(cls, rows: tuple[tuple[float, ...], ...] | None) -> tuple[tuple[float, ...], ...] | None:
        if rows is None:
            return None
        if any(len(row) != len(rows) for row in rows):
            raise ValueError("must be square")
        matrix = np.array(rows)
        if not np.allclose(matrix, matrix.T) or not np.allclose(np.diag(matrix), 1.0):
            raise ValueError("must be symmetric with ones on the diagonal")
        if np.linalg.eigvalsh(matrix).min() < -1e-9:
            raise ValueError("is not a correlation matrix: it has a negative eigenvalue")
        return rows

    @model_validator(mode="after")
    def _one_way_each(self) -> Self:
        if (self.relative is None) == (self.absolute is None):
            raise ValueError("give either 'relative' or 'absolute'")
        if self.correlation_matrix is not None and "correlation" in self.model_fields_set:
            raise ValueError("give either 'correlation' or 'correlation_matrix'")
        return self


class Experiment(Options):
    """One experiment, checked. Fields are described at the head of this module."""

    title: str = Field(min_length=1)
    source: str = Field(min_length=1)
    invented: bool = False
    planned: bool = False
    exposure_tonne_year: PositiveFloat
    target: dict[str, PositiveFloat] = Field(min_length=1)
    bins: Bins
    efficiency: Efficiency
    resolution: Resolution = Resolution()
    background_uncertainty: BackgroundUncertainty | None = None

    @field_validator("target")
    @classmethod
    def _known_nuclei(cls, target: dict[str, float]) -> dict[str, float]:
        return check_target(target)

    @field_validator("bins")
    @classmethod
    def _observed_unless_planned(cls, bins: Bins, info: ValidationInfo) -> Bins:
        if info.data.get("planned") and bins.observed is not None:
            raise ValueError("a planned experiment has observed nothing: leave 'observed' out or drop 'planned'")
        if not info.data.get("planned", True) and bins.observed is None:
            raise ValueError("'observed' is required unless the experiment is 'planned'")
        return bins

    @field_validator("efficiency")
    @classmethod
    def _covers_bins(cls, efficiency: Efficiency, info: ValidationInfo) -> Efficiency:
        bins = info.data.get("bins")
        if bins is not None:
            low, high = bins.intervals_kev[0][0], bins.intervals_kev[-1][1]
            first, last = efficiency.energy_kev[0], efficiency.energy_kev[-1]
            if first > low or last < high:
                raise ValueError(
                    f"the table must cover every bin, {low:g} to {high:g} keV, but it spans {first:g} to {last:g} keV"
                )
        return efficiency

    @field_validator("background_uncertainty")
    @classmethod
    def _fits_bins(cls, uncertainty: BackgroundUncertainty, info: ValidationInfo) -> BackgroundUncertainty:
        bins = info.data.get("bins")
        if uncertainty is None or bins is None:
            return uncertainty
        if uncertainty.relative is not None and len(uncertainty.relative) > 1:
            _same_length("relative", uncertainty.relative, "bins", bins.intervals_kev)
        if uncertainty.correlation_matrix is not None:
            _same_length("correlation_matrix", uncertainty.correlation_matrix, "bins", bins.intervals_kev)
        if uncertainty.absolute is not None:
            _same_length("absolute", uncertainty.absolute, "bins", bins.intervals_kev)
            for size, expected in zip(uncertainty.absolute, bins.background, strict=True):
                if size > 0.0 and expected == 0.0:
                    raise ValueError("'absolute' must be 0 in a bin that expects no background")
        return uncertainty

    def background_loading(self) -> FloatArray:
        """Response of each bin's log background to independent standard-normal nuisances.

        Returns
        -------
        ndarray, shape (n_bins, n_nuisances)
            L in b = background exp(L z); no columns when the background is exact, one when all bins share one
            normalisation.
        """
        background = np.array(self.bins.background)
        uncertainty = self.background_uncertainty
        if uncertainty is None:
            return np.zeros((background.size, 0))
        if uncertainty.absolute is not None:
            relative = np.array(uncertainty.absolute) / np.where(background > 0.0, background, 1.0)
        else:
            relative = np.broadcast_to(np.array(uncertainty.relative), background.shape)
        spread = np.where(background > 0.0, np.log1p(relative), 0.0)
        if uncertainty.correlation_matrix is not None:
            correlation = np.array(uncertainty.correlation_matrix)
        else:
            correlation = np.full((background.size, background.size), uncertainty.correlation)
            np.fill_diagonal(correlation, 1.0)
        values, vectors = np.linalg.eigh(correlation * np.outer(spread, spread))
        kept = values > 1e-12 * max(values.max(), 1e-300)
        return np.ascontiguousarray(vectors[:, kept] * np.sqrt(values[kept]))


def read_experiment(path: Path) -> Experiment:
    """Read and check an experiment's file.

    Raises
    ------
    InputError
        With every broken rule, or if the file cannot be read.
    """
    return check(Experiment, read_toml(path), source=str(path))


def check_target(target: dict[str, float]) -> dict[str, float]:
    """Return `target`, or raise ValueError if it names a nucleus that is not known here."""
    unknown = [name for name in target if name not in target_names()]
    if unknown:
        near = [nearest_name(name, target_names()) for name in unknown]
        hints = [f"{a!r} (did you mean {b!r}?)" if b else repr(a) for a, b in zip(unknown, near, strict=True)]
        elements = ", ".join(name for name in target_names() if "-" not in name)
        raise ValueError(f"unknown element or isotope {', '.join(hints)}; elements: {elements}")
    return target


def _same_length(name: str, values: tuple[Any, ...], other: str, reference: tuple[Any, ...] | None) -> None:
    if reference is not None and len(values) != len(reference):
        raise ValueError(f"{name!r} has {len(values)} entries where {other!r} has {len(reference)}")
