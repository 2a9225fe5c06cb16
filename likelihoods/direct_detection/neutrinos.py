"""Neutrinos that scatter coherently on the target: a background that no shielding stops.

    d sigma/dT = G_F^2 M/(4 pi) Q_W^2 (1 - M T/(2 E^2)) F^2(T),   Q_W = N - (1 - 4 sin^2 theta_W) Z

with T up to 2 E^2/(M + 2 E) (Phys. Rev. D 9 (1974) 1389), all flavours alike, and the weak mixing angle at low
momentum.

Sources:

* ``boron-8``, solar: spectrum tabulated in Phys. Rev. C 54 (1996) 411 (read in a transcription), total flux free as the
  shared nuisance `boron8_flux`;
* ``hep``, solar: allowed beta spectrum with end point 18.77 MeV, 8.0e3 /cm^2/s (arXiv:1611.09867, from memory);
* ``supernovae``, diffuse: three Fermi-Dirac spectra of 3, 5 and 8 MeV with 45.4, 27.3 and 11.5 /cm^2/s
  (arXiv:1307.5458, from memory); uncertain by half;
* ``atmospheric``: 10.5 /cm^2/s between 13 MeV and 1 GeV (from memory of Astropart. Phys. 23 (2005) 526), spread over
  energies as 1/(1 + (E/40 MeV)^2), an approximation made here that is good to a factor of two.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final, Literal, TypeAlias

import numpy as np
from scipy.interpolate import PchipInterpolator

from scanfit.priors import FloatArray, Normal
from scanfit.space import Parameter

from ..constants import ATOMIC_MASS_UNIT, FERMI_CONSTANT, GEV_M2_TO_CM2, SIN2_THETA_W_LOW
from .form_factor import helm_form_factor_squared
from .isotopes import KEV, Isotope, mass_fractions
from .spectrum import GRAMS_PER_TONNE, SECONDS_PER_YEAR

Source: TypeAlias = Literal["boron-8", "hep", "supernovae", "atmospheric"]

BORON8_FLUX: Final = 5.25
"""Total flux of solar boron-8 neutrinos, 1e6 /cm^2/s, arXiv:1109.0763 (from memory)."""
BORON8_NUISANCE: Final = Parameter(
    "boron8_flux",
    "10⁶/cm²/s",
    r"\phi_{^8\mathrm{B}}",
    Normal(mean=BORON8_FLUX, sigma=0.20),
    "nuisance",
    "total flux of solar boron-8 neutrinos of all flavours, arXiv:1109.0763 (from memory)",
)

_GRAMS_PER_GEV: Final = 1.66053907e-24 / ATOMIC_MASS_UNIT
_BORON8_ENERGIES: Final = np.concatenate([[0.0], np.arange(0.5, 15.6, 0.5), [16.0]])
_BORON8_DENSITIES: Final = np.array(
    [0.0, 0.00378, 0.01302, 0.02584, 0.04073, 0.05651, 0.07221, 0.08704, 0.10037, 0.11174, 0.12079, 0.12729, 0.13108,
     0.13216, 0.13056, 0.12642, 0.11997, 0.11147, 0.10126, 0.08973, 0.07731, 0.06446, 0.05167, 0.03943, 0.02824,
     0.01854, 0.01074, 0.00514, 0.00184, 0.00048, 0.00010, 0.00001, 0.0]
)  # fmt: skip
"""Per MeV, on a grid of 0.5 MeV."""
_BORON8_SPECTRUM: Final = PchipInterpolator(_BORON8_ENERGIES, _BORON8_DENSITIES)
# Straight lines would lift the convex tail: 18 % more recoils above 3 keV in xenon.
_HEP_END: Final = 18.77
_ELECTRON_MEV: Final = 0.511


@dataclass(frozen=True)
class NeutrinoFlux:
    """One source.

    Parameters
    ----------
    density : callable
        Flux per energy in /cm^2/s/MeV at energies in MeV, shape (n,).
    low, high : float
        MeV between which it is not zero.
    uncertainty : float
        One standard deviation of the total flux relative to it.
    """

    density: Callable[[FloatArray], FloatArray]
    low: float
    high: float
    uncertainty: float


def boron8_density(energy: FloatArray) -> FloatArray:
    """Spectrum of boron-8 neutrinos per MeV at energies in MeV, normalised to one."""
    return np.asarray(_BORON8_SPECTRUM(np.clip(energy, 0.0, 16.0)))


def _hep(energy: FloatArray) -> FloatArray:
    grid = np.linspace(0.0, _HEP_END, 4001)
    shape = _allowed(grid)
    return np.asarray(8.0e3 * _allowed(energy) / np.trapezoid(shape, grid))


def _allowed(energy: FloatArray) -> FloatArray:
    """Allowed beta spectrum without Coulomb correction."""
    electron = np.maximum(_HEP_END + _ELECTRON_MEV - energy, _ELECTRON_MEV)
    return np.asarray(energy**2 * electron * np.sqrt(electron**2 - _ELECTRON_MEV**2))


def _supernovae(energy: FloatArray) -> FloatArray:
    total = np.zeros_like(energy)
    for temperature, flux in ((3.0, 45.4), (5.0, 27.3), (8.0, 11.5)):
        # int E^2/(e^{E/T} + 1) dE = (3/2) zeta(3) T^3
        total += flux * energy**2 / (np.exp(energy / temperature) + 1.0) / (1.5 * 1.2020569 * temperature**3)
    return total


def _atmospheric(energy: FloatArray) -> FloatArray:
    low, high, bend = 13.0, 1000.0, 40.0
    norm = bend * (math.atan(high / bend) - math.atan(low / bend))
    return 10.5 / norm / (1.0 + (energy / bend) ** 2)


FLUXES: Final[Mapping[Source, NeutrinoFlux]] = {
    "boron-8": NeutrinoFlux(lambda energy: 1e6 * BORON8_FLUX * boron8_density(energy), 0.0, 16.0, 0.20 / BORON8_FLUX),
    "hep": NeutrinoFlux(_hep, 0.0, _HEP_END, 0.30),
    "supernovae": NeutrinoFlux(_supernovae, 0.0, 100.0, 0.50),
    "atmospheric": NeutrinoFlux(_atmospheric, 13.0, 1000.0, 0.20),
}
"""What is assumed of each source; the fluxes but the first are fixed in a scan."""


def weak_charge(isotope: Isotope, sin2_weak: float = SIN2_THETA_W_LOW) -> float:
    """Weak charge of a nucleus."""
    return isotope.neutrons - (1.0 - 4.0 * sin2_weak) * isotope.protons


def neutrino_rate(
    energy: FloatArray, target: Mapping[str, float], source: Source, sin2_weak: float = SIN2_THETA_W_LOW
) -> FloatArray:
    """Recoil spectrum from one source.

    Parameters
    ----------
    energy : ndarray, shape (n,)
        Recoil energies in keV.
    target : mapping of str to float
        Numbers of atoms by element or isotope.
    source : str
        A key of `FLUXES`.
    sin2_weak : float
        Squared sine of the weak mixing angle.

    Returns
    -------
    ndarray, shape (n,)
        Events per tonne-year and keV.
    """
    recoil = np.asarray(energy, dtype=float) * KEV * 1e3  # MeV
    flux = FLUXES[source]
    grid = np.linspace(max(flux.low, 1e-3), flux.high, 6001)
    density = flux.density(grid)
    above, above_over_square = _integral_above(grid, density), _integral_above(grid, density / grid**2)
    rate = np.zeros_like(recoil)
    for isotope, fraction in mass_fractions(target).items():
        nuclear_mass = isotope.mass * 1e3
        lowest = 0.5 * (recoil + np.sqrt(recoil * (recoil + 2.0 * nuclear_mass)))
        plain = np.interp(lowest, grid, above, right=0.0)
        squared = np.interp(lowest, grid, above_over_square, right=0.0)
        # G_F^2 M/(4 pi) in GeV^-3 becomes a cross section per keV.
        strength = FERMI_CONSTANT**2 * isotope.mass / (4.0 * math.pi) * weak_charge(isotope, sin2_weak) ** 2
        strength *= GEV_M2_TO_CM2 * KEV
        nuclei = fraction * GRAMS_PER_TONNE / (isotope.mass * _GRAMS_PER_GEV)
        form = helm_form_factor_squared(energy, isotope)
        rate += nuclei * SECONDS_PER_YEAR * strength * form * (plain - 0.5 * nuclear_mass * recoil * squared)
    return np.maximum(rate, 0.0)


def _integral_above(grid: FloatArray, density: FloatArray) -> FloatArray:
    """Trapezium integrals from each grid point to the end."""
    parts = 0.5 * (density[1:] + density[:-1]) * np.diff(grid)
    return np.concatenate([np.cumsum(parts[::-1])[::-1], [0.0]])
