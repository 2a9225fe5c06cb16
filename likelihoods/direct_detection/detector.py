"""Parts of an experiment's file that say how a recoil is seen: efficiency, quenching, resolution."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Annotated, Any, Final, Self

import numpy as np
from pydantic import Field, NonNegativeFloat, PositiveFloat, ValidationInfo, field_validator, model_validator
from scipy.special import ndtr

from scanfit.priors import FloatArray
from scanfit.validation import Options

Probability = Annotated[float, Field(ge=0.0, le=1.0)]
QuenchingFactor = Annotated[float, Field(gt=0.0, le=1.0)]

_TABLE: Final = ("energy_kev", "value")
_THRESHOLD: Final = ("plateau", "half_at_kev", "width_kev")
_THRESHOLD_REACH: Final = 8
"""Widths from its middle at which a threshold has ended: 1e-15 of the plateau is missing, or left."""


class Efficiency(Options):
    """Efficiency against true recoil energy: a table, linear between points and zero outside, or a smooth threshold.

    The threshold is that of a Gaussian-smeared cut, plateau/2 (1 + erf((E - half_at)/(sqrt(2) width))), at any energy.
    """

    energy_kev: tuple[NonNegativeFloat, ...] | None = Field(default=None, min_length=2)
    value: tuple[Probability, ...] | None = None
    plateau: Annotated[float, Field(gt=0.0, le=1.0)] | None = None
    half_at_kev: NonNegativeFloat | None = None
    width_kev: PositiveFloat | None = None

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
        same_length("value", values, "energy_kev", info.data.get("energy_kev"))
        return values

    @model_validator(mode="after")
    def _one_way(self) -> Self:
        given = self.model_fields_set
        ways = [way for way in (_TABLE, _THRESHOLD) if not given.isdisjoint(way)]
        if len(ways) != 1 or not given.issuperset(ways[0]):
            absent = ", ".join(repr(key) for key in ways[0] if key not in given) if len(ways) == 1 else ""
            missing = f"; missing: {absent}" if absent else ""
            raise ValueError(
                "give either a table, 'energy_kev' with 'value', or a formula, 'plateau' with 'half_at_kev' and "
                f"'width_kev'{missing}"
            )
        return self

    def at(self, energy: FloatArray) -> FloatArray:
        """Efficiency at true energies in keV."""
        if self.energy_kev is not None:
            return np.asarray(np.interp(energy, self.energy_kev, self.value or (), left=0.0, right=0.0))
        plateau, half_at, width = self._threshold
        return np.asarray(plateau * ndtr((np.asarray(energy, dtype=float) - half_at) / width))

    @property
    def range_kev(self) -> tuple[float, float]:
        """Energies in keV at which the efficiency begins and ceases to differ from zero."""
        if self.energy_kev is None:
            _, half_at, width = self._threshold
            return max(half_at - _THRESHOLD_REACH * width, 0.0), math.inf
        first = next((index for index, value in enumerate(self.value or ()) if value > 0.0), len(self.energy_kev) - 1)
        return self.energy_kev[max(first - 1, 0)], self.energy_kev[-1]

    @property
    def bends_kev(self) -> FloatArray:
        """Energies in keV between which the efficiency is smooth enough for a few quadrature nodes, shape (n,)."""
        if self.energy_kev is not None:
            return np.array(self.energy_kev)
        _, half_at, width = self._threshold
        return half_at + width * np.linspace(-_THRESHOLD_REACH, _THRESHOLD_REACH, 2 * _THRESHOLD_REACH + 1)

    @property
    def _threshold(self) -> tuple[float, float, float]:
        assert self.plateau is not None  # the schema holds that what is no table is a whole formula
        assert self.half_at_kev is not None
        assert self.width_kev is not None
        return self.plateau, self.half_at_kev, self.width_kev


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


class Quenching(Options):
    """Share of a recoil's energy that is seen, against the true energy: a table or the formula of Lindhard.

    The formula, for recoils in their own element of charge Z, is Q = k g/(1 + k g) with g = 3 e^0.15 + 0.7 e^0.6 + e
    and e = 11.5 Z^(-7/3) E/keV (Astropart. Phys. 6 (1996) 87).
    """

    energy_kev: tuple[NonNegativeFloat, ...] | None = Field(default=None, min_length=2)
    factor: tuple[QuenchingFactor, ...] | None = None
    lindhard_k: PositiveFloat | None = None

    @model_validator(mode="after")
    def _one_way(self) -> Self:
        table = self.energy_kev is not None and self.factor is not None
        if (self.energy_kev is None) != (self.factor is None) or table == (self.lindhard_k is not None):
            raise ValueError("give either 'energy_kev' with 'factor', or 'lindhard_k'")
        if self.energy_kev is not None and self.factor is not None:
            same_length("factor", self.factor, "energy_kev", self.energy_kev)
            seen = [energy * factor for energy, factor in zip(self.energy_kev, self.factor, strict=True)]
            for values in (self.energy_kev, seen):
                for low, high in pairwise(values):
                    if not low < high:
                        raise ValueError(f"true and seen energies must ascend, but {high:g} keV follows {low:g} keV")
        return self

    def factor_at(self, energy: FloatArray, charge: int) -> FloatArray:
        """Quenching factor at true energies in keV; a table goes on as a constant, where no recoil is accepted."""
        if self.lindhard_k is None:
            return np.asarray(np.interp(energy, self.energy_kev or (), self.factor or ()))
        scaled = 11.5 * np.maximum(energy, 1e-9) * charge ** (-7.0 / 3.0)
        g = 3.0 * scaled**0.15 + 0.7 * scaled**0.6 + scaled
        return np.asarray(self.lindhard_k * g / (1.0 + self.lindhard_k * g))


def visible_energy(energy: FloatArray, quenching: Quenching | None, charge: int) -> FloatArray:
    """Mean measured energy, in keV, of recoils of nuclei of this charge with these true energies."""
    return energy if quenching is None else energy * quenching.factor_at(energy, charge)


def true_energy(visible: FloatArray, quenching: Quenching | None, charge: int) -> FloatArray:
    """Invert `visible_energy`, which rises, by bisection to the last digit."""
    if quenching is None:
        return visible
    low, high = np.zeros_like(visible), 1e3 * np.maximum(visible, 1e-3)
    for _ in range(80):
        middle = 0.5 * (low + high)
        below = visible_energy(middle, quenching, charge) < visible
        low, high = np.where(below, middle, low), np.where(below, high, middle)
    return np.asarray(np.where(visible > 0.0, high, 0.0))


def same_length(name: str, values: tuple[Any, ...], other: str, reference: tuple[Any, ...] | None) -> None:
    """Raise ValueError unless two arrays of one file have the same number of entries."""
    if reference is not None and len(values) != len(reference):
        raise ValueError(f"{name!r} has {len(values)} entries where {other!r} has {len(reference)}")
