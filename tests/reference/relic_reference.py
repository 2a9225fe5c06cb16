"""Freeze-out once more, slowly, with nothing but scipy: adaptive quadrature and a general-purpose stiff solver.

Only the degrees of freedom are shared with the project; they have their own tests. The thermal average is integrated
in y, s = 4 m^2 (1 + y^2), with `scipy.integrate.quad` between cuts placed around every pole and threshold, at 400
values of x; a quintic spline of its logarithm feeds `scipy.integrate.solve_ivp` (Radau, rtol 1e-9) for ln Y against
ln x.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence

import numpy as np
from scipy.integrate import quad, solve_ivp
from scipy.interpolate import make_interp_spline
from scipy.special import kve

from scanfit.likelihoods.constants import CRITICAL_DENSITY_GEV_CM3, ENTROPY_TODAY_CM3, PLANCK_MASS
from scanfit.likelihoods.relic_abundance.degrees_of_freedom import SOURCES, g_star_sqrt

Poles = Sequence[tuple[float, float]]


def cuts_in_y(mass: float, poles: Poles, thresholds: Sequence[float]) -> list[float]:
    """Values of y between which sigma v is smooth on the scale of the interval."""
    s_cuts = [threshold**2 for threshold in thresholds]
    for pole_mass, width in poles:
        for distance in (0.0, 1.0, 4.0, 16.0, 64.0, 256.0, 1e3, 1e4, 1e5, 1e6):
            s_cuts += [pole_mass**2 + sign * distance * pole_mass * width for sign in (-1.0, 1.0)]
    y2 = [s / (4.0 * mass**2) - 1.0 for s in s_cuts]
    return [math.sqrt(value) for value in y2 if value > 0.0]


def thermal_average(
    sigma_v: Callable[[float], float], mass: float, x: float, poles: Poles = (), thresholds: Sequence[float] = ()
) -> float:
    """<sigma v>(x) in the unit of `sigma_v`, which takes a number s and is sigma times 2 sqrt(1 - 4 m^2/s)."""
    k2 = float(kve(2, x))

    def integrand(y: float) -> float:
        energy = math.sqrt(1.0 + y * y)
        weight = 4.0 * x * y * y * (1.0 + y * y) * float(kve(1, 2.0 * x * energy)) / k2**2
        return weight * sigma_v(4.0 * mass**2 * (1.0 + y * y)) * math.exp(-2.0 * x * y * y / (energy + 1.0))

    scale = 1.0 / math.sqrt(x)
    last = 10.0 * scale + 40.0 / x
    # Below a closed channel's threshold everything may vanish: the bump then sits behind the first open one.
    cuts = cuts_in_y(mass, poles, thresholds)
    bulk = [c * scale for c in (0.3, 1.0, 2.0, 3.5, 6.0)]
    bulk += [math.sqrt(cut**2 + step / x) for cut in cuts for step in (1.0, 6.0) if len(cuts) < 12]
    edges = sorted({0.0, last, *[y for y in (*bulk, *cuts) if y < last]})
    pieces = itertools.pairwise(edges)
    parts = [quad(integrand, a, b, epsabs=0.0, epsrel=1e-10, limit=400) for a, b in pieces if b - a > 1e-14]
    return float(sum(part[0] for part in parts))


def omega_h2(
    sigma_v: Callable[[float], float],
    mass: float,
    count: float,
    poles: Poles = (),
    thresholds: Sequence[float] = (),
    source: str = "arxiv-1803.01038",
    average: Callable[[float], float] | None = None,
) -> float:
    """Relic abundance.

    Parameters
    ----------
    sigma_v : callable
        GeV^-2 at a number s; halved by the caller where particle and antiparticle differ.
    mass : float
        GeV.
    count : float
        Internal degrees of freedom, antiparticles included.
    average : callable, optional
        <sigma v>(x) in GeV^-2, instead of the integral over `sigma_v`.
    """
    last_x = 1e6
    for pole_mass, width in poles:
        distance = math.hypot(pole_mass**2 / (4.0 * mass**2) - 1.0, pole_mass * width / (4.0 * mass**2))
        last_x = min(max(last_x, 30.0 / distance), 1e9)
    if average is None:

        def average(x: float) -> float:
            return thermal_average(sigma_v, mass, x, poles, thresholds)

    factor = math.sqrt(math.pi / 45.0) * PLANCK_MASS * mass
    log_t = np.arange(math.log(mass / last_x) - 0.01, math.log(mass) + 0.01, 1e-3)
    g_s_grid, g_star_grid = SOURCES[source].g_s(np.exp(log_t)), g_star_sqrt(np.exp(log_t), source)

    def rate_over_average(x: float) -> float:
        return factor * float(np.interp(math.log(mass / x), log_t, g_star_grid)) / x

    def log_equilibrium(x: float) -> float:
        g = float(np.interp(math.log(mass / x), log_t, g_s_grid))
        return math.log(45.0 * count / (4.0 * math.pi**4) / g * x * x * kve(2, x)) - x

    # Start where Y exceeds Y_eq by about 1e-5: a full e-fold in x before it could matter.
    first_x = 1.0
    for x in np.arange(60.0, 1.0, -1.0):
        rate = rate_over_average(float(x)) * average(float(x))
        if rate * math.exp(log_equilibrium(x)) > 1e5 * x:
            first_x = float(x)
            break
    early = np.linspace(math.log(first_x), math.log(first_x * 4.0), 160, endpoint=False)
    late = np.linspace(math.log(first_x * 4.0), math.log(last_x * 1.001), 240)
    grid = np.concatenate([early, late])
    averages = np.array([average(math.exp(tau)) for tau in grid])
    log_average = make_interp_spline(grid, np.log(np.maximum(averages, 1e-290)), k=5)

    def slope(tau: float, w: np.ndarray) -> list[float]:
        x = math.exp(tau)
        rate = rate_over_average(x) * math.exp(float(log_average(tau)))
        return [-rate * (math.exp(w[0]) - math.exp(2.0 * log_equilibrium(x) - w[0]))]

    start = [log_equilibrium(first_x) + (1e-5 if first_x > 1.0 else 0.0)]
    # A short first step, or the solver may leap over freeze-out.
    span = (math.log(first_x), math.log(last_x))
    solution = solve_ivp(slope, span, start, method="Radau", rtol=1e-9, atol=1e-10, first_step=1e-4, max_step=0.5)
    today = math.exp(solution.y[0, -1])
    rate = rate_over_average(last_x) * averages[-1]
    return float(ENTROPY_TODAY_CM3 / CRITICAL_DENSITY_GEV_CM3 * mass / (1.0 / today + rate))
