"""Tree-level decay widths of spin-one and spin-zero mediators, and the loop-induced width into gluons.

Every function takes the virtuality Q at which the mediator decays, so that the same formula serves on the mass shell
(Q = M) and inside a propagator. All are compiled scalar functions, callable from Python and from other kernels; masses,
virtualities and widths are in GeV. Formulas: arXiv:1507.00966 and arXiv:1603.04156; neutrinos: arXiv:1703.05703.
"""

from __future__ import annotations

import math
from typing import Final, Literal

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

from .constants import (
    BOTTOM_MASS,
    CHARM_MASS,
    DOWN_MASS,
    ELECTRON_MASS,
    HIGGS_VEV,
    MUON_MASS,
    STRANGE_MASS,
    TAU_MASS,
    TOP_MASS,
    UP_MASS,
)

QUARK_CHANNELS: Final = ("uu", "dd", "ss", "cc", "bb", "tt")
LEPTON_CHANNELS: Final = ("ee", "mumu", "tautau")
FERMION_CHANNELS: Final = (*QUARK_CHANNELS, *LEPTON_CHANNELS, "nunu")
"""Standard Model final states of a mediator with universal couplings, in the order of `FERMION_MASSES`."""

FERMION_MASSES: Final = np.array(
    [UP_MASS, DOWN_MASS, STRANGE_MASS, CHARM_MASS, BOTTOM_MASS, TOP_MASS, ELECTRON_MASS, MUON_MASS, TAU_MASS, 0.0]
)
FERMION_STATES: Final = np.array([3.0] * 6 + [1.0] * 3 + [1.5])
"""Dirac fermions per channel: colours, and three neutrinos of which only the left-handed half exists."""


@njit(cache=True, error_model="numpy")
def vector_width(virtuality: float, fermion_mass: float, coupling: float) -> float:
    """Width of a spin-one mediator into one Dirac fermion, coupling ``g V_mu (f gamma^mu f)``; times 3 for quarks."""
    ratio = (fermion_mass / virtuality) ** 2
    if ratio >= 0.25:
        return 0.0
    return coupling**2 * virtuality / (12.0 * math.pi) * (1.0 + 2.0 * ratio) * math.sqrt(1.0 - 4.0 * ratio)


@njit(cache=True, error_model="numpy")
def axial_width(virtuality: float, fermion_mass: float, coupling: float) -> float:
    """Width of a spin-one mediator into one Dirac fermion, coupling ``g V_mu (f gamma^mu gamma^5 f)``."""
    ratio = (fermion_mass / virtuality) ** 2
    if ratio >= 0.25:
        return 0.0
    return coupling**2 * virtuality / (12.0 * math.pi) * math.sqrt(1.0 - 4.0 * ratio) ** 3


@njit(cache=True, error_model="numpy")
def scalar_width(virtuality: float, fermion_mass: float, coupling: float) -> float:
    """Width of a scalar mediator into one Dirac fermion with coupling ``y phi (f f)``; for a quark y = g m_q/v."""
    ratio = (fermion_mass / virtuality) ** 2
    if ratio >= 0.25:
        return 0.0
    return coupling**2 * virtuality / (8.0 * math.pi) * math.sqrt(1.0 - 4.0 * ratio) ** 3


@njit(cache=True, error_model="numpy")
def pseudoscalar_width(virtuality: float, fermion_mass: float, coupling: float) -> float:
    """Width of a pseudoscalar mediator into one Dirac fermion with coupling ``y phi (f i gamma^5 f)``."""
    ratio = (fermion_mass / virtuality) ** 2
    if ratio >= 0.25:
        return 0.0
    return coupling**2 * virtuality / (8.0 * math.pi) * math.sqrt(1.0 - 4.0 * ratio)


@njit(cache=True, error_model="numpy")
def triangle(tau: float) -> complex:
    """Scalar three-point function of a fermion or W loop, f(tau) with tau = 4 m^2/Q^2."""
    if tau >= 1.0:
        return complex(math.asin(1.0 / math.sqrt(tau)) ** 2, 0.0)
    root = math.sqrt(1.0 - tau)
    # ln((1 + root)/(1 - root)) without the cancellation in 1 - root.
    rapidity = 2.0 * math.log1p(root) - math.log(tau)
    return -0.25 * complex(rapidity, -math.pi) ** 2


@njit(cache=True, error_model="numpy")
def scalar_loop(tau: float) -> complex:
    """Amplitude of a scalar coupled to a fermion loop; 2/3 for a heavy fermion."""
    return tau * (1.0 + (1.0 - tau) * triangle(tau))


@njit(cache=True, error_model="numpy")
def pseudoscalar_loop(tau: float) -> complex:
    """Amplitude of a pseudoscalar coupled to a fermion loop; 1 for a heavy fermion."""
    return tau * triangle(tau)


@njit(cache=True, error_model="numpy")
def gluon_width(virtuality: float, amplitude: complex, strong_coupling: float, g_quark: float) -> float:
    """Leading-order width into two gluons of a spin-zero mediator that couples to quarks as g m_q/v.

    Parameters
    ----------
    virtuality : float
        GeV.
    amplitude : complex
        Sum of `scalar_loop` or `pseudoscalar_loop` over quarks.
    strong_coupling : float
        alpha_s at the virtuality.
    g_quark : float
        Factor on the Yukawa couplings.
    """
    scale: float = (strong_coupling * g_quark) ** 2 * virtuality**3 / (32.0 * math.pi**3 * HIGGS_VEV**2)
    return scale * (amplitude.real**2 + amplitude.imag**2)


@njit(cache=True, error_model="numpy")
def spin_one_widths(
    virtuality: float, axial: bool, dark_mass: float, g_dark: float, g_quark: float, g_lepton: float
) -> FloatArray:
    """Partial widths of a spin-one mediator with universal couplings.

    The lepton coupling is that of the doublet: neutrinos couple as strongly as charged leptons, but are left-handed
    only (half a Dirac width each), which keeps the vector case gauge invariant.

    Returns
    -------
    ndarray, shape (11,)
        Into `FERMION_CHANNELS`, then into a pair of Dirac dark-matter particles.
    """
    count = FERMION_MASSES.size
    widths = np.empty(count + 1)
    for index in range(count + 1):
        if index < count:
            mass, states = FERMION_MASSES[index], FERMION_STATES[index]
            coupling = g_quark if index < 6 else g_lepton
        else:
            mass, states, coupling = dark_mass, 1.0, g_dark
        if axial:
            widths[index] = states * axial_width(virtuality, mass, coupling)
        else:
            widths[index] = states * vector_width(virtuality, mass, coupling)
    return widths


def spin_one_total_width(
    mass: float,
    coupling: Literal["vector", "axial"],
    dark_mass: float,
    g_dark: float,
    g_quark: float,
    g_lepton: float = 0.0,
) -> float:
    """Total on-shell width of a spin-one mediator in GeV; arguments as in `spin_one_widths`."""
    return float(spin_one_widths(mass, coupling == "axial", dark_mass, g_dark, g_quark, g_lepton).sum())
