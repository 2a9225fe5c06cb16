"""Limits of one search in bins alone: CLs from profile likelihood ratios with the formulas of arXiv:1007.1727."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Final, Literal, Protocol, Self

import numpy as np
from scipy.optimize import minimize_scalar

from scanfit.contracts import Quantity
from scanfit.errors import PointError
from scanfit.priors import FloatArray

from ..candidate import Candidate
from ..exclusion_plane import spin_one_candidate
from ..limit_statistics import confidence_from_ratios, limits_expected

LIGHT_DARK_MASS: Final = 1.0
"""GeV, for curves against the mediator's mass alone."""
LARGEST_COUPLING: Final = math.sqrt(4.0 * math.pi)

_MASSES: Final = (100.0, 4000.0)
_COUPLINGS: Final = np.geomspace(1e-4, LARGEST_COUPLING, 54)


class Profiled(Protocol):
    """A likelihood of counts whose nuisances can be profiled."""

    def profile(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float: ...

    def asimov(self, signal: FloatArray) -> Self: ...


def ratio(likelihood: Profiled, signal: FloatArray, log_uncertainty: FloatArray) -> float:
    """-2 ln of the profile likelihood ratio between `signal` and the best multiple of it between zero and one."""
    none, full = likelihood.profile(0.0 * signal, log_uncertainty), likelihood.profile(signal, log_uncertainty)
    found = minimize_scalar(
        lambda strength: -likelihood.profile(strength * signal, log_uncertainty),
        bounds=(0.0, 1.0), method="bounded", options={"xatol": 1e-3},
    )  # fmt: skip
    return 2.0 * (max(none, full, -float(found.fun)) - full)


def asimov_ratio(likelihood: Profiled, signal: FloatArray, log_uncertainty: FloatArray) -> float:
    """The same for background-only Asimov data, given as `likelihood`, whose best multiple is zero."""
    best, full = likelihood.profile(0.0 * signal, log_uncertainty), likelihood.profile(signal, log_uncertainty)
    return max(2.0 * (best - full), 0.0)


def confidence(likelihood: Profiled, signal: FloatArray, log_uncertainty: FloatArray) -> tuple[float, float]:
    """Observed CLs of a signal, and the median one without signal."""
    sensitivity = asimov_ratio(likelihood.asimov(0.0 * signal), signal, log_uncertainty)
    observed = confidence_from_ratios(ratio(likelihood, signal, log_uncertainty), sensitivity)
    return observed, confidence_from_ratios(sensitivity, sensitivity)


def coupling_curve(
    likelihood: Profiled,
    signal: Callable[[Candidate], tuple[FloatArray, FloatArray]],
    coupling: Literal["vector", "axial"],
    *,
    level: float,
    points: int,
) -> dict[str, Any]:
    """Limit on the quark coupling against mediator mass; the fields of a `LimitCurve` but title and caveats.

    Infinite where no coupling up to sqrt(4 pi) is excluded, or the analysis refuses the mass.
    """
    masses = np.geomspace(*_MASSES, points)
    background = likelihood.asimov(np.zeros_like(signal_shape(signal, coupling)))
    needed = limits_expected(level, "cls")
    limits = np.full((points, 6), math.inf)
    for row, mass in enumerate(masses):
        significance, log_cls = [], []
        for g_quark in _COUPLINGS:
            try:
                events, spread = signal(spin_one_candidate(float(mass), LIGHT_DARK_MASS, coupling, g_quark, 1.0))
            except PointError:
                break
            sensitivity = asimov_ratio(background, events, spread)
            observed = confidence_from_ratios(ratio(likelihood, events, spread), sensitivity)
            significance.append(math.sqrt(sensitivity))
            log_cls.append(math.log(max(observed, 1e-300)))
            if significance[-1] > needed[-1] and observed < 0.1 * (1.0 - level):
                break
        tested = np.log(_COUPLINGS[: len(significance)])
        limits[row, 0] = _crossing(tested, -np.array(log_cls), -math.log1p(-level))
        limits[row, 1:] = [_crossing(tested, np.array(significance), value) for value in needed]
    return {
        "x": Quantity("mediator_mass", "GeV", "M", "mediator mass"),
        "y": Quantity("g_quark", "", "g_q", "coupling of the mediator to every quark"),
        "level": level,
        "x_values": masses,
        "observed": limits[:, 0],
        "bands": limits[:, 1:],
    }


def signal_shape(
    signal: Callable[[Candidate], tuple[FloatArray, FloatArray]], coupling: Literal["vector", "axial"]
) -> FloatArray:
    """Some signal of the right shape, wherever the analysis admits one."""
    for mass in np.geomspace(*_MASSES, 20):
        try:
            return signal(spin_one_candidate(float(mass), LIGHT_DARK_MASS, coupling, 0.1, 1.0))[0]
        except PointError as error:
            refusal = error
    raise refusal


def _crossing(x: FloatArray, y: FloatArray, level: float) -> float:
    """exp(x) where `y` first rises through `level`, by linear interpolation of ln y; infinite where it never does."""
    above = np.flatnonzero(y >= level)
    if len(above) == 0:
        return math.inf
    high = int(above[0])
    if high == 0:
        return math.exp(x[0])
    low_y, high_y = np.log(np.maximum(y[[high - 1, high]], 1e-12))
    return math.exp(x[high - 1] + (math.log(level) - low_y) / (high_y - low_y) * (x[high] - x[high - 1]))
