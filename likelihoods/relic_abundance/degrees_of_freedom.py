"""Relativistic degrees of freedom of the primordial plasma, from three published sources.

``g_rho`` counts energy density, rho = (pi^2/30) g_rho T^4; ``g_s`` counts entropy density, s = (2 pi^2/45) g_s T^3.
What the relic abundance needs besides g_s is g*^(1/2) = g_s/sqrt(g_rho) (1 + (1/3) d ln g_s/d ln T) (Gondolo &
Gelmini, Nucl. Phys. B 360 (1991) 145). The sources differ by 5 % at 1 GeV and by more elsewhere: a real systematic
error, which is why the run file can choose.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache, partial
from typing import Final, Literal, get_args

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

EquationOfState = Literal["arxiv-1803.01038", "arxiv-1606.07494", "arxiv-0910.1066"]
"""Published sources of g_rho and g_s, by arXiv number; the first is the default."""

EQUATIONS_OF_STATE: Final[tuple[str, ...]] = get_args(EquationOfState)


@dataclass(frozen=True)
class DegreesOfFreedom:
    """One source: two functions of the temperature and the range in which the source vouches for them.

    Parameters
    ----------
    g_rho, g_s : callable
        Take temperatures in GeV, any shape, and return the same shape. Outside the range they stay finite: constant
        for a table, the fit's own limit for a fit.
    lowest, highest : float
        Range of validity, GeV.
    edges : tuple of float
        Temperatures at which the published function jumps or bends.
    """

    g_rho: Callable[[FloatArray], FloatArray]
    g_s: Callable[[FloatArray], FloatArray]
    lowest: float
    highest: float
    edges: tuple[float, ...] = ()


# --- arXiv:1803.01038, appendix C: two branches, each a closed formula -----------------------------------------------

_HOT_G_RHO: Final = (
    (
        1.0, 1.11724, 3.12672e-1, -4.68049e-2, -2.65004e-2, -1.19760e-3,
        1.82812e-4, 1.36436e-4, 8.55051e-5, 1.22840e-5, 3.82259e-7, -6.87035e-9,
    ),
    (
        1.43382e-2, 1.37559e-2, 2.92108e-3, -5.38533e-4, -1.62496e-4, -2.87906e-5,
        -3.84278e-6, 2.78776e-6, 7.40342e-7, 1.17210e-7, 3.72499e-9, -6.74107e-11,
    ),
)  # fmt: skip
_HOT_RATIO: Final = (
    (
        1.0, 6.07869e-1, -1.54485e-1, -2.24034e-1, -2.82147e-2, 2.90620e-2,
        6.86778e-3, -1.00005e-3, -1.69104e-4, 1.06301e-5, 1.69528e-6, -9.33311e-8,
    ),
    (
        7.07388e1, 9.18011e1, 3.31892e1, -1.39779, -1.52558, -1.97857e-2,
        -1.60146e-1, 8.22615e-5, 2.02651e-2, -1.82134e-5, 7.83943e-5, 7.13518e-5,
    ),
)  # fmt: skip
_JOIN: Final = 0.12
"""GeV. The published branches differ by 4e-4 where they meet."""

_COLD_MASSES: Final = {
    "electron": 511e-6, "muon": 0.1056, "neutral_pion": 0.135, "charged_pion": 0.140,
    "hadrons_1": 0.5, "hadrons_2": 0.77, "hadrons_3": 1.2, "hadrons_4": 2.0,
}  # fmt: skip

FIT_FUNCTIONS: Final = {
    "fermion_energy": (-1.04855, 1.03757, 0.508630, 0.0893988),
    "boson_energy": (-1.03149, 1.03317, 0.398264, 0.0648056),
    "fermion_entropy": (-1.04190, 1.03400, 0.456426, 0.0595249),
    "boson_entropy": (-1.03365, 1.03397, 0.342548, 0.0506182),
}
"""Coefficients of exp(c0 y) (1 + c1 y + c2 y^2 + c3 y^3): density over its massless limit at y = m/T."""


def fit_function(name: str, y: FloatArray) -> FloatArray:
    """Fraction of its massless energy or entropy density that a species of mass y T holds; same shape as `y`."""
    c0, c1, c2, c3 = FIT_FUNCTIONS[name]
    y = np.minimum(y, 600.0)
    return np.asarray(np.exp(c0 * y) * (1.0 + y * (c1 + y * (c2 + y * c3))))


def _cold_branch(temperature: FloatArray) -> tuple[FloatArray, FloatArray]:
    y = {name: mass / temperature for name, mass in _COLD_MASSES.items()}
    neutrino_heating = 1.0 + 1.75 * fit_function("fermion_entropy", y["electron"])
    g_rho = 2.030 + 1.353 * neutrino_heating ** (4.0 / 3.0)
    g_s = 2.008 + 1.923 * neutrino_heating
    for name, in_energy, in_entropy in (("electron", 3.495, 3.442), ("muon", 3.446, 3.468)):
        g_rho += in_energy * fit_function("fermion_energy", y[name])
        g_s += in_entropy * fit_function("fermion_entropy", y[name])
    for name, in_energy, in_entropy in (
        ("neutral_pion", 1.05, 1.034), ("charged_pion", 2.08, 2.068), ("hadrons_1", 4.165, 4.16),
        ("hadrons_2", 30.55, 30.55), ("hadrons_3", 89.4, 90.0), ("hadrons_4", 8209.0, 6209.0),
    ):  # fmt: skip
        g_rho += in_energy * fit_function("boson_energy", y[name])
        g_s += in_entropy * fit_function("boson_entropy", y[name])
    return g_rho, g_s


def _hot_branch(temperature: FloatArray) -> tuple[FloatArray, FloatArray]:
    t = np.log(temperature)
    polynomial = np.polynomial.polynomial.polyval
    g_rho = polynomial(t, _HOT_G_RHO[0]) / polynomial(t, _HOT_G_RHO[1])
    return g_rho, g_rho / (1.0 + polynomial(t, _HOT_RATIO[0]) / polynomial(t, _HOT_RATIO[1]))


def _two_branches(temperature: FloatArray, which: int) -> FloatArray:
    temperature = np.asarray(temperature, dtype=float)
    # Each branch is evaluated only on its own side, where it is finite.
    cold = _cold_branch(np.minimum(temperature, _JOIN))[which]
    hot = _hot_branch(np.clip(temperature, _JOIN, 1e16))[which]
    return np.where(temperature < _JOIN, cold, hot)


# --- arXiv:1606.07494, table S2: cubic spline in log10 T -------------------------------------------------------------

_TABLE: Final = (
    (0.0, 10.71, 1.00228), (0.5, 10.74, 1.00029), (1.0, 10.76, 1.00048), (1.25, 11.09, 1.00505), (1.6, 13.68, 1.02159),
    (2.0, 17.61, 1.02324), (2.15, 24.07, 1.05423), (2.2, 29.84, 1.07578), (2.4, 47.83, 1.06118), (2.5, 53.04, 1.04690),
    (3.0, 73.48, 1.01778), (4.0, 83.10, 1.00123), (4.3, 85.56, 1.00389), (4.6, 91.97, 1.00887), (5.0, 102.17, 1.00750),
    (5.45, 104.98, 1.00023),
)  # fmt: skip
"""log10(T/MeV), g_rho, g_rho/g_s."""


def _spline(temperature: FloatArray, which: int) -> FloatArray:
    # Imported here: only this source needs it, and it is slow to import.
    from scipy.interpolate import CubicSpline

    table = np.array(_TABLE)
    position = np.clip(np.log10(np.asarray(temperature, dtype=float) * 1e3), table[0, 0], table[-1, 0])
    g_rho = CubicSpline(table[:, 0], table[:, 1])(position)
    if which == 0:
        return np.asarray(g_rho)
    return np.asarray(g_rho / CubicSpline(table[:, 0], table[:, 2])(position))


# --- arXiv:0910.1066, appendix A: a sum of steps in ln T -------------------------------------------------------------

_STEPS: Final = (
    (
        1.21,
        (
            (0.572, -8.77, 0.682), (0.330, -2.95, 1.01), (0.579, -1.80, 0.165),
            (0.138, -0.162, 0.934), (0.108, 3.76, 0.869),
        ),
    ),
    (
        1.36,
        (
            (0.498, -8.74, 0.693), (0.327, -2.89, 1.01), (0.579, -1.79, 0.155),
            (0.140, -0.102, 0.963), (0.109, 3.82, 0.907),
        ),
    ),
)  # fmt: skip
"""For g_rho and g_s: a0, then height, place and width of each step of ln g."""


def _steps(temperature: FloatArray, which: int) -> FloatArray:
    t = np.log(np.asarray(temperature, dtype=float))
    start, steps = _STEPS[which]
    exponent = start + sum(height * (1.0 + np.tanh((t - place) / width)) for height, place, width in steps)
    return np.asarray(np.exp(exponent))


_SPLINE_RANGE: Final = (1e-3 * 10.0 ** _TABLE[0][0], 1e-3 * 10.0 ** _TABLE[-1][0])

SOURCES: Final[dict[str, DegreesOfFreedom]] = {
    "arxiv-1803.01038": DegreesOfFreedom(
        partial(_two_branches, which=0), partial(_two_branches, which=1), 1e-5, 1e16, edges=(_JOIN,)
    ),
    "arxiv-1606.07494": DegreesOfFreedom(
        partial(_spline, which=0), partial(_spline, which=1), _SPLINE_RANGE[0], _SPLINE_RANGE[1], edges=_SPLINE_RANGE
    ),
    "arxiv-0910.1066": DegreesOfFreedom(partial(_steps, which=0), partial(_steps, which=1), 1e-5, 1e4),
}
"""All sources by name. For the last no range was at hand; the one given is where its steps lie."""


def entropy_slope(temperature: FloatArray, source: str) -> FloatArray:
    """Logarithmic slope d ln g_s/d ln T at temperatures in GeV, same shape."""
    g = SOURCES[source]
    temperature = np.asarray(temperature, dtype=float)
    h = 5e-4
    centre = np.log(temperature)
    for edge in np.log(g.edges):
        # The five-point rule must not straddle an edge: it moves to the side it belongs to.
        distance = centre - edge
        centre = np.where(np.abs(distance) < 2.01 * h, edge + np.copysign(2.01 * h, distance), centre)
    nearby = [np.log(g.g_s(np.exp(centre + k * h))) for k in (-2, -1, 1, 2)]
    return np.asarray((nearby[0] - 8.0 * nearby[1] + 8.0 * nearby[2] - nearby[3]) / (12.0 * h))


def g_star_sqrt(temperature: FloatArray, source: str) -> FloatArray:
    """g*^(1/2) at temperatures in GeV, same shape, the slope of g_s included."""
    g = SOURCES[source]
    temperature = np.asarray(temperature, dtype=float)
    slope = entropy_slope(temperature, source)
    return np.asarray(g.g_s(temperature) / np.sqrt(g.g_rho(temperature)) * (1.0 + slope / 3.0))


# --- fine tables for the compiled solver -----------------------------------------------------------------------------

_TABLE_START: Final = math.log(1e-7)
_TABLE_STEP: Final = 0.01
_TABLE_SIZE: Final = 3001
"""ln T from 1e-7 GeV to 1e6 GeV; constant outside."""


def solver_temperatures() -> FloatArray:
    """Temperatures of the solver's grid, GeV, shape (3001,)."""
    return np.asarray(np.exp(_TABLE_START + _TABLE_STEP * np.arange(_TABLE_SIZE)))


