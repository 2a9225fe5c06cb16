"""A narrow pole seen from the other side: annihilation through it is production of the mediator, which then decays.

In equilibrium as many mediators appear from dark matter per volume and time as decay into it, n_M^eq Gamma(M -> dark
matter) K_1(M/T)/K_2(M/T), and a fraction BR of those that appear goes on into the Standard Model. That number of events
must be what the annihilation cross section gives: <sigma v> n_eq^2/2 for a self-conjugate particle, <sigma v> n_eq
times n_eq of the antiparticle for the others. Nothing of the thermal average enters the left side, and the widths of
the decays check the couplings, spins and symmetry factors of the cross sections. Derived here; Bessel functions from
scipy.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Literal

import numpy as np
import pytest
from scipy.special import kn

from scanfit.contracts import BuildContext
from scanfit.likelihoods.candidate import Candidate
from scanfit.likelihoods.constants import HIGGS_MASS, HIGGS_VEV
from scanfit.likelihoods.models.scalar_singlet import ScalarSinglet
from scanfit.likelihoods.models.spin_one_mediator import SpinOneMediatorModel
from scanfit.likelihoods.relic_abundance.thermal_average import average, thermal_nodes


def equilibrium(mass: float, states: int, temperature: float) -> float:
    """Number density of Maxwell-Boltzmann particles in equilibrium, GeV^3."""
    return float(states * mass**2 * temperature / (2.0 * math.pi**2) * kn(2, mass / temperature))


def annihilation(candidate: Candidate, temperature: float) -> float:
    """<sigma v> in GeV^-2 from the code under test."""
    poles, thresholds = np.array(candidate.annihilation.poles), np.array(candidate.annihilation.thresholds)
    nodes = thermal_nodes(candidate.annihilation.total, candidate.mass, poles, thresholds)[0]
    return float(average(nodes, candidate.mass / temperature))


def decays(mass: float, states: int, partial_width: float, temperature: float) -> float:
    """Decays of a thermal particle per volume and time; moving ones live longer."""
    slower = kn(1, mass / temperature) / kn(2, mass / temperature)
    return float(equilibrium(mass, states, temperature) * partial_width * slower)


@pytest.mark.parametrize("mass", [45.0, 55.0, 60.0])
@pytest.mark.parametrize("x", [10.0, 22.0])
def test_scalar_pairs_make_higgs_bosons(mass: float, x: float) -> None:
    """Two identical scalars an event. A Higgs boson 3e-5 of its mass wide leaves a per mille beside the pole."""
    portal, temperature = 1e-3, mass / x
    model = ScalarSinglet(ScalarSinglet.Options(), BuildContext(Path()))
    candidate = model.predict({"mass": mass, "portal": portal, "higgs_nucleon_coupling": 0.3})
    total = candidate.annihilation.poles[0][1]
    # Two-body decay into identical scalars with the vertex lambda v: |M|^2/(32 pi m_h) times the velocity.
    velocity = math.sqrt(1.0 - (2.0 * mass / HIGGS_MASS) ** 2)
    invisible = (portal * HIGGS_VEV) ** 2 / (32.0 * math.pi * HIGGS_MASS) * velocity
    events = decays(HIGGS_MASS, 1, invisible, temperature) * (1.0 - invisible / total)
    own = 0.5 * annihilation(candidate, temperature) * equilibrium(mass, 1, temperature) ** 2
    assert own == pytest.approx(events, rel=4e-3)


@pytest.mark.parametrize("coupling", ["vector", "axial"])
@pytest.mark.parametrize("mass", [400.0, 480.0])
def test_dirac_pairs_make_spin_one_mediators(coupling: Literal["vector", "axial"], mass: float) -> None:
    """One particle and one antiparticle an event, three spin states of the mediator."""
    mediator, g_dark, g_quark, temperature = 1000.0, 0.03, 0.01, mass / 20.0
    model = SpinOneMediatorModel(SpinOneMediatorModel.Options(coupling=coupling), BuildContext(Path()))
    charges = {"delta_u": 0.84, "delta_d": -0.43, "delta_s": -0.09}
    couplings = {"g_quark": g_quark, "g_dark": g_dark, "g_lepton": 0.0}
    candidate = model.predict({"mass": mass, "mediator_mass": mediator, **couplings, **charges})
    total = candidate.annihilation.poles[0][1]
    velocity2 = 1.0 - (2.0 * mass / mediator) ** 2
    # Textbook widths of a spin-one boson into a Dirac pair without colour.
    shape = math.sqrt(velocity2) * (1.0 + 2.0 * (mass / mediator) ** 2 if coupling == "vector" else velocity2)
    invisible = g_dark**2 * mediator / (12.0 * math.pi) * shape
    events = decays(mediator, 3, invisible, temperature) * (1.0 - invisible / total)
    own = annihilation(candidate, temperature) * equilibrium(mass, 2, temperature) ** 2
    assert own == pytest.approx(events, rel=4e-3)
