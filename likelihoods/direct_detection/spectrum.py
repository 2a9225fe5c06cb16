"""Recoil spectra and expected counts.

The rate per target mass of a nucleus with mass fraction w is

    dR/dE = w (rho_0 / m) R_A(E) eta(v_min(E)),      v_min = sqrt(m_A E / 2) / mu_A,
    R_A(E) = (2/pi) [Z f_p + (A-Z) f_n]^2 F^2(E) + 8/(2J+1) [a_0^2 S_00 + a_0 a_1 S_01 + a_1^2 S_11]

where R_A = sigma_A F^2/(2 mu_A^2) no longer contains the dark-matter mass. Only eta does, and it is smooth. So all that
a detector does to the energy is folded once, on a fine grid, with an interpolation of eta between a few nodes; at a
point of a scan there remain eta at the nodes and a weighted sum (`CountingResponse`).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, TypeAlias

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.special import ndtr

from scanfit.priors import FloatArray

from ..constants import GEV_M2_TO_CM2, GEV_TO_GRAM, SPEED_OF_LIGHT_CM_S, SPEED_OF_LIGHT_KM_S
from .form_factor import helm_form_factor_squared
from .halo import Halo, maxwellian_norm, mean_inverse_speed
from .isotopes import KEV, Isotope, mass_fractions
from .spin_dependent import nuclear_spin, structure_functions

if TYPE_CHECKING:
    from ..candidate import NucleonCouplings
    from .experiment import Efficiency, Experiment, Resolution

BoolArray: TypeAlias = NDArray[np.bool_]

SECONDS_PER_YEAR: Final = 365.25 * 86400.0
GRAMS_PER_TONNE: Final = 1e6
RATE_UNIT: Final = (
    GEV_M2_TO_CM2 * SPEED_OF_LIGHT_KM_S * SPEED_OF_LIGHT_CM_S * KEV
    * SECONDS_PER_YEAR * GRAMS_PER_TONNE / GEV_TO_GRAM
)  # fmt: skip
"""Turns (rho_0/m [cm^-3]) R_A [GeV^-4] eta [s/km] into events per tonne-year and keV."""

NODES: Final = 80
"""Energies at which eta is evaluated."""
WIDTHS_KEPT: Final = 6.0
"""Standard deviations of the resolution beyond which no recoil reaches a bin."""
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
    rate = np.zeros_like(energy)
    for isotope, fraction in mass_fractions(target).items():
        response = amplitudes_squared(isotope, couplings) @ nuclear_responses(energy, isotope)
        speeds = _speed_per_root_energy(isotope.mass, mass) * np.sqrt(energy)
        rate += fraction * response * halo.mean_inverse_speed(speeds)
    return np.asarray(RATE_UNIT * halo.local_density / mass * rate)


def nuclear_responses(energy: FloatArray, isotope: Isotope) -> FloatArray:
    """Responses that multiply (f_A^2, a_0^2, a_0 a_1, a_1^2) in R_A(E), shape (`RESPONSES`, n)."""
    spin_factor = 8.0 / (2.0 * nuclear_spin(isotope) + 1.0)
    coherent = 2.0 / math.pi * helm_form_factor_squared(energy, isotope)
    return np.vstack([coherent, spin_factor * structure_functions(energy, isotope)])


def amplitudes_squared(isotope: Isotope, couplings: NucleonCouplings) -> FloatArray:
    coherent = isotope.protons * couplings.f_proton + isotope.neutrons * couplings.f_neutron
    isoscalar = couplings.a_proton + couplings.a_neutron
    isovector = couplings.a_proton - couplings.a_neutron
    return np.array([coherent**2, isoscalar**2, isoscalar * isovector, isovector**2])


@dataclass(frozen=True)
class CountingResponse:
    """A detector folded with the nuclei it is made of; turns couplings into expected counts.

    Parameters
    ----------
    root_energies : ndarray, shape (n_nodes,)
        Square roots of the node energies in keV, ascending.
    matrix : ndarray, shape (n_isotopes, RESPONSES, n_nodes, n_bins)
        Weight of eta at each node in each bin, exposure and units included.
    nuclear_masses : ndarray, shape (n_isotopes,)
        GeV.
    protons, neutrons : ndarray, shape (n_isotopes,)
        Numbers of nucleons.
    spins : ndarray of bool, shape (n_isotopes,)
        Whether the isotope takes part in spin-dependent scattering.
    """

    root_energies: FloatArray
    matrix: FloatArray
    nuclear_masses: FloatArray
    protons: FloatArray
    neutrons: FloatArray
    spins: BoolArray

    def counts(self, mass: float, couplings: NucleonCouplings, halo: Halo) -> FloatArray:
        """Expected signal events in each bin, shape (n_bins,).

        Interpolating eta between `NODES` energies costs 1e-5 of the total where the spectrum reaches well past the
        threshold (above 8 GeV for xenon and 3 keV) and 0.5 % where it ends 20 % above it (6 GeV). The last bin that the
        spectrum touches, with less than 1e-3 of the events, can be off by some per cent. Never negative.
        """
        return _counts(
            mass,
            couplings.f_proton,
            couplings.f_neutron,
            couplings.a_proton,
            couplings.a_neutron,
            halo.local_density,
            halo.most_probable_speed,
            halo.escape_speed,
            halo.earth_speed,
            self.root_energies,
            self.matrix,
            self.nuclear_masses,
            self.protons,
            self.neutrons,
            self.spins,
        )


def fold(experiment: Experiment, nodes: int = NODES) -> CountingResponse:
    """Fold exposure, efficiency, resolution, bins and nuclei of `experiment` into a `CountingResponse`.

    Nodes lie at E = E_low + (E_high - E_low) t^2 with t uniform in [0, 1]: dense at the threshold, where the spectrum
    of light dark matter ends. Between nodes eta is a local cubic in t.
    """
    intervals = np.array(experiment.bins.intervals_kev)
    resolution, efficiency = experiment.resolution, experiment.efficiency
    energy, weight = _fine_quadrature(intervals, efficiency, resolution)
    acceptance = efficiency.at(energy)[:, None] * _probability_in_bins(energy, intervals, resolution)
    acceptance *= (RATE_UNIT * experiment.exposure_tonne_year * weight)[:, None]
    low, high = energy[0], energy[-1]
    t = np.sqrt((energy - low) / (high - low))
    interpolation = _cubic_interpolation(t, nodes)
    grid = np.linspace(0.0, 1.0, nodes)
    fractions = mass_fractions(experiment.target)
    matrix = np.empty((len(fractions), RESPONSES, nodes, len(intervals)))
    for row, (isotope, fraction) in enumerate(fractions.items()):
        responses = nuclear_responses(energy, isotope)
        for kind in range(RESPONSES):
            matrix[row, kind] = interpolation.T @ (fraction * responses[kind][:, None] * acceptance)
    return CountingResponse(
        root_energies=np.sqrt(low + (high - low) * grid**2),
        matrix=matrix,
        nuclear_masses=np.array([isotope.mass for isotope in fractions]),
        protons=np.array([float(isotope.protons) for isotope in fractions]),
        neutrons=np.array([float(isotope.neutrons) for isotope in fractions]),
        spins=np.array([nuclear_spin(isotope) > 0.0 for isotope in fractions]),
    )


def _probability_in_bins(energy: FloatArray, intervals: FloatArray, resolution: Resolution) -> FloatArray:
    """Probability that a true energy is measured in each bin, shape (n, n_bins)."""
    lows, highs = intervals[None, :, 0], intervals[None, :, 1]
    true = energy[:, None]
    if resolution.perfect:
        return np.asarray((true >= lows) & (true < highs), dtype=float)
    width = np.maximum(resolution.width(energy), 1e-12)[:, None]
    return np.asarray(ndtr((highs - true) / width) - ndtr((lows - true) / width))


def _fine_quadrature(
    intervals: FloatArray, efficiency: Efficiency, resolution: Resolution
) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes in keV and weights, split wherever the acceptance bends."""
    edges = np.unique(intervals)
    margins = WIDTHS_KEPT * resolution.width(edges)
    # The width grows with the energy: measure it where the margin ends, not where it begins.
    margins = WIDTHS_KEPT * resolution.width(edges + margins)
    low = max(float(np.min(edges - margins)), efficiency.first_accepted)
    high = min(float(np.max(edges + margins)), efficiency.energy_kev[-1])
    low = min(low, 0.999 * high)
    steps = np.linspace(-WIDTHS_KEPT, WIDTHS_KEPT, 13)
    around_edges = (edges[:, None] + steps[None, :] * resolution.width(edges)[:, None]).ravel()
    regular = low + (high - low) * np.linspace(0.0, 1.0, 201) ** 2
    cuts = np.concatenate([edges, around_edges, np.array(efficiency.energy_kev), regular])
    cuts = np.unique(cuts[(cuts >= low) & (cuts <= high)])
    abscissae, weights = np.polynomial.legendre.leggauss(4)
    half = 0.5 * np.diff(cuts)[:, None]
    middle = 0.5 * (cuts[1:] + cuts[:-1])[:, None]
    return (middle + half * abscissae).ravel(), (half * weights).ravel()