@lru_cache(maxsize=len(EQUATIONS_OF_STATE))
def solver_table(source: str) -> FloatArray:
    """g_s and g*^(1/2) on the solver's grid in ln T, shape (3001, 2), read-only.

    Interpolated, it is good to 1e-5 (3e-5 at the knots of the spline), except within a cell or two of an edge.
    """
    temperature = solver_temperatures()
    table = np.column_stack([SOURCES[source].g_s(temperature), g_star_sqrt(temperature, source)])
    table.setflags(write=False)
    return table


@njit(cache=True, error_model="numpy")
def interpolate(table: FloatArray, log_temperature: float) -> tuple[float, float]:
    """g_s and g*^(1/2) at ln(T/GeV) by four-point Lagrange interpolation in a `solver_table`."""
    position = (log_temperature - _TABLE_START) / _TABLE_STEP
    position = min(max(position, 0.0), _TABLE_SIZE - 1.0)
    i = min(max(int(position), 1), _TABLE_SIZE - 3)
    u = position - i
    a = -u * (u - 1.0) * (u - 2.0) / 6.0
    b = (u + 1.0) * (u - 1.0) * (u - 2.0) / 2.0
    c = -(u + 1.0) * u * (u - 2.0) / 2.0
    d = (u + 1.0) * u * (u - 1.0) / 6.0
    return (
        a * table[i - 1, 0] + b * table[i, 0] + c * table[i + 1, 0] + d * table[i + 2, 0],
        a * table[i - 1, 1] + b * table[i, 1] + c * table[i + 1, 1] + d * table[i + 2, 1],
    )
