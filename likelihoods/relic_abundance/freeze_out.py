"""Relic abundance of one candidate by freeze-out, with its own error estimate and validity flags."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING, Final

import numpy as np

from scanfit.errors import PointError
from scanfit.priors import FloatArray

from ..constants import CRITICAL_DENSITY_GEV_CM3, ENTROPY_TODAY_CM3, GEV_M2_TO_CM3_S
from .boltzmann import SOLVED, rate_and_equilibrium, solve
from .panels import LOWEST_X
from .plasma import Blend, plasma_range, plasma_table
from .thermal_average import average, share_near_poles, thermal_nodes
from .unitarity import s_wave_bound

if TYPE_CHECKING:
    from ..candidate import Annihilation

RELIC_FLAGS: Final[Mapping[str, str]] = MappingProxyType(
    {
        "narrow_resonance": (
            "a resonance narrower than 5 % of its mass supplies over a tenth of the annihilation at freeze-out, or "
            "lies just below twice the mass: kinetic equilibrium may fail and change the relic abundance by up to a "
            "factor of ten (arXiv:1706.07433)"
        ),
        "outside_degrees_of_freedom_table": (
            "freeze-out, or the annihilation that follows it down to a hundredth of its temperature, lies outside the "
            "temperatures for which the chosen degrees of freedom are published"
        ),
        "never_in_equilibrium": (
            "annihilation is too weak ever to bring the candidate into equilibrium: the abundance assumes that it "
            "started in equilibrium at T = m, with Maxwell-Boltzmann statistics"
        ),
        "above_unitarity_bound": (
            "the annihilation cross section at freeze-out exceeds the unitarity bound of one s-wave, 4 pi/(m^2 v): "
            "perturbation theory cannot be trusted"
        ),
        "thermal_average_uncertain": (
            "the cross section varies faster than its declared poles and thresholds explain: its thermal average may "
            "be off by more than 1 %"
        ),
        "relic_abundance_failed": (
            "the cross section is negative or not a number, or the number-density equation could not be solved: there "
            "is no relic abundance"
        ),
    }
)
"""Validity flags of the relic abundance by name, each with the sentence that explains it."""

_NARROW: Final = 0.05
_DEPARTURE: Final = 0.01
_TOLERANCE: Final = 1e-4
_LONGEST_STEP: Final = 1.0
_ERROR_SHARE: Final = 0.1
"""True over estimated error of the stepper; measured against tight integrations it stays below this."""
_OMEGA_PER_YIELD: Final = ENTROPY_TODAY_CM3 / CRITICAL_DENSITY_GEV_CM3
_NO_TRACK: Final = np.zeros((0, 2))


@dataclass(frozen=True)
class FreezeOut:
    """How a candidate froze out.

    Parameters
    ----------
    omega_h2 : float
        Relic abundance of particles and antiparticles together; NaN when it could not be computed, which is flagged.
    x_freeze_out : float
        m/T at which the number density is 2.5 times that of equilibrium. (A common convention: others differ by a few
        per cent.)
    error : float
        Estimated relative error of `omega_h2` from the numerical method alone, for cross sections that declare their
        poles and thresholds.
    flags : mapping
        Values of `RELIC_FLAGS`.
    mass : float
        GeV.
    sigma_v_freeze_out : float
        Thermal average at freeze-out in cm^3/s; for a Dirac or complex particle, of particle on antiparticle.
    """

    omega_h2: float
    x_freeze_out: float
    error: float
    flags: dict[str, bool]
    mass: float
    sigma_v_freeze_out: float

    @property
    def temperature(self) -> float:
        """Freeze-out temperature in GeV."""
        return self.mass / self.x_freeze_out


@dataclass(frozen=True)
class ThermalHistory:
    """Freeze-out as a function of x = m/T, for people and figures.

    Parameters
    ----------
    x : ndarray, shape (n,)
        Ascending.
    number_yield, equilibrium_yield : ndarray, shape (n,)
        n/s of particles and antiparticles together, and its equilibrium value.
    sigma_v : ndarray, shape (n,)
        Thermal average in cm^3/s; for a Dirac or complex particle, of particle on antiparticle.
    """

    x: FloatArray
    number_yield: FloatArray
    equilibrium_yield: FloatArray
    sigma_v: FloatArray


@dataclass(frozen=True)
class _Problem:
    """Inputs of the solver, worked out once."""

    nodes: FloatArray
    count: float
    last_x: float
    error: float
    pair_factor: float
    poles: FloatArray


def _pose(mass: float, degrees_of_freedom: int, self_conjugate: bool, annihilation: Annihilation) -> _Problem:
    if not 0.0 < mass < math.inf:
        raise PointError(f"a relic abundance needs a positive mass, not {mass!r} GeV")
    poles = np.array(annihilation.poles, dtype=float).reshape(-1, 2)
    thresholds = np.array(annihilation.thresholds, dtype=float)
    nodes, last_x, error = thermal_nodes(annihilation.total, mass, poles, thresholds)
    # With as many antiparticles as particles and n counting both, only half of all pairs can annihilate.
    pair_factor = 1.0 if self_conjugate else 0.5
    if not self_conjugate:
        nodes[:, 0] *= pair_factor
        nodes[:, 3] *= pair_factor
    return _Problem(nodes, degrees_of_freedom / pair_factor, last_x, error, pair_factor, poles)


def freeze_out(
    *,
    mass: float,
    degrees_of_freedom: int,
    self_conjugate: bool,
    annihilation: Annihilation,
    equation_of_state: str | Blend,
) -> FreezeOut:
    """Solve freeze-out.

    Parameters
    ----------
    mass : float
        GeV.
    degrees_of_freedom : int
        Spin states of the particle alone, the antiparticle not counted.
    self_conjugate : bool
        Whether the particle is its own antiparticle.
    annihilation : Annihilation
        Its `total`, `poles` and `thresholds` are used.
    equation_of_state : str or Blend
        Name of a source in `degrees_of_freedom.SOURCES`, or a blend of two.

    Returns
    -------
    FreezeOut

    Raises
    ------
    PointError
        If the mass is not a positive number, or a blend of equations of state makes no plasma.
    """
    problem = _pose(mass, degrees_of_freedom, self_conjugate, annihilation)
    table = plasma_table(equation_of_state)
    nodes = problem.nodes
    flags = dict.fromkeys(RELIC_FLAGS, False)
    today, x, stepping_error, status, _ = solve(
        nodes, table, mass, problem.count, problem.last_x, 0.0, _DEPARTURE, _TOLERANCE, _LONGEST_STEP, _NO_TRACK
    )
    if status != SOLVED or not 0.0 < today < math.inf:
        flags["relic_abundance_failed"] = True
        return FreezeOut(math.nan, math.nan, math.inf, flags, mass, math.nan)

    sigma_v = average(nodes, x) / problem.pair_factor
    lowest, highest = plasma_range(equation_of_state)
    flags["narrow_resonance"] = _narrow_resonance(problem, mass, x)
    flags["outside_degrees_of_freedom_table"] = mass / x > highest or 0.01 * mass / x < lowest
    flags["never_in_equilibrium"] = x < 5.0 and not _reaches_equilibrium(problem, table, mass)
    flags["above_unitarity_bound"] = sigma_v > s_wave_bound(mass, x)
    flags["thermal_average_uncertain"] = problem.error > 0.01
    error = problem.error + _ERROR_SHARE * stepping_error
    omega_h2 = _OMEGA_PER_YIELD * mass * today
    return FreezeOut(omega_h2, x, error, flags, mass, sigma_v * GEV_M2_TO_CM3_S)


def _narrow_resonance(problem: _Problem, mass: float, x: float) -> bool:
    """Whether a narrow pole supplies a tenth of the average at freeze-out, or lies within one temperature below 2 m."""
    for pole_mass, width in problem.poles.tolist():
        if width < _NARROW * pole_mass:
            if 0.0 <= 2.0 * mass - pole_mass < mass / x:
                return True
            if pole_mass > 2.0 * mass and share_near_poles(problem.nodes, x, mass, pole_mass, width) > 0.1:
                return True
    return False


def _reaches_equilibrium(problem: _Problem, table: FloatArray, mass: float) -> bool:
    """Whether the annihilation rate ever exceeds the expansion rate, from T = m downwards."""
    for x in (LOWEST_X, 2.0, 3.0, 5.0, 8.0):
        rate, equilibrium = rate_and_equilibrium(problem.nodes, table, mass, problem.count, x)
        if rate * equilibrium > 1.0:
            return True
    return False


def thermal_history(
    *,
    mass: float,
    degrees_of_freedom: int,
    self_conjugate: bool,
    annihilation: Annihilation,
    equation_of_state: str | Blend,
) -> ThermalHistory:
    """Freeze-out step by step, from x = 1 to where the yield no longer changes; arguments as for `freeze_out`."""
    problem = _pose(mass, degrees_of_freedom, self_conjugate, annihilation)
    table = plasma_table(equation_of_state)
    track = np.full((2000, 2), np.nan)
    solve(problem.nodes, table, mass, problem.count, problem.last_x, LOWEST_X, _DEPARTURE, 1e-5, 0.05, track)
    track = track[np.isfinite(track[:, 0])]
    equilibrium = [rate_and_equilibrium(problem.nodes, table, mass, problem.count, x)[1] for x in track[:, 0].tolist()]
    sigma_v = [average(problem.nodes, x) / problem.pair_factor for x in track[:, 0].tolist()]
    return ThermalHistory(track[:, 0], track[:, 1], np.array(equilibrium), np.array(sigma_v) * GEV_M2_TO_CM3_S)
