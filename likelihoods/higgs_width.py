"""Width of the Standard Model Higgs boson as a function of its virtuality, by decay channel.

What a Higgs portal needs: in the s-channel the dark matter annihilates into whatever a Higgs boson of mass sqrt(s)
would decay into. Ingredients (review: hep-ph/0503172, numbers from memory): quarks with MSbar masses at the virtuality
and QCD corrections to third order; gluons through top, bottom and charm loops with QCD corrections to second order; W
and Z pairs with both bosons off shell; photons at leading order; leptons at tree level. Z gamma (0.15 % at 125 GeV),
quarks lighter than charm and electroweak corrections are left out: against published calculations the total is 1 % low
at 125 GeV, 7 % at 160 GeV, 5 % at 200 GeV and 3 to 4 % at 250 GeV.

From `TREE_LEVEL_FROM` on, W, Z and top pairs are at tree level, as in arXiv:1306.4710: corrections that grow with the
mass of a heavy Higgs boson do not belong to a light one far off its shell. Off-shell W and Z pairs lie 2.5 % below tree
level there and are blended into it over the last 40 GeV, so that the width is continuous.
"""

from __future__ import annotations

import functools
import math
from typing import Final

import numpy as np
from numba import njit
from scipy.interpolate import CubicSpline

from scanfit.priors import FloatArray

from .constants import (
    FINE_STRUCTURE,
    HIGGS_MASS,
    HIGGS_VEV,
    MUON_MASS,
    TAU_MASS,
    TOP_MASS,
    W_MASS,
    W_WIDTH,
    Z_MASS,
    Z_WIDTH,
)
from .mediator_widths import gluon_width, scalar_loop, triangle
from .running import alpha_s, running_masses

HIGGS_CHANNELS: Final = ("WW", "ZZ", "gg", "gammagamma", "bb", "cc", "tt", "tautau", "mumu")
LOWEST_VIRTUALITY: Final = 4.0
"""GeV; below, single hadrons take over from quarks and gluons."""
TREE_LEVEL_FROM: Final = 300.0
BOTTOM_POLE_MASS: Final = 4.78
"""Pole mass, for kinematics; from memory."""
CHARM_POLE_MASS: Final = 1.67
"""Pole mass, for kinematics; from memory."""

_BLEND_FROM = 260.0
_CELLS = 1800
_LOG_LOWEST = math.log(LOWEST_VIRTUALITY)
_CELLS_PER_LOG = _CELLS / (math.log(TREE_LEVEL_FROM) - _LOG_LOWEST)
_YUKAWA_WIDTH: Final[float] = 1.0 / (8.0 * math.pi * HIGGS_VEV**2)
_BOSON_WIDTH: Final[float] = 1.0 / (32.0 * math.pi * HIGGS_VEV**2)
# Columns of the table: quark widths are without the threshold factor, which is no cubic polynomial.
_BOSONS, _BOTTOM, _CHARM, _WW, _ZZ, _GLUONS, _PHOTONS = range(7)


@njit(cache=True, error_model="numpy")
def phase_space(root_s: float, mass: float) -> float:
    """Velocity sqrt(1 - 4 m^2/s) of either particle of a pair; zero below threshold."""
    return math.sqrt(max(0.0, 1.0 - 4.0 * (mass / root_s) ** 2))


@njit(cache=True, error_model="numpy")
def on_shell_pair_width(root_s: float, mass: float, species: float) -> float:
    """Tree-level width into on-shell W (species = 2) or Z (1) pairs, GeV."""
    x = (mass / root_s) ** 2
    return species * _BOSON_WIDTH * root_s**3 * phase_space(root_s, mass) * (1.0 - 4.0 * x + 12.0 * x**2)


@njit(cache=True, error_model="numpy")
def _second_boson(
    root_s: float, first: float, mass: float, width: float, nodes: FloatArray, weights: FloatArray
) -> float:
    """Integral over the lighter boson's virtuality, given that of the heavier one."""
    s, scale = root_s**2, mass * width
    highest = min(first, root_s - first)
    start = math.asinh(-mass / width)
    total = 0.0
    for panel in range(2):
        stop = math.asinh(((mass if panel == 0 and mass < highest else highest) ** 2 - mass**2) / scale)
        for j in range(nodes.size):
            x = stop - (stop - start) * nodes[j] ** 2
            a, b = first**2 / s, (mass**2 + scale * math.sinh(x)) / s
            kinematic = max(0.0, (1.0 - a - b) ** 2 - 4.0 * a * b)
            jacobian = 2.0 * nodes[j] * weights[j] * (stop - start) / math.cosh(x)
            total += jacobian * math.sqrt(kinematic) * (kinematic + 12.0 * a * b)
        if mass >= highest:
            break
        start = stop
    return total


