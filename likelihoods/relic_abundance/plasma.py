"""The primordial plasma that a candidate freezes out of: one published source, or a blend of two as a nuisance.

Published degrees of freedom differ by several per cent. A `Blend` carries that difference through a scan: with a share
t of the second source

    ln g_rho = (1 - t) ln g_rho,1 + t ln g_rho,2,        ln g_s likewise,

so t = 0 is the first source, t = 1 the second, and any t in between (or a little outside) is a plasma with positive
densities. g*^(1/2) is formed from the blended g_rho, g_s and slope of ln g_s, so it stays consistent with them.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from scanfit.errors import PointError
from scanfit.priors import FloatArray

from .degrees_of_freedom import EQUATIONS_OF_STATE, SOURCES, entropy_slope, solver_table, solver_temperatures


@dataclass(frozen=True)
class Blend:
    """Two sources of degrees of freedom, by name, and the share of the second."""

    first: str
    second: str
    share: float


def other_source(source: str) -> str:
    """The source that `source` is compared with unless told otherwise: the first of the list that is another."""
    return next(name for name in EQUATIONS_OF_STATE if name != source)


def plasma_table(equation_of_state: str | Blend) -> FloatArray:
    """g_s and g*^(1/2) for the solver, as `degrees_of_freedom.solver_table`.

    Raises
    ------
    PointError
        If a blend lies so far outside its two sources that the entropy would fall with temperature.
    """
    if isinstance(equation_of_state, str):
        return solver_table(equation_of_state)
    logs = _logarithms(equation_of_state.first)
    logs = logs + equation_of_state.share * (_logarithms(equation_of_state.second) - logs)
    g_s = np.exp(logs[:, 0])
    g_star_sqrt = g_s * np.exp(-0.5 * logs[:, 1]) * (1.0 + logs[:, 2] / 3.0)
    if not g_star_sqrt.min() > 0.0:
        raise PointError(
            f"a share of {equation_of_state.share:g} of {equation_of_state.second} in {equation_of_state.first} "
            "extrapolates the degrees of freedom to an entropy that falls with temperature"
        )
    return np.column_stack([g_s, g_star_sqrt])


def plasma_range(equation_of_state: str | Blend) -> tuple[float, float]:
    """Temperatures in GeV between which every source involved is published."""
    names = (
        (equation_of_state,)
        if isinstance(equation_of_state, str)
        else (equation_of_state.first, equation_of_state.second)
    )
    return max(SOURCES[name].lowest for name in names), min(SOURCES[name].highest for name in names)


@lru_cache(maxsize=len(EQUATIONS_OF_STATE))
def _logarithms(source: str) -> FloatArray:
    """Columns ln g_s, ln g_rho and d ln g_s/d ln T on the solver's grid, shape (n, 3)."""
    temperature = solver_temperatures()
    g = SOURCES[source]
    slope = entropy_slope(temperature, source)
    return np.column_stack([np.log(g.g_s(temperature)), np.log(g.g_rho(temperature)), slope])
