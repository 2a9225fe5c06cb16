"""A detector folded with its nuclei, once; then expected counts cost microseconds.

Of all that enters a rate (see `spectrum`) only eta, or zeta, depends on the dark-matter mass and on the halo, and it is
smooth. So efficiency, quenching, resolution and nuclear responses are integrated once, on a fine grid, with an
interpolation of eta between a few nodes. At a point of a scan there remain eta at the nodes and a weighted sum.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, TypeAlias

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.sparse import csr_array

from scanfit.priors import FloatArray

from ..constants import SPEED_OF_LIGHT_KM_S
from .acceptance import Acceptance, acceptance
from .halo import Halo, maxwellian_norm, mean_inverse_speed, mean_transverse_speed
from .isotopes import KEV, mass_fractions
from .spectrum import RATE_UNIT, coupling_table, nuclear_responses
from .spin_dependent import nuclear_spin
from .velocity_table import VelocityTable

if TYPE_CHECKING:
    from ..candidate import NucleonCouplings
    from .experiment import Experiment

BoolArray: TypeAlias = NDArray[np.bool_]

NODES: Final = 80
"""Energies at which eta is evaluated."""
_BLOCKS: Final = ((0, 4, 0), (0, 1, 1), (1, 4, 1), (1, 4, 2))
"""Responses taken with a power of q^2: (first, end, power). The blocks follow each other in the matrix."""
_NO_TABLE: Final = np.zeros((2, 0))


@dataclass(frozen=True)
class CountingResponse:
    """A detector folded with the nuclei it is made of; turns couplings into expected counts.

    Parameters
    ----------
    root_energies : ndarray, shape (n_nodes,)
        Square roots of the node energies in keV, ascending.
    matrix : ndarray, shape (n_isotopes, 11, n_nodes, n_bins)
        Weight of eta at each node in each bin, exposure and units included: four responses, the first again with q^2,
        the others with q^2 and with q^4.
    nuclear_masses : ndarray, shape (n_isotopes,)
        GeV.
    protons, neutrons : ndarray, shape (n_isotopes,)
        Numbers of nucleons.
    spins : ndarray of bool, shape (n_isotopes,)
        Whether the isotope takes part in spin-dependent scattering.
    extra_speed : float
        Speed in km/s by which the Earth is faster during data taking than in the mean over a year.
    velocities : VelocityTable or None
        Speeds of dark matter in place of the Maxwellian.
    """

    root_energies: FloatArray
    matrix: FloatArray
    nuclear_masses: FloatArray
    protons: FloatArray
    neutrons: FloatArray
    spins: BoolArray
    extra_speed: float = 0.0
    velocities: VelocityTable | None = None

    def counts(self, mass: float, couplings: NucleonCouplings, halo: Halo) -> FloatArray:
        """Expected signal events in each bin, shape (n_bins,).

        Interpolating eta between `NODES` energies costs 1e-5 of the total where the spectrum reaches well past the
        threshold (above 8 GeV for xenon and 3 keV) and 0.5 % where it ends 20 % above it (6 GeV). The last bin that the
        spectrum touches, with less than 1e-3 of the events, can be off by some per cent. Never negative.
        """
        return _counts(
            mass,
            coupling_table(couplings),
            couplings.suppressed is not None,
            halo.local_density,
            halo.most_probable_speed,
            halo.escape_speed,
            max(halo.earth_speed + self.extra_speed, 1e-3),
            _NO_TABLE if self.velocities is None else self.velocities.integrals,
            1.0 if self.velocities is None else self.velocities.step,
            self.root_energies,
            self.matrix,
            self.nuclear_masses,
            self.protons,
            self.neutrons,
            self.spins,
        )


def fold(
    experiment: Experiment,
    nodes: int = NODES,
    *,
    seen: Acceptance | None = None,
    velocities: VelocityTable | None = None,
) -> CountingResponse:
    """Fold exposure, efficiency, quenching, resolution, bins and nuclei of `experiment` into a `CountingResponse`.

    Nodes lie at E = E_low + (E_high - E_low) t^2 with t uniform in [0, 1]: dense at the threshold, where the spectrum
    of light dark matter ends. Between nodes eta is a local cubic in t. `seen` replaces the bins of the experiment.
    """
    seen = seen or acceptance(experiment)
    energy = seen.energy
    low, high = energy[0], energy[-1]
    t = np.sqrt((energy - low) / (high - low))
    interpolation = _interpolation(t, nodes)
    grid = np.linspace(0.0, 1.0, nodes)
    fractions = mass_fractions(experiment.target)
    rows = sum(end - first for first, end, _ in _BLOCKS)
    matrix = np.empty((len(fractions), rows, nodes, seen.weights.shape[1]))
    for place, (isotope, fraction) in enumerate(fractions.items()):
        responses = nuclear_responses(energy, isotope)
        square = isotope.momentum_transfer(energy) ** 2
        row = 0
        for first, end, power in _BLOCKS:
            for kind in range(first, end):
                strength = RATE_UNIT * fraction * responses[kind] * square**power
                matrix[place, row] = interpolation @ (strength[:, None] * seen.weights)
                row += 1
    return CountingResponse(
        root_energies=np.sqrt(low + (high - low) * grid**2),
        matrix=matrix,
        nuclear_masses=np.array([isotope.mass for isotope in fractions]),
        protons=np.array([float(isotope.protons) for isotope in fractions]),
        neutrons=np.array([float(isotope.neutrons) for isotope in fractions]),
        spins=np.array([nuclear_spin(isotope) > 0.0 for isotope in fractions]),
        extra_speed=experiment.extra_earth_speed(),
        velocities=velocities,
    )


def fold_spectrum(experiment: Experiment, spectrum: Callable[[FloatArray], FloatArray]) -> FloatArray:
    """Expected events in each bin, shape (n_bins,), from a recoil spectrum in events per tonne-year and keV."""
    seen = acceptance(experiment)
    return np.asarray(spectrum(seen.energy) @ seen.weights)


def cubic_stencil(t: FloatArray, nodes: int) -> tuple[NDArray[np.intp], FloatArray]:
    """First of four neighbouring uniform nodes of [0, 1], and their weights, shape (4, t.size), in a local cubic."""
    place = t * (nodes - 1)
    first = np.clip(np.floor(place).astype(np.intp) - 1, 0, nodes - 4)
    x = place - first
    weights = np.empty((4, t.size))
    for j in range(4):
        weights[j] = np.prod([(x - i) / (j - i) for i in range(4) if i != j], axis=0)
    return first, weights


def _interpolation(t: FloatArray, nodes: int) -> csr_array:
    """Matrix, shape (nodes, t.size), that hands each value at `t` on to its four nodes."""
    first, weights = cubic_stencil(t, nodes)
    rows = (first[None, :] + np.arange(4)[:, None]).ravel()
    columns = np.tile(np.arange(t.size), 4)
    return csr_array((weights.ravel(), (rows, columns)), shape=(nodes, t.size))


@njit(cache=True, fastmath=False, error_model="numpy")
def _from_table(table: FloatArray, step: float, row: int, speed: float) -> float:
    """Linear interpolation in one row of a velocity table; zero beyond its end."""
    place = speed / step
    index = int(place)
    if index >= table.shape[1] - 1:
        return 0.0
    value: float = table[row, index] + (place - index) * (table[row, index + 1] - table[row, index])
    return value


@njit(cache=True, fastmath=False, error_model="numpy")
def _spin_products(proton: float, neutron: float, products: FloatArray, first: int) -> None:
    isoscalar, isovector = proton + neutron, proton - neutron
    products[first] = isoscalar * isoscalar
    products[first + 1] = isoscalar * isovector
    products[first + 2] = isovector * isovector


@njit(cache=True, fastmath=False, error_model="numpy")
def _counts(
    mass: float,
    couplings: FloatArray,
    suppressed: bool,
    density: float,
    most_probable: float,
    escape: float,
    earth: float,
    table: FloatArray,
    step: float,
    root_energies: FloatArray,
    matrix: FloatArray,
    nuclear_masses: FloatArray,
    protons: FloatArray,
    neutrons: FloatArray,
    spins: BoolArray,
) -> FloatArray:
    norm, cut = maxwellian_norm(most_probable, escape)
    n_nodes, n_bins = matrix.shape[2], matrix.shape[3]
    # Factors of the matrix with eta, and of its first four responses with zeta.
    still, moving = np.zeros(matrix.shape[1]), np.zeros(4)
    _spin_products(couplings[1, 0], couplings[1, 1], still, 1)
    if suppressed:
        _spin_products(couplings[4, 0], couplings[4, 1], still, 5)
        _spin_products(couplings[5, 0], couplings[5, 1], still, 8)
        _spin_products(couplings[6, 0], couplings[6, 1], moving, 1)
    tabulated = table.shape[1] > 0
    counts = np.zeros(n_bins)
    for isotope in range(nuclear_masses.size):
        z, n = protons[isotope], neutrons[isotope]
        still[0] = (z * couplings[0, 0] + n * couplings[0, 1]) ** 2
        still[4] = (z * couplings[2, 0] + n * couplings[2, 1]) ** 2
        moving[0] = (z * couplings[3, 0] + n * couplings[3, 1]) ** 2
        any_moving = suppressed and (moving[0] > 0.0 or moving[1] > 0.0 or moving[3] > 0.0)
        last = (11 if suppressed else 4) if spins[isotope] else (5 if suppressed else 1)
        nuclear_mass = nuclear_masses[isotope]
        reduced_mass = mass * nuclear_mass / (mass + nuclear_mass)
        per_root_energy = SPEED_OF_LIGHT_KM_S * math.sqrt(0.5 * nuclear_mass * KEV) / reduced_mass
        for node in range(n_nodes):
            speed = per_root_energy * root_energies[node]
            if tabulated:
                eta = _from_table(table, step, 0, speed)
            else:
                eta = mean_inverse_speed(speed, most_probable, escape, earth, norm, cut)
            if eta == 0.0:
                break  # and so at every higher energy
            for response in range(last):
                if still[response] == 0.0:
                    continue
                weight = still[response] * eta
                for index in range(n_bins):
                    counts[index] += weight * matrix[isotope, response, node, index]
            if any_moving:
                if tabulated:
                    zeta = _from_table(table, step, 1, speed)
                else:
                    zeta = mean_transverse_speed(speed, most_probable, escape, earth, norm, cut)
                zeta /= SPEED_OF_LIGHT_KM_S * SPEED_OF_LIGHT_KM_S
                for response in range(4 if spins[isotope] else 1):
                    weight = moving[response] * zeta
                    for index in range(n_bins):
                        counts[index] += weight * matrix[isotope, response, node, index]
    scale = density / mass
    for index in range(n_bins):
        counts[index] = max(scale * counts[index], 0.0)
    return counts
