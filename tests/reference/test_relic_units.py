"""Freeze-out once more in SI units, from textbook cosmology and the constants of scipy: no natural units, no constants
of the project. Only g_rho and g_s are shared.

    H = sqrt(8 pi G rho/3),  rho = (pi^2/30) g_rho (kT)^4/(hbar^3 c^5),  s = (2 pi^2/45) g_s (kT/(hbar c))^3,
    dY/dlnx = -(s <sigma v>/H) (1 + (1/3) dln g_s/dln T) (Y^2 - Y_eq^2)
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import constants as si
from scipy.integrate import solve_ivp
from scipy.special import kve

from scanfit.likelihoods.relic_abundance.cross_sections import constant_average
from scanfit.likelihoods.relic_abundance.degrees_of_freedom import SOURCES
from scanfit.likelihoods.relic_abundance.freeze_out import freeze_out

SOURCE = "arxiv-1803.01038"
GEV = 1e9 * si.e
"""Joule."""
MEGAPARSEC = 1e6 * si.parsec


def abundance_in_si(mass_gev: float, sigma_v_cm3_s: float, states: int) -> float:
    g = SOURCES[SOURCE]
    mass, sigma_v = mass_gev * GEV, 1e-6 * sigma_v_cm3_s
    hbar_c = si.hbar * si.c

    def g_s(thermal: float) -> float:
        return float(g.g_s(np.array(thermal / GEV)))

    def entropy_density(thermal: float) -> float:
        return 2.0 * math.pi**2 / 45.0 * g_s(thermal) * (thermal / hbar_c) ** 3

    def hubble(thermal: float) -> float:
        energy = math.pi**2 / 30.0 * float(g.g_rho(np.array(thermal / GEV))) * thermal * (thermal / hbar_c) ** 3
        return math.sqrt(8.0 * math.pi * si.G / 3.0 * energy) / si.c

    def log_equilibrium(thermal: float) -> float:
        x = mass / thermal
        density = states / (2.0 * math.pi**2) * (mass / hbar_c) ** 3 / x * float(kve(2, x))
        return math.log(density / entropy_density(thermal)) - x

    def slope(tau: float, w: np.ndarray) -> list[float]:
        thermal = mass * math.exp(-tau)
        step = 1e-3
        bend = math.log(g_s(thermal * math.exp(step)) / g_s(thermal * math.exp(-step))) / (2.0 * step)
        rate = entropy_density(thermal) * sigma_v / hubble(thermal) * (1.0 + bend / 3.0)
        return [-rate * (math.exp(w[0]) - math.exp(2.0 * log_equilibrium(thermal) - w[0]))]

    span = (math.log(10.0), math.log(1e6))
    start = [log_equilibrium(mass / 10.0)]
    solution = solve_ivp(slope, span, start, method="Radau", rtol=1e-7, atol=1e-9, first_step=1e-4, max_step=0.5)
    today = math.exp(solution.y[0, -1])
    # Entropy today: photons at 2.7255 K and three neutrinos at (4/11)^(1/3) of that.
    photons = si.k * 2.7255
    entropy_today = 2.0 * math.pi**2 / 45.0 * (2.0 + 21.0 / 4.0 * 4.0 / 11.0) * (photons / hbar_c) ** 3
    critical = 3.0 * (1e5 / MEGAPARSEC) ** 2 / (8.0 * math.pi * si.G)
    return mass / si.c**2 * today * entropy_today / critical


@pytest.mark.parametrize(("mass", "sigma_v"), [(10.0, 3e-26), (100.0, 2.2e-26), (3000.0, 2e-26)])
@pytest.mark.parametrize("dirac", [False, True])
def test_abundance_in_si_units(mass: float, sigma_v: float, dirac: bool) -> None:
    """Gravitational constant and entropy today differ between tables in the fourth digit."""
    own = freeze_out(
        mass=mass,
        degrees_of_freedom=2,
        self_conjugate=not dirac,
        annihilation=constant_average(mass=mass, sigma_v=sigma_v),
        equation_of_state=SOURCE,
    )
    # Particles and antiparticles: four states, and only pairs of one with the other annihilate, half of all.
    expected = abundance_in_si(mass, 0.5 * sigma_v, 4) if dirac else abundance_in_si(mass, sigma_v, 2)
    assert own.omega_h2 == pytest.approx(expected, rel=1e-3)
