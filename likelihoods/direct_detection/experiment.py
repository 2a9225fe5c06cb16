"""A direct-detection experiment as one TOML file.

Energies are nuclear-recoil energies in keV. Every key::

    title  = "..."                  # what plots and reports call it
    source = "..."                  # where the numbers come from: a paper, a data record, or how they were invented
    invented = true                 # (default false) say it wherever a result shows
    planned  = true                 # (default false) not built yet: nothing is observed, and the data are the
                                    # background-only expectation
    exposure_tonne_year = 4.0       # positive; a year has 365.25 days
    target = { Xe = 1 }             # numbers of atoms by element (natural abundances) or isotope ("Xe-131"); a
                                    # compound is written as its formula, { Ca = 1, W = 1, O = 4 }
    observing_days = [60, 210]      # optional; first and last day of the year (1 January is 1) of data taking; past
                                    # New Year if the first is larger. The Earth's speed follows; else: mean of a year
    neutrinos = ["boron-8"]         # optional; solar and other neutrinos to add to the background, out of boron-8, hep,
                                    # supernovae, atmospheric. Leave out what `background` already holds.

    [quenching]                     # optional; then bins, events and resolution are in electron-equivalent keV, which
    lindhard_k = 0.157              # is the quenching factor times the true energy. This formula needs one element;
    energy_kev = [1, 100]           # otherwise a table of the factor against true energy, straight lines between. It
    factor     = [0.15, 0.3]        # must cover the efficiency's table; with a formula there, every bin

    [efficiency]                    # probability to keep a recoil, against its true energy; straight lines between
    energy_kev = [3, 6, 60]         # points. It must cover every bin, and is zero outside the table: nothing is
    value      = [0, 0.8, 0.85]     # extrapolated. Energies ascend, values lie in [0, 1].
    plateau     = 0.85              # or, instead of that table, plateau/2 (1 + erf((E - half_at)/(sqrt(2) width)))
    half_at_kev = 4.0               # at any energy E: plateau in (0, 1], half of it at half_at_kev, and width_kev > 0
    width_kev   = 1.2               # the standard deviation of the Gaussian whose integral the threshold is

    [resolution]                    # optional; without it measured energy is true energy. Gaussian of width
    noise_kev  = 0.2                # sigma(E) = sqrt(noise_kev^2 + stochastic^2 E + (constant E)^2), E in keV, so that
    stochastic = 0.3                # `stochastic` is in sqrt(keV) and `constant` is a number; each defaults to 0
    constant   = 0.0

    [bins]
    intervals_kev = [[4, 9], [9, 14]]   # measured energy; ascending, without overlap, gaps allowed
    background    = [1.2, 0.8]          # expected background events in each bin
    observed      = [1, 0]              # events counted

    [events]                        # instead of [bins]: single events and the shape of their background
    window_kev   = [4, 50]          # measured energies that were looked at
    energies_kev = [5.1, 17.3]      # one entry an event, all in the window; may be empty
    background   = 2.4              # expected background events in the window
    background_shape = { energy_kev = [4, 50], density = [2, 1] }   # optional, else flat; straight lines, any
                                    # normalisation; it must cover the window

    [background_uncertainty]        # optional; without it the background is exact
    relative = 0.2                  # one number for all bins, or one per bin: one standard deviation multiplies or
                                    # divides the expected background by 1 + relative
    absolute = [0.3, 0.2]           # or in events per bin, taken as relative = absolute / background
    correlation = 1.0               # between any two bins, 0 to 1; the default 1 is one shared normalisation
    correlation_matrix = [[1, 0.5], [0.5, 1]]   # or all of them

For events the background's uncertainty is one number, `relative` or `absolute`.

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

from .detector import Efficiency, Probability, Quenching, Resolution, same_length, true_energy, visible_energy
from .halo import earth_speed_excess
from .isotopes import PROTON_NUMBERS, mass_fractions, target_names
from .neutrinos import Source

DayOfYear = Annotated[int, Field(ge=1, le=366)]


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
            same_length(info.field_name or "", values, "intervals_kev", info.data.get("intervals_kev"))
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


class BackgroundShape(Options):
    """Relative density of background events against measured energy."""

    energy_kev: tuple[NonNegativeFloat, ...] = Field(min_length=2)
    density: tuple[NonNegativeFloat, ...]

    @field_validator("density")
    @classmethod
    def _positive_somewhere(cls, density: tuple[float, ...], info: ValidationInfo) -> tuple[float, ...]:
        energies = info.data.get("energy_kev")
        same_length("density", density, "energy_kev", energies)
        if max(density) == 0.0:
            raise ValueError("must not be zero everywhere")
        if energies is not None and any(low >= high for low, high in pairwise(energies)):
            raise ValueError("the energies beside it must ascend")
        return density


class Events(Options):
    """Single events in a window."""

    window_kev: tuple[NonNegativeFloat, NonNegativeFloat]
    background: NonNegativeFloat
    background_shape: BackgroundShape | None = None
    energies_kev: tuple[NonNegativeFloat, ...] | None = None

    @field_validator("window_kev")
    @classmethod
    def _has_width(cls, window: tuple[float, float]) -> tuple[float, float]:
        if not window[0] < window[1]:
            raise ValueError("the lower end must come first")
        return window

    @field_validator("background_shape", "energies_kev")
    @classmethod
    def _in_window(cls, value: Any, info: ValidationInfo) -> Any:
        window = info.data.get("window_kev")
        if value is None or window is None:
            return value
        low, high = window
        if isinstance(value, BackgroundShape):
            if value.energy_kev[0] > low or value.energy_kev[-1] < high:
                raise ValueError(f"must cover the window, {low:g} to {high:g} keV")
        elif any(not low <= energy <= high for energy in value):
            raise ValueError(f"every event must lie in the window, {low:g} to {high:g} keV")
        return value

    def background_density(self, energy: FloatArray) -> FloatArray:
        """Expected background events per keV at measured energies."""
        low, high = self.window_kev
        if self.background_shape is None:
            return np.full(np.shape(energy), self.background / (high - low))
        shape = self.background_shape
        cuts = np.unique([low, high, *(e for e in shape.energy_kev if low < e < high)])
        norm = float(np.trapezoid(np.interp(cuts, shape.energy_kev, shape.density), cuts))
        return np.asarray(np.interp(energy, shape.energy_kev, shape.density) * self.background / norm)


class Experiment(Options):
    """One experiment, checked. Fields are described at the head of this module."""

    title: str = Field(min_length=1)
    source: str = Field(min_length=1)
    invented: bool = False
    planned: bool = False
    exposure_tonne_year: PositiveFloat
    target: dict[str, PositiveFloat] = Field(min_length=1)
    observing_days: tuple[DayOfYear, DayOfYear] | None = None
    neutrinos: tuple[Source, ...] = ()
    quenching: Quenching | None = None
    bins: Bins | None = None
    events: Events | None = None
    efficiency: Efficiency
    resolution: Resolution = Resolution()
    background_uncertainty: BackgroundUncertainty | None = None

    @field_validator("target")
    @classmethod
    def _known_nuclei(cls, target: dict[str, float]) -> dict[str, float]:
        return check_target(target)

    @field_validator("quenching")
    @classmethod
    def _one_element(cls, quenching: Quenching | None, info: ValidationInfo) -> Quenching | None:
        target = info.data.get("target", {})
        elements = {name.partition("-")[0] for name in target}
        if quenching is not None and quenching.lindhard_k is not None and len(elements) > 1:
            raise ValueError("'lindhard_k' describes recoils in one element; give a table for a compound")
        return quenching

    @field_validator("bins", "events")
    @classmethod
    def _observed_unless_planned(cls, data: Bins | Events | None, info: ValidationInfo) -> Bins | Events | None:
        if data is None:
            return None
        name = "observed" if isinstance(data, Bins) else "energies_kev"
        seen = getattr(data, name) is not None
        if info.data.get("planned") and seen:
            raise ValueError(f"a planned experiment has observed nothing: leave {name!r} out or drop 'planned'")
        if not info.data.get("planned", True) and not seen:
            raise ValueError(f"{name!r} is required unless the experiment is 'planned'")
        return data

    @field_validator("efficiency")
    @classmethod
    def _covers_bins(cls, efficiency: Efficiency, info: ValidationInfo) -> Efficiency:
        intervals = _intervals(info.data.get("bins"), info.data.get("events"))
        quenching, target = info.data.get("quenching"), info.data.get("target")
        if not intervals or target is None:
            return efficiency
        ends = np.array([intervals[0][0], intervals[-1][1]])
        low, high = true_energy(ends, quenching, _charge(target))
        known = quenching.energy_kev if quenching is not None else None
        if efficiency.energy_kev is not None:
            first, last = efficiency.energy_kev[0], efficiency.energy_kev[-1]
            if known is not None and (known[0] > first or known[-1] < last):
                raise ValueError(
                    f"the table spans {first:g} to {last:g} keV, but quenching is known from {known[0]:g} to "
                    f"{known[-1]:g} keV only"
                )
            if first > low * (1.0 + 1e-6) or last < high * (1.0 - 1e-6):
                raise ValueError(
                    f"the table must cover every bin, {low:g} to {high:g} keV, but it spans {first:g} to {last:g} keV"
                )
        elif known is not None and (known[0] > low * (1.0 + 1e-6) or known[-1] < high * (1.0 - 1e-6)):
            raise ValueError(
                f"quenching must be known in every bin, {low:g} to {high:g} keV, but its table spans {known[0]:g} to "
                f"{known[-1]:g} keV"
            )
        return efficiency

    @field_validator("background_uncertainty")
    @classmethod
    def _fits_data(cls, uncertainty: BackgroundUncertainty, info: ValidationInfo) -> BackgroundUncertainty:
        bins, events = info.data.get("bins"), info.data.get("events")
        if uncertainty is None or (bins is None and events is None):
            return uncertainty
        expected: tuple[float, ...] = (events.background,) if events is not None else getattr(bins, "background", ())
        reference = expected if bins is not None else (0,)
        other = "bins" if bins is not None else "the one background of [events]"
        if uncertainty.relative is not None and len(uncertainty.relative) > 1:
            same_length("relative", uncertainty.relative, other, reference)
        if uncertainty.correlation_matrix is not None:
            same_length("correlation_matrix", uncertainty.correlation_matrix, other, reference)
        if uncertainty.absolute is not None:
            same_length("absolute", uncertainty.absolute, other, reference)
            for size, events_expected in zip(uncertainty.absolute, expected, strict=True):
                if size > 0.0 and events_expected == 0.0:
                    raise ValueError("'absolute' must be 0 in a bin that expects no background")
        return uncertainty

    @model_validator(mode="after")
    def _one_kind_of_data(self) -> Self:
        if (self.bins is None) == (self.events is None):
            raise ValueError("give either [bins] or [events]")
        return self

    @property
    def intervals_kev(self) -> tuple[tuple[float, float], ...]:
        """Bins of measured energy, or the one window of an event list."""
        return _intervals(self.bins, self.events)

    def visible_energy(self, energy: FloatArray) -> FloatArray:
        """Mean measured energy, in keV, of recoils of these true energies."""
        return visible_energy(np.asarray(energy, dtype=float), self.quenching, _charge(self.target))

    def true_energy(self, visible: FloatArray) -> FloatArray:
        """Inverse of `visible_energy`."""
        return true_energy(np.asarray(visible, dtype=float), self.quenching, _charge(self.target))

    @property
    def accepted_kev(self) -> tuple[float, float]:
        """True energies between which recoils are kept: elsewhere the efficiency is zero, or quenching unknown."""
        first, last = self.efficiency.range_kev
        known = self.quenching.energy_kev if self.quenching is not None else None
        return (first, last) if known is None else (max(first, known[0]), min(last, known[-1]))

    def extra_earth_speed(self) -> float:
        """Speed in km/s by which the Earth is faster during data taking than in the mean over a year."""
        return 0.0 if self.observing_days is None else earth_speed_excess(*self.observing_days)

    def background_loading(self) -> FloatArray:
        """Response of each bin's log background to independent standard-normal nuisances.

        Returns
        -------
        ndarray, shape (n_bins, n_nuisances)
            L in b = background exp(L z); no columns when the background is exact, one when all bins share one
            normalisation. An event list counts as one bin.
        """
        data = self.bins or self.events
        background = np.atleast_1d(np.array(data.background if data is not None else (), dtype=float))
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


def _intervals(bins: Bins | None, events: Events | None) -> tuple[tuple[float, float], ...]:
    if bins is not None:
        return bins.intervals_kev
    return () if events is None else (events.window_kev,)


def _charge(target: dict[str, float]) -> int:
    """Charge of the nuclei of a target; only the quenching of a target of one element asks for it."""
    return PROTON_NUMBERS[next(iter(mass_fractions(target))).element]
