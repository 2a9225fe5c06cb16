"""Annihilation of a real scalar through the Higgs portal: kernels (arXiv:1306.4710).

All cross sections are sigma v_rel in GeV^-2 with v_rel = 2 sqrt(1 - 4 m^2/s). Into Standard Model particles the scalar
annihilates as a Higgs boson of mass sqrt(s) decays; into Higgs pairs at tree level, with the contact term, the
s-channel and the exchange of the scalar (derived here)::

    SM    2 lambda^2 v^2 Gamma_h(sqrt s) / (sqrt(s) [(s - m_h^2)^2 + m_h^2 Gamma^2])
    hh    beta_h <|M|^2> / (16 pi s),  M = lambda [1 + 3 m_h^2/(s - m_h^2) + lambda v^2 (1/(t - m^2) + 1/(u - m^2))]

Gamma_h(sqrt s) leaves out the invisible decay, Gamma is the on-shell width with it.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

from ..constants import HIGGS_MASS, HIGGS_VEV
from ..higgs_width import HIGGS_CHANNELS, partial_widths, phase_space, total_width
from .crossed_channels import crossed_averages

PORTAL_CHANNELS: Final = (*HIGGS_CHANNELS, "hh")
_HIGGS_COUNT = len(HIGGS_CHANNELS)


@njit(cache=True, error_model="numpy")
def _resonance(s: float, portal: float, width: float) -> float:
    """Factor between the width of a Higgs boson of mass sqrt(s) and sigma v_rel."""
    strength: float = 2.0 * (portal * HIGGS_VEV) ** 2 / math.sqrt(s)
    return strength / ((s - HIGGS_MASS**2) ** 2 + (HIGGS_MASS * width) ** 2)


@njit(cache=True, error_model="numpy")
def higgs_pairs(s: float, mass: float, portal: float) -> float:
    """Cross section times velocity into two Higgs bosons at one s, GeV^-2."""
    if s <= 4.0 * HIGGS_MASS**2:
        return 0.0
    first, second = crossed_averages(s, mass, HIGGS_MASS)
    direct = 1.0 + 3.0 * HIGGS_MASS**2 / (s - HIGGS_MASS**2)
    # 1/(t - m^2) + 1/(u - m^2) = -2 a/(a^2 - b^2 c^2)
    exchange = 2.0 * portal * HIGGS_VEV**2 * (0.5 * s - HIGGS_MASS**2)
    squared = portal**2 * (direct**2 - 2.0 * direct * exchange * first + exchange**2 * second)
    rate: float = phase_space(math.sqrt(s), HIGGS_MASS) * squared / (16.0 * math.pi * s)
    return rate


@njit(cache=True, error_model="numpy")
def portal_total(mass: float, portal: float, width: float, table: FloatArray, s: FloatArray) -> FloatArray:
    """Sum over final states, shape of `s`; `width` is the total on-shell width, `table` that of `higgs_width_table`."""
    out = np.empty(s.size)
    for i in range(s.size):
        out[i] = _resonance(s[i], portal, width) * total_width(math.sqrt(s[i]), table) + higgs_pairs(s[i], mass, portal)
    return out


@njit(cache=True, error_model="numpy")
def portal_by_channel(mass: float, portal: float, width: float, table: FloatArray, s: FloatArray) -> FloatArray:
    """Cross sections into `PORTAL_CHANNELS`, shape (10, n)."""
    out = np.empty((_HIGGS_COUNT + 1, s.size))
    widths = np.empty(_HIGGS_COUNT)
    for i in range(s.size):
        partial_widths(math.sqrt(s[i]), table, widths)
        factor = _resonance(s[i], portal, width)
        for channel in range(_HIGGS_COUNT):
            out[channel, i] = factor * widths[channel]
        out[_HIGGS_COUNT, i] = higgs_pairs(s[i], mass, portal)
    return out
