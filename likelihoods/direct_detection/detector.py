"""Parts of an experiment's file that say how a recoil is seen: efficiency, quenching, resolution."""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Any, Self

import numpy as np
from pydantic import Field, NonNegativeFloat, PositiveFloat, ValidationInfo, field_validator, model_validator

from scanfit.priors import FloatArray
from scanfit.validation import Options

Probability = Annotated[float, Field(ge=0.0, le=1.0)]
QuenchingFactor = Annotated[float, Field(gt=0.0, le=1.0)]


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
        same_length("value", values, "energy_kev", info.data.get("energy_kev"))
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


def same_length(name: str, values: tuple[Any, ...], other: str, reference: tuple[Any, ...] | None) -> None:
    """Raise ValueError unless two arrays of one file have the same number of entries."""
    if reference is not None and len(values) != len(reference):
        raise ValueError(f"{name!r} has {len(values)} entries where {other!r} has {len(reference)}")