def _cubic_interpolation(t: FloatArray, nodes: int) -> FloatArray:
    """Matrix, shape (t.size, nodes), that takes values at uniform nodes of [0, 1] to a local cubic through four."""
    place = t * (nodes - 1)
    first = np.clip(np.floor(place).astype(int) - 1, 0, nodes - 4)
    x = place - first
    matrix = np.zeros((t.size, nodes))
    rows = np.arange(t.size)
    for j in range(4):
        others = [i for i in range(4) if i != j]
        matrix[rows, first + j] = np.prod([(x - i) / (j - i) for i in others], axis=0)
    return matrix


@njit(cache=True, fastmath=False, error_model="numpy")
def _speed_per_root_energy(nuclear_mass: float, mass: float) -> float:
    """Minimum speed in km/s of a recoil of one keV; it grows as the root of the energy."""
    reduced_mass = mass * nuclear_mass / (mass + nuclear_mass)
    return SPEED_OF_LIGHT_KM_S * math.sqrt(0.5 * nuclear_mass * KEV) / reduced_mass


@njit(cache=True, fastmath=False, error_model="numpy")
def _counts(
    mass: float,
    f_proton: float,
    f_neutron: float,
    a_proton: float,
    a_neutron: float,
    density: float,
    most_probable: float,
    escape: float,
    earth: float,
    root_energies: FloatArray,
    matrix: FloatArray,
    nuclear_masses: FloatArray,
    protons: FloatArray,
    neutrons: FloatArray,
    spins: BoolArray,
) -> FloatArray:
    norm, cut = maxwellian_norm(most_probable, escape)
    n_nodes, n_bins = matrix.shape[2], matrix.shape[3]
    isoscalar, isovector = a_proton + a_neutron, a_proton - a_neutron
    amplitudes = np.array([0.0, isoscalar * isoscalar, isoscalar * isovector, isovector * isovector])
    counts = np.zeros(n_bins)
    for isotope in range(nuclear_masses.size):
        amplitudes[0] = (protons[isotope] * f_proton + neutrons[isotope] * f_neutron) ** 2
        responses = 4 if spins[isotope] and (amplitudes[1] > 0.0 or amplitudes[3] > 0.0) else 1
        per_root_energy = _speed_per_root_energy(nuclear_masses[isotope], mass)
        for node in range(n_nodes):
            eta = mean_inverse_speed(per_root_energy * root_energies[node], most_probable, escape, earth, norm, cut)
            if eta == 0.0:
                break  # and so at every higher energy
            for response in range(responses):
                weight = amplitudes[response] * eta
                for index in range(n_bins):
                    counts[index] += weight * matrix[isotope, response, node, index]
    scale = density / mass
    for index in range(n_bins):
        counts[index] = max(scale * counts[index], 0.0)
    return counts
