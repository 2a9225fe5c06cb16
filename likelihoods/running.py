"""Running of the strong coupling and of quark masses (MSbar), for decay widths at a given virtuality.

Three-loop beta function; four-loop mass anomalous dimension in the closed form of hep-ph/9703278 (numbers from memory).
Five flavours above the bottom mass and four below, joined continuously: the matching terms are of order (alpha_s/pi)^2
and below 0.2 %. The top quark is never counted, as in the usual expressions for the width of a Higgs boson.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.integrate import odeint

from scanfit.priors import FloatArray

from .constants import ALPHA_S_MZ, BOTTOM_MASS, CHARM_MASS, Z_MASS


def _beta(flavours: int) -> tuple[float, float, float]:
    return (
        (11.0 - 2.0 * flavours / 3.0) / 4.0,
        (102.0 - 38.0 * flavours / 3.0) / 16.0,
        (2857.0 / 2.0 - 5033.0 * flavours / 18.0 + 325.0 * flavours**2 / 54.0) / 64.0,
    )


def _run(start: float, scales: FloatArray, value: float, flavours: int) -> FloatArray:
    """Values of alpha_s/pi at `scales`, all on one side of `start`, given `value` at `start`."""
    b0, b1, b2 = _beta(flavours)
    distances = np.abs(np.log(scales / start))
    order = np.argsort(distances)
    direction = 2.0 if scales.min() < start else -2.0
    path = odeint(
        lambda a, _: direction * a**2 * (b0 + a * (b1 + a * b2)),
        [value],
        np.concatenate(([0.0], distances[order])),
        rtol=1e-10,
        atol=1e-13,
    )
    values = np.empty(scales.shape)
    values[order] = path[1:, 0]
    return values


def alpha_s(scales: FloatArray) -> FloatArray:
    """Strong coupling at `scales` (GeV, from about 1 GeV up), same shape."""
    at_z = np.array(ALPHA_S_MZ / math.pi)
    at_bottom = _run(Z_MASS, np.array([BOTTOM_MASS]), float(at_z), 5)[0]
    values = np.empty(scales.shape)
    for start, value, flavours, here in (
        (Z_MASS, at_z, 5, scales >= Z_MASS),
        (Z_MASS, at_z, 5, (scales >= BOTTOM_MASS) & (scales < Z_MASS)),
        (BOTTOM_MASS, at_bottom, 4, scales < BOTTOM_MASS),
    ):
        if here.any():
            values[here] = _run(start, scales[here], float(value), flavours)
    return math.pi * values


def running_masses(scales: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Bottom and charm masses at `scales` (GeV), each of the same shape."""
    coupling = alpha_s(scales) / math.pi
    at_charm, at_bottom = alpha_s(np.array([CHARM_MASS, BOTTOM_MASS])) / math.pi
    # Evolution from the bottom mass to each scale, with four flavours below and five above.
    evolution = np.where(
        scales < BOTTOM_MASS,
        _evolution(coupling, 4) / _evolution(at_bottom, 4),
        _evolution(coupling, 5) / _evolution(at_bottom, 5),
    )
    charm_at_bottom = CHARM_MASS * float(_evolution(at_bottom, 4) / _evolution(at_charm, 4))
    return BOTTOM_MASS * evolution, charm_at_bottom * evolution


def _evolution(a: FloatArray, flavours: int) -> FloatArray:
    """Function c(a) with m(mu) proportional to c(alpha_s(mu)/pi)."""
    if flavours == 5:
        return np.asarray(a ** (12.0 / 23.0) * (1.0 + 1.17549 * a + 1.50071 * a**2 + 0.172478 * a**3))
    return np.asarray(a ** (12.0 / 25.0) * (1.0 + 1.01413 * a + 1.38921 * a**2 + 1.09054 * a**3))
