"""Recoil spectra before any detector.

The rate per target mass of a nucleus with mass fraction w is

    dR/dE = w (rho_0 / m) R_A(E) eta(v_min(E)),      v_min = sqrt(m_A E / 2) / mu_A,
    R_A(E) = (2/pi) [Z f_p + (A-Z) f_n]^2 F^2(E) + 8/(2J+1) [a_0^2 S_00 + a_0 a_1 S_01 + a_1^2 S_11]

where R_A = sigma_A F^2/(2 mu_A^2) does not contain the dark-matter mass. Interactions suppressed by the momentum
transfer bring further terms with q^2 = 2 m_A E or its square; in those suppressed by velocity zeta (see `halo`) over
c^2 takes the place of eta.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Final

import numpy as np

from scanfit.priors import FloatArray

from ..constants import GEV_M2_TO_CM2, GEV_TO_GRAM, SPEED_OF_LIGHT_CM_S, SPEED_OF_LIGHT_KM_S
from .form_factor import helm_form_factor_squared
from .halo import Halo
from .isotopes import KEV, Isotope, mass_fractions
from .spin_dependent import nuclear_spin, structure_functions

if TYPE_CHECKING:
    from ..candidate import NucleonCouplings

SECONDS_PER_YEAR: Final = 365.25 * 86400.0
GRAMS_PER_TONNE: Final = 1e6
RATE_UNIT: Final = (
    GEV_M2_TO_CM2 * SPEED_OF_LIGHT_KM_S * SPEED_OF_LIGHT_CM_S * KEV
    * SECONDS_PER_YEAR * GRAMS_PER_TONNE / GEV_TO_GRAM
)  # fmt: skip
"""Turns (rho_0/m [cm^-3]) R_A [GeV^-4] eta [s/km] into events per tonne-year and keV."""

RESPONSES: Final = 4
"""Ways a nucleus responds: spin-independent, and spin-dependent with S_00, S_01, S_11."""


def differential_rate(
    energy: FloatArray, mass: float, couplings: NucleonCouplings, halo: Halo, target: Mapping[str, float]
) -> FloatArray:
    """Recoil spectrum before any detector effect.

    Parameters
    ----------
    energy : ndarray, shape (n,)
        Recoil energies in keV.
    mass : float
        Dark-matter mass in GeV.
    couplings : NucleonCouplings
        GeV^-2.
    halo : Halo
        Density and speeds.
    target : mapping of str to float
        Numbers of atoms by element or isotope; see `isotopes.mass_fractions`.

    Returns
    -------
    ndarray, shape (n,)
        Events per tonne-year and keV.
    """
    energy = np.asarray(energy, dtype=float)
    table = coupling_table(couplings)
    rate = np.zeros_like(energy)
    for isotope, fraction in mass_fractions(target).items():
        responses = nuclear_responses(energy, isotope)
        square = isotope.momentum_transfer(energy) ** 2
        plain, f_momentum, f_velocity, a_momentum, a_momentum_squared, a_velocity = (
            np.array(row) for row in _by_kind(isotope, table)
        )
        still = plain @ responses + (f_momentum @ responses + a_momentum @ responses) * square
        still = still + (a_momentum_squared @ responses) * square**2
        moving = (f_velocity + a_velocity) @ responses
        speeds = minimum_speed_per_root_energy(isotope.mass, mass) * np.sqrt(energy)
        rate += fraction * still * halo.mean_inverse_speed(speeds)
        if moving.any():
            rate += fraction * moving * halo.mean_transverse_speed(speeds) / SPEED_OF_LIGHT_KM_S**2
    return np.asarray(RATE_UNIT * halo.local_density / mass * rate)


def nuclear_responses(energy: FloatArray, isotope: Isotope) -> FloatArray:
    """Responses that multiply (f_A^2, a_0^2, a_0 a_1, a_1^2) in R_A(E), shape (`RESPONSES`, n)."""
    spin_factor = 8.0 / (2.0 * nuclear_spin(isotope) + 1.0)
    coherent = 2.0 / math.pi * helm_form_factor_squared(energy, isotope)
    return np.vstack([coherent, spin_factor * structure_functions(energy, isotope)])


def amplitudes_squared(isotope: Isotope, couplings: NucleonCouplings) -> FloatArray:
    """Factors of `nuclear_responses`, shape (`RESPONSES`,), of the unsuppressed couplings."""
    coherent = np.array(_coherent(isotope, couplings.f_proton, couplings.f_neutron))
    return np.asarray(coherent + np.array(_spins(couplings.a_proton, couplings.a_neutron)))


def coupling_table(couplings: NucleonCouplings) -> FloatArray:
    """Couplings as an array, shape (7, 2), columns proton and neutron.

    Rows: f, a, f_momentum, f_velocity, a_momentum, a_momentum_squared, a_velocity.
    """
    table = np.zeros((7, 2))
    table[0, 0], table[0, 1] = couplings.f_proton, couplings.f_neutron
    table[1, 0], table[1, 1] = couplings.a_proton, couplings.a_neutron
    if couplings.suppressed is not None:
        # The fields stand in the order of the rows, proton before neutron.
        table[2:] = np.reshape(list(vars(couplings.suppressed).values()), (5, 2))
    return table


def minimum_speed_per_root_energy(nuclear_mass: float, mass: float) -> float:
    """Minimum speed in km/s of a recoil of one keV; it grows as the root of the energy."""
    reduced_mass = mass * nuclear_mass / (mass + nuclear_mass)
    return SPEED_OF_LIGHT_KM_S * math.sqrt(0.5 * nuclear_mass * KEV) / reduced_mass


def _by_kind(isotope: Isotope, table: FloatArray) -> list[list[float]]:
    """Factors of `nuclear_responses` for: unsuppressed, f_momentum, f_velocity, a_momentum, its square, a_velocity."""
    plain = [x + y for x, y in zip(_coherent(isotope, *table[0]), _spins(*table[1]), strict=True)]
    coherent = [_coherent(isotope, *table[row]) for row in (2, 3)]
    return [plain, *coherent, *(_spins(*table[row]) for row in (4, 5, 6))]


def _coherent(isotope: Isotope, proton: float, neutron: float) -> list[float]:
    return [float(isotope.protons * proton + isotope.neutrons * neutron) ** 2, 0.0, 0.0, 0.0]


def _spins(proton: float, neutron: float) -> list[float]:
    isoscalar, isovector = float(proton + neutron), float(proton - neutron)
    return [0.0, isoscalar**2, isoscalar * isovector, isovector**2]
