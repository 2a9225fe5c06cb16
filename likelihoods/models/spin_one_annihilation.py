"""Annihilation of Dirac dark matter through a spin-one mediator: tree-level kernels.

All cross sections are sigma v_rel in GeV^-2 with v_rel = 2 sqrt(1 - 4 m^2/s), particle on antiparticle, averaged over
spins.

Fermion pairs come from the s-channel. With D = (s - M^2)^2 + M^2 Gamma^2 and beta the velocity of the final fermion::

    vector  C g_D^2 g_f^2 (s + 2 m^2) (1 + 2 m_f^2/s) beta / (6 pi D)
    axial   C g_D^2 g_f^2 [ s beta_m^2 beta^3 / 6 + 2 m^2 m_f^2 (1 - s/M^2)^2 beta / s ] / (pi D)

The last term, from the longitudinal mediator, is the s-wave of the axial case and has no pole. Gamma is the on-shell
width; a width that grows with s, M Gamma -> s Gamma(sqrt(s))/M, would differ on the slopes of a broad resonance.

Mediator pairs come from the t- and u-channel (derived here; the s-wave limit agrees with arXiv:1510.02110). In the
axial case the mediator's mass is taken as given: the rate into longitudinal pairs grows as v^2 (m/M)^4 until the
particle that gives the mass, which is not part of the model, tames it.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

from ..mediator_widths import FERMION_MASSES, FERMION_STATES
from .crossed_channels import crossed_averages

_CHANNELS = FERMION_MASSES.size
_QUARKS = 6


@njit(cache=True, error_model="numpy")
def _add_fermion_pairs(
    s: FloatArray,
    propagator: FloatArray,
    strength: float,
    fermion_mass: float,
    dark_mass: float,
    mediator_mass: float,
    axial: bool,
    out: FloatArray,
) -> None:
    """Add one channel to `out`; `strength` is C g_D^2 g_f^2 and `propagator` 1/(pi D)."""
    m2, f2, inverse_M2 = dark_mass**2, fermion_mass**2, 1.0 / mediator_mass**2
    if axial:
        for i in range(s.size):
            x = f2 / s[i]
            square = max(0.0, 1.0 - 4.0 * x)
            transverse = (s[i] - 4.0 * m2) * square / 6.0
            longitudinal = 2.0 * m2 * x * (1.0 - s[i] * inverse_M2) ** 2
            out[i] += strength * propagator[i] * math.sqrt(square) * (transverse + longitudinal)
    else:
        for i in range(s.size):
            x = f2 / s[i]
            velocity = math.sqrt(max(0.0, 1.0 - 4.0 * x))
            out[i] += strength / 6.0 * propagator[i] * velocity * (s[i] + 2.0 * m2) * (1.0 + 2.0 * x)


@njit(cache=True, error_model="numpy")
def mediator_pairs(s: float, dark_mass: float, mediator_mass: float, g_dark: float, axial: bool) -> float:
    """Cross section times velocity into two mediators at one s, GeV^-2."""
    m2, M2 = dark_mass**2, mediator_mass**2
    if s <= 4.0 * M2:
        return 0.0
    first, second = crossed_averages(s, dark_mass, mediator_mass)
    a = 0.5 * s - M2
    squares = 4.0 * a**2 * second - 2.0 * first  # average of 1/(t - m^2)^2 + 1/(u - m^2)^2
    if axial:
        growth = m2 / M2
        product = s**2 + 4.0 * M2**2 - 16.0 * m2 * M2 - 12.0 * m2 * s + growth * (
            4.0 * s**2 * (1.0 - growth) + 16.0 * m2 * s
        )  # fmt: skip
        summed = 8.0 * (product * first - (4.0 * m2 - M2) ** 2 * squares) - 16.0 + 32.0 * growth * (s / M2 - 4.0)
    else:
        product = s**2 + 4.0 * m2 * s - 8.0 * m2**2 - 8.0 * m2 * M2 + 4.0 * M2**2
        summed = 8.0 * (product * first - (2.0 * m2 + M2) ** 2 * squares) - 16.0
    return g_dark**4 * math.sqrt(1.0 - 4.0 * M2 / s) * summed / (64.0 * math.pi * s)


@njit(cache=True, error_model="numpy")
def _propagator(s: FloatArray, mediator_mass: float, width: float) -> FloatArray:
    M2, squared = mediator_mass**2, (mediator_mass * width) ** 2
    out = np.empty(s.size)
    for i in range(s.size):
        out[i] = 1.0 / (math.pi * ((s[i] - M2) ** 2 + squared))
    return out


@njit(cache=True, error_model="numpy")
def spin_one_total(
    dark_mass: float,
    mediator_mass: float,
    width: float,
    g_dark: float,
    g_quark: float,
    g_lepton: float,
    axial: bool,
    s: FloatArray,
) -> FloatArray:
    """Sum over final states, shape of `s`."""
    out = np.zeros(s.size)
    propagator = _propagator(s, mediator_mass, width)
    for channel in range(_CHANNELS):
        coupling = g_quark if channel < _QUARKS else g_lepton
        if coupling != 0.0:
            strength = FERMION_STATES[channel] * (g_dark * coupling) ** 2
            mass = FERMION_MASSES[channel]
            _add_fermion_pairs(s, propagator, strength, mass, dark_mass, mediator_mass, axial, out)
    for i in range(s.size):
        if s[i] > 4.0 * mediator_mass**2:
            out[i] += mediator_pairs(s[i], dark_mass, mediator_mass, g_dark, axial)
    return out


@njit(cache=True, error_model="numpy")
def spin_one_by_channel(
    dark_mass: float,
    mediator_mass: float,
    width: float,
    g_dark: float,
    g_quark: float,
    g_lepton: float,
    axial: bool,
    visible: FloatArray,
    s: FloatArray,
) -> FloatArray:
    """Cross sections by final state, shape (10, n).

    `visible` holds the mediator's branching fractions into Standard Model channels, normalised to one: a mediator pair
    counts as its decay products, two fermions with the energy of four.
    """
    out = np.zeros((_CHANNELS, s.size))
    propagator = _propagator(s, mediator_mass, width)
    for channel in range(_CHANNELS):
        coupling = g_quark if channel < _QUARKS else g_lepton
        strength = FERMION_STATES[channel] * (g_dark * coupling) ** 2
        mass = FERMION_MASSES[channel]
        _add_fermion_pairs(s, propagator, strength, mass, dark_mass, mediator_mass, axial, out[channel])
    for i in range(s.size):
        if s[i] > 4.0 * mediator_mass**2:
            pairs = mediator_pairs(s[i], dark_mass, mediator_mass, g_dark, axial)
            for channel in range(_CHANNELS):
                out[channel, i] += visible[channel] * pairs
    return out
