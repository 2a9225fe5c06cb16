r"""Thermal average of an annihilation cross section, for all temperatures from one set of nodes.

With v_rel = 2 sqrt(1 - 4 m^2/s) and s = 4 m^2 (1 + y^2) the average of Gondolo & Gelmini, Nucl. Phys. B 360 (1991) 145
(two particles with Maxwell-Boltzmann statistics), reads

    <sigma v>(x) = 4 x / K_2(x)^2  int_0^inf dy y^2 (1 + y^2) (sigma v_rel)(s) K_1(2 x sqrt(1 + y^2)),    x = m/T.

`panels` chooses the nodes; here the cross section is weighed at them, and where it turns out rougher than declared,
panels are halved.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Final

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

from .bessel import smooth_factor_k1, smooth_factor_k2
from .panels import EXPONENT, NODES, ORDER, WEIGHTS, halve, place_nodes, place_panels

_NEGLIGIBLE: Final = 1e-7
_PROBES: Final = np.array([4.0, 20.0, 60.0, 600.0, 2e4])
"""Values of x at which the accuracy of the average is judged."""
_KINK: Final = 0.4
_TOLERANCE: Final = 3e-4
_MOST_ROUNDS: Final = 6
_MOST_NODES: Final = 1000


@njit(cache=True, error_model="numpy")
def prepare(y: FloatArray, weight: FloatArray, sigma_v: FloatArray) -> FloatArray:
    """What `average` needs of each node.

    Returns
    -------
    ndarray, shape (n, 4)
        Amplitude, kinetic energy over m, m/sqrt(s), and the sum of the amplitudes' sizes up to and without this node.
        All amplitudes are NaN when the cross section is not finite or is negative.
    """
    nodes = np.empty((len(y), 4))
    below = 0.0
    negative = 0.0
    for i in range(len(y)):
        energy = math.sqrt(1.0 + y[i] * y[i])
        nodes[i, 0] = weight[i] * sigma_v[i] * math.sqrt(1.0 / (math.pi * energy))
        nodes[i, 1] = 2.0 * y[i] * y[i] / (energy + 1.0)
        nodes[i, 2] = 0.5 / energy
        nodes[i, 3] = below
        below += abs(nodes[i, 0])
        negative -= min(nodes[i, 0], 0.0)
    # A cross section may dip below zero by rounding, no more.
    if not negative <= 1e-6 * below < math.inf:
        nodes[:, 0] = math.nan
    return nodes


@njit(cache=True, error_model="numpy")
def average(nodes: FloatArray, x: float) -> float:
    """<sigma v>(x) in the unit of the cross section, for x >= 1."""
    low, high = 0, len(nodes)
    while low < high:
        middle = (low + high) // 2
        if x * nodes[middle, 1] > EXPONENT:
            high = middle
        else:
            low = middle + 1
    total = 0.0
    inverse = 1.0 / x
    for i in range(low - 1, -1, -1):
        total += nodes[i, 0] * smooth_factor_k1(nodes[i, 2] * inverse) * math.exp(-x * nodes[i, 1])
        # What lies below cannot add more than its amplitudes: Boltzmann factors are at most one, P_1 at most 1.3.
        if nodes[i, 3] < _NEGLIGIBLE * total:
            break
    return total * x * math.sqrt(x) / smooth_factor_k2(inverse) ** 2


@njit(cache=True, error_model="numpy")
def share_near_poles(nodes: FloatArray, x: float, mass: float, pole_mass: float, width: float) -> float:
    """Fraction of the average at x that comes from within ten half-widths of a pole in s."""
    near, whole = 0.0, 0.0
    for i in range(len(nodes)):
        part = nodes[i, 0] * math.exp(-min(x * nodes[i, 1], 700.0))
        whole += part
        s = (mass / nodes[i, 2]) ** 2
        if abs(s - pole_mass**2) < 10.0 * pole_mass * width:
            near += part
    return near / whole if whole > 0.0 else 0.0


def _projector() -> FloatArray:
    """Rows that give the four highest Legendre coefficients of a polynomial through the nodes, shape (4, order)."""
    values = np.polynomial.legendre.legvander(NODES, ORDER - 1)
    degree = np.arange(ORDER - 4, ORDER)
    return np.ascontiguousarray(((2 * degree + 1) / 2)[:, None] * values[:, degree].T)


_TAIL: Final = _projector()


@njit(cache=True, error_model="numpy")
def panel_errors(nodes: FloatArray) -> tuple[FloatArray, float]:
    """Estimate how well each panel is integrated.

    An analytic integrand whose Legendre coefficients have fallen to a fraction r at the highest degree is integrated by
    a Gauss rule to a relative error of about r^2. Coefficients that hardly fall from one pair to the next betray a
    kink, and then the error is about r.

    Returns
    -------
    errors : ndarray, shape (panels,)
        Error of each panel relative to the whole average, the largest over the probed x; those late in the history
        are discounted by what they contribute to the final abundance.
    total : float
        Largest sum over panels at one x.
    """
    count = len(nodes) // ORDER
    raw = np.zeros((len(_PROBES), count))
    whole = np.zeros(len(_PROBES))
    for p in range(len(_PROBES)):
        for panel in range(count):
            if _PROBES[p] * nodes[panel * ORDER, 1] > EXPONENT:
                break
            t0, t1, t2, t3, largest = 0.0, 0.0, 0.0, 0.0, 0.0
            for k in range(ORDER):
                i = panel * ORDER + k
                weighted = nodes[i, 0] * math.exp(-_PROBES[p] * nodes[i, 1])
                whole[p] += weighted
                largest = max(largest, abs(weighted) / WEIGHTS[k])
                t0 += weighted * _TAIL[0, k]
                t1 += weighted * _TAIL[1, k]
                t2 += weighted * _TAIL[2, k]
                t3 += weighted * _TAIL[3, k]
            if largest > 0.0:
                before, last = max(abs(t0), abs(t1)), max(abs(t2), abs(t3))
                raw[p, panel] = last if last > _KINK * before else 2.0 * last**2 / largest

    # Annihilation per e-fold of x goes as <sigma v>/x, which is sqrt(x) times the sum over nodes.
    most = 0.0
    for p in range(1, len(_PROBES)):
        most = max(most, whole[p] * math.sqrt(_PROBES[p]))
    errors = np.zeros(count)
    total = 0.0
    for p in range(len(_PROBES)):
        if whole[p] > 0.0:
            scale = 1.0 / whole[p] if p == 0 else math.sqrt(_PROBES[p]) / most
            here = 0.0
            for panel in range(count):
                error = raw[p, panel] * scale
                errors[panel] = max(errors[panel], error)
                here += error
            total = max(total, here)
    return errors, total


def thermal_nodes(
    total: Callable[[FloatArray], FloatArray],
    mass: float,
    poles: FloatArray,
    thresholds: FloatArray,
) -> tuple[FloatArray, float, float]:
    """Evaluate a cross section where its thermal average needs it.

    Parameters
    ----------
    total : callable
        sigma v_rel at s in GeV^2, shape (n,).
    mass : float
        GeV.
    poles : ndarray, shape (p, 2)
    thresholds : ndarray, shape (k,)

    Returns
    -------
    nodes : ndarray, shape (n, 4)
        From `prepare`, for `average`.
    last_x : float
        See `place_panels`.
    error : float
        Estimated relative error of the average.
    """
    panels, last_x = place_panels(mass, poles, thresholds)
    s, y, weight = place_nodes(mass, panels)
    nodes = prepare(y, weight, total(s))
    errors, error = panel_errors(nodes)
    rounds = 0
    # NaN, from a cross section that is no number, compares false and ends the loop.
    while error > _TOLERANCE and rounds < _MOST_ROUNDS and len(nodes) < _MOST_NODES:
        panels = halve(panels, errors, 0.1 * _TOLERANCE)
        s, y, weight = place_nodes(mass, panels)
        nodes = prepare(y, weight, total(s))
        errors, error = panel_errors(nodes)
        rounds += 1
    return nodes, last_x, error