@njit(cache=True, error_model="numpy")
def off_shell_pair_width(
    root_s: float, mass: float, width: float, species: float, nodes: FloatArray, weights: FloatArray
) -> float:
    """Width into W (species = 2) or Z (1) pairs, both bosons Breit-Wigner distributed, GeV.

    Integrates over both virtualities, the heavier boson's outermost and doubled, in x with Q^2 = M^2 + M Gamma sinh(x),
    which resolves the resonance and its tails alike. Panels end where either integrand has a kink; `nodes` and
    `weights` are of Gauss-Legendre type on [0, 1] and gather at each upper end, where the velocity vanishes.
    """
    edges = np.array([0.0, 0.5 * root_s, max(0.0, root_s - mass), min(mass, root_s), root_s])
    edges.sort()
    scale = mass * width
    total = 0.0
    for panel in range(edges.size - 1):
        start = math.asinh((edges[panel] ** 2 - mass**2) / scale)
        stop = math.asinh((edges[panel + 1] ** 2 - mass**2) / scale)
        for i in range(nodes.size):
            x = stop - (stop - start) * nodes[i] ** 2
            first = math.sqrt(max(0.0, mass**2 + scale * math.sinh(x)))
            jacobian = 2.0 * nodes[i] * weights[i] * (stop - start) / math.cosh(x)
            total += 2.0 * jacobian * _second_boson(root_s, first, mass, width, nodes, weights)
    return species * _BOSON_WIDTH * root_s**3 * total / math.pi**2


@njit(cache=True, error_model="numpy")
def _cubic(c: FloatArray, x: float) -> float:
    value: float = c[0] + x * (c[1] + x * (c[2] + x * c[3]))
    return value


@njit(cache=True, error_model="numpy")
def _cell(root_s: float) -> tuple[int, float]:
    """Cell of the table that holds `root_s`, and the place within it; above the table, its upper end."""
    if root_s >= TREE_LEVEL_FROM:
        return _CELLS - 1, 1.0
    place = (math.log(root_s) - _LOG_LOWEST) * _CELLS_PER_LOG
    cell = min(max(int(place), 0), _CELLS - 1)
    return cell, place - cell


@njit(cache=True, error_model="numpy")
def total_width(root_s: float, table: FloatArray) -> float:
    """Total width at virtuality `root_s` (GeV, >= `LOWEST_VIRTUALITY`), with the table of `higgs_width_table`."""
    cell, x = _cell(root_s)
    c = table[cell]
    top = 0.0
    if root_s <= TREE_LEVEL_FROM:
        bosons = _cubic(c[_BOSONS], x)
    else:
        # Gluons and photons keep their width at the end of the table, fermions grow as sqrt(s).
        bosons = _cubic(c[_GLUONS], x) + _cubic(c[_PHOTONS], x)
        bosons += on_shell_pair_width(root_s, W_MASS, 2.0) + on_shell_pair_width(root_s, Z_MASS, 1.0)
        top = 3.0 * TOP_MASS**2 * _YUKAWA_WIDTH * phase_space(root_s, TOP_MASS) ** 3
    fermions = (
        _cubic(c[_BOTTOM], x) * phase_space(root_s, BOTTOM_POLE_MASS) ** 3
        + _cubic(c[_CHARM], x) * phase_space(root_s, CHARM_POLE_MASS) ** 3
        + TAU_MASS**2 * _YUKAWA_WIDTH * phase_space(root_s, TAU_MASS) ** 3
        + MUON_MASS**2 * _YUKAWA_WIDTH
        + top
    )
    return bosons + root_s * fermions


@njit(cache=True, error_model="numpy")
def partial_widths(root_s: float, table: FloatArray, widths: FloatArray) -> None:
    """Fill `widths`, shape (9,), with the partial widths into `HIGGS_CHANNELS`; their sum is `total_width`."""
    cell, x = _cell(root_s)
    c = table[cell]
    if root_s <= TREE_LEVEL_FROM:
        widths[0], widths[1] = _cubic(c[_WW], x), _cubic(c[_ZZ], x)
    else:
        widths[0], widths[1] = on_shell_pair_width(root_s, W_MASS, 2.0), on_shell_pair_width(root_s, Z_MASS, 1.0)
    widths[2], widths[3] = _cubic(c[_GLUONS], x), _cubic(c[_PHOTONS], x)
    widths[4] = root_s * _cubic(c[_BOTTOM], x) * phase_space(root_s, BOTTOM_POLE_MASS) ** 3
    widths[5] = root_s * _cubic(c[_CHARM], x) * phase_space(root_s, CHARM_POLE_MASS) ** 3
    widths[6] = 3.0 * root_s * TOP_MASS**2 * _YUKAWA_WIDTH * phase_space(root_s, TOP_MASS) ** 3
    widths[7] = root_s * TAU_MASS**2 * _YUKAWA_WIDTH * phase_space(root_s, TAU_MASS) ** 3
    widths[8] = root_s * MUON_MASS**2 * _YUKAWA_WIDTH


