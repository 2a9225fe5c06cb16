"""A published limit curve as a term: cross section excluded at each mass, turned into an approximate likelihood.

A curve tells where a likelihood has fallen by a known amount, nothing else, so its shape must be assumed:

* ``poisson``: one bin without background that saw nothing, ln L = ln(1 - level) sigma/sigma_level, for 90 % -2.303
  sigma/sigma_90;
* ``half-gaussian``: ln L = -(k/2) (sigma/sigma_level)^2, where k is the squared normal quantile of `level`, one-sided
  (1.642 at 90 %) or two-sided (2.706), as `crossing` says.

The two differ by a quarter to a half in the cross section they disfavour as strongly. All that is known to a count,
such as other recoil spectra and other halo speeds, is lost; only the local density can be rescaled. The file::

    title  = "..."
    source = "..."                      # the paper
    invented = true                     # (default false) say it wherever a result shows
    interaction = "spin-independent"    # or "spin-dependent-proton", "spin-dependent-neutron"
    level = 0.90                        # (default) confidence level of the curve
    likelihood = "half-gaussian"        # or "poisson"
    crossing = "one-sided"              # (default) or "two-sided": the curve is where 2 ln L falls by 2.71 at 90 %
    target = { Xe = 1 }                 # nuclei, to weigh protons against neutrons where couplings differ
    local_density = 0.3                 # (default) GeV/cm^3 that the paper assumed
    outside = "reject"                  # (default) a mass outside the table cannot be evaluated; "no-limit": ln L = 0

    [table]                             # interpolated linearly in both logarithms; at least two masses, ascending
    mass_gev = [6, 10, 30, 100, 1000]
    cross_section_cm2 = [1e-44, 1e-46, 8e-48, 1e-47, 9e-47]
    # or, instead of both:
    csv = "curve.csv"                   # two columns, mass in GeV and cross section in cm^2; lines that begin with #
                                        # and a header line are skipped; relative to this file
"""

from __future__ import annotations

import math
from itertools import pairwise
from pathlib import Path
from typing import Annotated, Final, Literal, Self

import numpy as np
from pydantic import Field, PositiveFloat, field_validator, model_validator
from scipy.special import ndtri

from scanfit.errors import InputError, PointError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options, check, read_toml

from ..candidate import NucleonCouplings
from ..constants import GEV_M2_TO_CM2, NEUTRON_MASS, PROTON_MASS
from .columns import read_columns
from .experiment import check_target
from .isotopes import mass_fractions
from .spectrum import amplitudes_squared, nuclear_responses

Interaction = Literal["spin-independent", "spin-dependent-proton", "spin-dependent-neutron"]

UNIT_COUPLINGS: Final[dict[Interaction, NucleonCouplings]] = {
    "spin-independent": NucleonCouplings(f_proton=1.0, f_neutron=1.0),
    "spin-dependent-proton": NucleonCouplings(a_proton=1.0),
    "spin-dependent-neutron": NucleonCouplings(a_neutron=1.0),
}


class CurveTable(Options):
    """The curve, inline or in a file of its own."""

    mass_gev: tuple[PositiveFloat, ...] | None = Field(default=None, min_length=2)
    cross_section_cm2: tuple[PositiveFloat, ...] | None = None
    csv: str | None = None

    @model_validator(mode="after")
    def _one_way(self) -> Self:
        inline = self.mass_gev is not None and self.cross_section_cm2 is not None
        partly = self.mass_gev is not None or self.cross_section_cm2 is not None
        if inline == (self.csv is not None) or (partly and not inline):
            raise ValueError("give either 'mass_gev' with 'cross_section_cm2', or 'csv'")
        if self.mass_gev is not None and self.cross_section_cm2 is not None:
            if len(self.mass_gev) != len(self.cross_section_cm2):
                raise ValueError(
                    f"'mass_gev' has {len(self.mass_gev)} entries and "
                    f"'cross_section_cm2' has {len(self.cross_section_cm2)}"
                )
            for low, high in pairwise(self.mass_gev):
                if not low < high:
                    raise ValueError(f"masses must ascend, but {high:g} follows {low:g}")
        return self


