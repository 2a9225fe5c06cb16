"""Nuclear form factor of coherent scattering."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from scipy.special import spherical_jn

from scanfit.priors import FloatArray

from ..constants import HBAR_C_GEV_FM
from .isotopes import Isotope

SKIN_THICKNESS: Final = 0.9
"""s in fm."""
SURFACE_DIFFUSENESS: Final = 0.52
"""a in fm."""


def helm_radius(mass_number: int) -> float:
    """Effective nuclear radius r_n in fm, r_n^2 = c^2 + (7/3) pi^2 a^2 - 5 s^2 with c = 1.23 A^(1/3) - 0.60 fm.

    Source: Astropart. Phys. 6 (1996) 87.
    """
    half_density_radius = 1.23 * mass_number ** (1.0 / 3.0) - 0.60
    surface = 7.0 / 3.0 * (math.pi * SURFACE_DIFFUSENESS) ** 2
    return math.sqrt(half_density_radius**2 + surface - 5.0 * SKIN_THICKNESS**2)


def helm_form_factor_squared(energy: FloatArray, isotope: Isotope) -> FloatArray:
    """Square of the Helm form factor, F = 3 j_1(q r_n)/(q r_n) exp(-(q s)^2/2), one at zero energy.

    Parameters
    ----------
    energy : ndarray
        Recoil energies in keV.
    isotope : Isotope
        The nucleus that recoils.

    Returns
    -------
    ndarray
        F^2, of the same shape.
    """
    momentum = isotope.momentum_transfer(energy) / HBAR_C_GEV_FM
    argument = momentum * helm_radius(isotope.mass_number)
    safe = np.where(argument > 0.0, argument, 1.0)
    ball = np.where(argument > 0.0, 3.0 * spherical_jn(1, safe) / safe, 1.0)
    return np.asarray((ball * np.exp(-0.5 * (momentum * SKIN_THICKNESS) ** 2)) ** 2)