@functools.cache
def higgs_width_table() -> FloatArray:
    """Cubic coefficients of the smooth parts of the width, shape (cells, 7, 4), uniform in ln sqrt(s).

    Made once per process in about 0.3 s; interpolation is good to 1e-5.
    """
    roots = np.exp(_LOG_LOWEST + np.arange(_CELLS + 1) / _CELLS_PER_LOG)
    bottom, charm = running_masses(roots)
    strong = alpha_s(roots)
    columns = np.empty((7, roots.size))
    columns[_BOTTOM] = 3.0 * _YUKAWA_WIDTH * bottom**2 * _quark_correction(roots, bottom, strong)
    columns[_CHARM] = 3.0 * _YUKAWA_WIDTH * charm**2 * _quark_correction(roots, charm, strong)
    columns[_WW] = _pair_widths(roots, W_MASS, W_WIDTH, 2.0)
    columns[_ZZ] = _pair_widths(roots, Z_MASS, Z_WIDTH, 1.0)
    columns[_GLUONS] = _gluon_widths(roots, strong)
    columns[_PHOTONS] = _photon_widths(roots)
    columns[_BOSONS] = columns[[_WW, _ZZ, _GLUONS, _PHOTONS]].sum(axis=0)
    coefficients = CubicSpline(np.arange(_CELLS + 1), columns, axis=1).c  # (power, cell, column), highest power first
    return np.ascontiguousarray(coefficients[::-1].transpose(1, 2, 0))


def higgs_partial_widths(root_s: float) -> dict[str, float]:
    """Partial widths in GeV at virtuality `root_s` in GeV, by channel.

    Raises
    ------
    ValueError
        Below `LOWEST_VIRTUALITY`.
    """
    if not root_s >= LOWEST_VIRTUALITY:
        raise ValueError(f"the virtuality must be at least {LOWEST_VIRTUALITY:g} GeV, not {root_s!r}")
    widths = np.empty(len(HIGGS_CHANNELS))
    partial_widths(root_s, higgs_width_table(), widths)
    return dict(zip(HIGGS_CHANNELS, widths.tolist(), strict=True))


@functools.cache
def higgs_width_on_shell() -> float:
    """Total width of the Standard Model Higgs boson of mass `constants.HIGGS_MASS`, GeV."""
    return sum(higgs_partial_widths(HIGGS_MASS).values())


def _quark_correction(roots: FloatArray, masses: FloatArray, strong: FloatArray) -> FloatArray:
    """QCD correction to the width into massless quarks with the running Yukawa coupling, five flavours."""
    a = strong / math.pi
    top_induced = 1.57 - (4.0 / 3.0) * np.log(roots / TOP_MASS) + (4.0 / 9.0) * np.log(masses / roots) ** 2
    return np.asarray(1.0 + 5.67 * a + (29.14 + top_induced) * a**2 + 41.76 * a**3)


def _gluon_widths(roots: FloatArray, strong: FloatArray) -> FloatArray:
    a = strong / math.pi
    correction = 1.0 + 17.92 * a + 156.8 * a**2
    leading = []
    for root, coupling in zip(roots.tolist(), strong.tolist(), strict=True):
        loops = [scalar_loop(4.0 * (mass / root) ** 2) for mass in (TOP_MASS, BOTTOM_POLE_MASS, CHARM_POLE_MASS)]
        leading.append(gluon_width(root, sum(loops), coupling, 1.0))
    return np.array(leading) * correction


def _photon_widths(roots: FloatArray) -> FloatArray:
    scale = FINE_STRUCTURE**2 / (256.0 * math.pi**3 * HIGGS_VEV**2)
    widths = []
    for root in roots.tolist():
        tau = 4.0 * (W_MASS / root) ** 2
        amplitude = -(2.0 + 3.0 * tau + 3.0 * tau * (2.0 - tau) * triangle(tau))
        # Colours times charge squared times 2: 8/3 for up-type quarks, 2/3 for bottom, 2 for the tau.
        for weight, mass in ((8 / 3, TOP_MASS), (8 / 3, CHARM_POLE_MASS), (2 / 3, BOTTOM_POLE_MASS), (2.0, TAU_MASS)):
            amplitude += weight * scalar_loop(4.0 * (mass / root) ** 2)
        widths.append(scale * root**3 * abs(amplitude) ** 2)
    return np.array(widths)


def _pair_widths(roots: FloatArray, mass: float, width: float, species: float) -> FloatArray:
    """Off-shell pairs, blended into on-shell ones below `TREE_LEVEL_FROM`."""
    nodes, weights = np.polynomial.legendre.leggauss(20)
    nodes, weights = 0.5 * (nodes + 1.0), 0.5 * weights
    off_shell = np.array([off_shell_pair_width(root, mass, width, species, nodes, weights) for root in roots.tolist()])
    on_shell = np.array([on_shell_pair_width(root, mass, species) for root in roots.tolist()])
    x = np.clip((roots - _BLEND_FROM) / (TREE_LEVEL_FROM - _BLEND_FROM), 0.0, 1.0)
    return np.asarray(off_shell + x**2 * (3.0 - 2.0 * x) * (on_shell - off_shell))