class PublishedLimit(Options):
    """One published curve, checked. Fields are described at the head of this module."""

    title: str = Field(min_length=1)
    source: str = Field(min_length=1)
    invented: bool = False
    interaction: Interaction
    level: Annotated[float, Field(gt=0.5, lt=1.0)] = 0.90
    likelihood: Literal["poisson", "half-gaussian"]
    crossing: Literal["one-sided", "two-sided"] = "one-sided"
    target: dict[str, PositiveFloat] = Field(min_length=1)
    local_density: PositiveFloat = 0.3
    outside: Literal["reject", "no-limit"] = "reject"
    table: CurveTable

    @field_validator("target")
    @classmethod
    def _known_nuclei(cls, target: dict[str, float]) -> dict[str, float]:
        return check_target(target)

    @property
    def masses(self) -> FloatArray:
        """Masses of the curve in GeV."""
        return np.array(self.table.mass_gev)

    @property
    def cross_sections(self) -> FloatArray:
        """Excluded cross sections in cm^2."""
        return np.array(self.table.cross_section_cm2)

    def at(self, mass: float) -> float | None:
        """Excluded cross section in cm^2; None outside the table where the file says that nothing is known there.

        Raises
        ------
        PointError
            Outside the table, unless the file says otherwise.
        """
        masses = self.masses
        if not masses[0] <= mass <= masses[-1]:
            if self.outside == "no-limit":
                return None
            raise PointError(
                f"{self.title}: the limit curve spans {masses[0]:g} to {masses[-1]:g} GeV, the mass is {mass:g} GeV"
            )
        return math.exp(np.interp(math.log(mass), np.log(masses), np.log(self.cross_sections)))

    @property
    def curvature(self) -> float:
        """Fall of 2 ln L at the curve in the half-Gaussian form."""
        level = self.level if self.crossing == "one-sided" else 0.5 * (1.0 + self.level)
        return float(ndtri(level)) ** 2

    @property
    def events_at_limit(self) -> float:
        """Expected events at the curve in the Poisson form."""
        return -math.log1p(-self.level)


class EffectiveCrossSection:
    """Cross section on one nucleon that would give the same rate at small recoil in the curve's interaction.

    Parameters
    ----------
    target : mapping
        As in an experiment's file.
    interaction : str
        What the curve is about.

    Raises
    ------
    InputError
        If no nucleus of the target takes part.
    """

    def __init__(self, target: dict[str, float], interaction: Interaction) -> None:
        self.isotopes = mass_fractions(target)
        self.interaction = interaction
        at_rest = [nuclear_responses(np.zeros(1), isotope)[:, 0] for isotope in self.isotopes]
        self._weights = np.array(list(self.isotopes.values()))[:, None] * np.array(at_rest)
        coherent = interaction == "spin-independent"
        self._weights[:, 1:] *= not coherent
        self._weights[:, 0] *= coherent
        self._unit = self._response(UNIT_COUPLINGS[interaction])
        if not self._unit > 0.0:
            raise InputError([Problem("target", f"has no known nucleus for {interaction} scattering")])

    def _response(self, couplings: NucleonCouplings) -> float:
        amplitudes = np.array([amplitudes_squared(isotope, couplings) for isotope in self.isotopes])
        return float((amplitudes * self._weights).sum())

    def __call__(self, mass: float, couplings: NucleonCouplings) -> float:
        """Return the cross section in cm^2."""
        nucleon = NEUTRON_MASS if self.interaction == "spin-dependent-neutron" else PROTON_MASS
        reduced = mass * nucleon / (mass + nucleon)
        strength = 4.0 if self.interaction == "spin-independent" else 12.0
        coupling_squared = self._response(couplings) / self._unit
        return strength / math.pi * reduced**2 * coupling_squared * GEV_M2_TO_CM2


def read_published_limit(path: Path) -> tuple[PublishedLimit, tuple[Path, ...]]:
    """Read and check a curve's file, and the table beside it; return the curve and the files read.

    Raises
    ------
    InputError
        With every broken rule, or if a file cannot be read.
    """
    found = check(PublishedLimit, read_toml(path), source=str(path))
    if found.table.csv is None:
        return found, (path,)
    table_path = path.parent / found.table.csv
    masses, cross_sections = read_columns(table_path, "table.csv", "mass in GeV and cross section in cm^2")
    table = check(
        CurveTable, {"mass_gev": masses, "cross_section_cm2": cross_sections}, where="table", source=str(table_path)
    )
    return found.model_copy(update={"table": table}), (path, table_path)
