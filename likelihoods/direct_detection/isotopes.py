"""Nuclei of the targets in use: charge, mass number and natural abundance.

Abundances are number fractions of the standard representative composition of the elements, quoted from memory; the
tests check that each element sums to one and reproduces its standard atomic weight to 0.1 %.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from scanfit.priors import FloatArray

from ..constants import ATOMIC_MASS_UNIT

KEV: Final = 1e-6
"""One keV in GeV: recoil energies are quoted in keV, physics is done in GeV."""

PROTON_NUMBERS: Final = {
    "O": 8, "F": 9, "Na": 11, "Si": 14, "Ar": 18, "Ca": 20, "Ge": 32, "I": 53, "Xe": 54, "W": 74,
}  # fmt: skip

NATURAL_ABUNDANCES: Final[Mapping[str, Mapping[int, float]]] = {
    "O": {16: 0.99757, 17: 0.00038, 18: 0.00205},
    "F": {19: 1.0},
    "Na": {23: 1.0},
    "Si": {28: 0.92223, 29: 0.04685, 30: 0.03092},
    "Ar": {36: 0.003336, 38: 0.000629, 40: 0.996035},
    "Ca": {40: 0.96941, 42: 0.00647, 43: 0.00135, 44: 0.02086, 46: 0.00004, 48: 0.00187},
    "Ge": {70: 0.2057, 72: 0.2745, 73: 0.0775, 74: 0.3650, 76: 0.0773},
    "I": {127: 1.0},
    "Xe": {
        124: 0.000952, 126: 0.000890, 128: 0.019102, 129: 0.264006, 130: 0.040710,
        131: 0.212324, 132: 0.269086, 134: 0.104357, 136: 0.088573,
    },
    "W": {180: 0.0012, 182: 0.2650, 183: 0.1431, 184: 0.3064, 186: 0.2843},
}  # fmt: skip
"""Number fractions by element and mass number."""


@dataclass(frozen=True, order=True)
class Isotope:
    """One kind of nucleus.

    Parameters
    ----------
    element : str
        Chemical symbol.
    mass_number : int
        Protons and neutrons together.
    """

    element: str
    mass_number: int

    @property
    def name(self) -> str:
        """For example ``Xe-131``."""
        return f"{self.element}-{self.mass_number}"

    @property
    def protons(self) -> int:
        """Charge number Z."""
        return PROTON_NUMBERS[self.element]

    @property
    def neutrons(self) -> int:
        """Neutron number A - Z."""
        return self.mass_number - self.protons

    @property
    def mass(self) -> float:
        """Mass in GeV, taken as A atomic mass units (good to 0.1 %)."""
        return self.mass_number * ATOMIC_MASS_UNIT

    def momentum_transfer(self, energy: FloatArray) -> FloatArray:
        """Momentum transfer q = sqrt(2 m_A E) in GeV for recoil energies in keV."""
        return np.sqrt(2.0 * self.mass * np.asarray(energy, dtype=float) * KEV)


def natural_isotopes(element: str) -> tuple[Isotope, ...]:
    """Isotopes of `element` in order of mass number."""
    return tuple(Isotope(element, mass_number) for mass_number in sorted(NATURAL_ABUNDANCES[element]))


def target_names() -> tuple[str, ...]:
    """Every name that a target may hold: elements first, then single isotopes."""
    isotopes = [isotope.name for element in NATURAL_ABUNDANCES for isotope in natural_isotopes(element)]
    return (*NATURAL_ABUNDANCES, *isotopes)


def mass_fractions(target: Mapping[str, float]) -> dict[Isotope, float]:
    """Share of each isotope in the target's mass.

    Parameters
    ----------
    target : mapping of str to float
        Relative numbers of atoms by element (``"Xe"``, natural abundances) or isotope (``"Xe-131"``); a compound is
        written as its formula, ``{"Ca": 1, "W": 1, "O": 4}``.

    Returns
    -------
    dict of Isotope to float
        Mass fractions, which sum to one: w_i = x_i A_i / sum_j x_j A_j with x the number fraction.
    """
    atoms: dict[Isotope, float] = {}
    for name, amount in target.items():
        element, _, mass_number = name.partition("-")
        shares = {int(mass_number): 1.0} if mass_number else NATURAL_ABUNDANCES[element]
        for number, share in shares.items():
            isotope = Isotope(element, number)
            atoms[isotope] = atoms.get(isotope, 0.0) + amount * share
    total = sum(count * isotope.mass for isotope, count in atoms.items())
    return {isotope: atoms[isotope] * isotope.mass / total for isotope in sorted(atoms)}
