"""What one observation says alone: upper limits on a flux, their calibration, and which targets show an excess.

Two kinds of limit, after the treatment of J-factors:

* *profile*: the flux at which the profiled log-likelihood has fallen from its maximum by half the square of the normal
  quantile, 1.353 at 95 %;
* *marginal*: the credible limit, below which 95 % of the posterior lie when the prior is flat in the flux.

What they are worth was measured with 1,000 pseudo-experiments per entry (errors up to 0.9): five targets, 18, 90 and
480 signal photons on 4,400 of background. Percentages that exclude the truth, J known to 0.05, 0.25, 0.4, 0.6 dex:

    limit, photons     measurements repeated      J scattered
    profile,   18      0.4   1.4   3.5   5.4      0.1   0.3   0.0   0.0
    profile,   90      4.6   7.3   7.5   9.4      6.3   2.8   2.1   0.6
    profile,  480      6.5   5.6   6.4   8.2      5.3   3.0   1.6   1.5
    marginal,  18      0.0   0.1   0.5   0.6      0.0   0.0   0.0   0.0
    marginal,  90      3.6   5.5   5.3   4.7      5.0   1.3   0.9   0.1
    marginal, 480      6.1   4.8   4.9   4.0      5.2   3.0   1.4   1.2

"Measurements repeated" holds the true J-factors and lets the measured ones fluctuate; "J scattered" holds the measured
ones and draws true ones from their errors. Marginal limits cover in both senses. Profile limits are safe in the second
only: measured values scatter evenly in log J, so their mean exceeds the true J, and weak targets cannot tell.
`calibrated_fall` finds the fall that covers. Checks: tests/statistics/test_gamma_coverage.py.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq, minimize_scalar
from scipy.stats import norm

from scanfit.contracts import InnerNuisances
from scanfit.priors import FloatArray

from .galaxies import SharedNuisance

_FEWEST_PHOTONS = 1e-3
_STEP = 0.5
"""In the logarithm of the flux: likelihoods are smooth on steps of a factor 1.6."""
_MOST_STEPS = 90
_TAIL = 12.0
"""Log-likelihoods lower than this below the maximum do not count in a credible limit."""
_NODES = 25
_ZOOMS = 5
_UPDATES = 2
"""Newton steps in each shared nuisance; measured: the second changes the log-likelihood by less than 1e-3."""


class GammaLikelihood(Protocol):
    """What this module needs of a likelihood."""

    @property
    def inner(self) -> InnerNuisances: ...

    @property
    def shared(self) -> tuple[SharedNuisance, ...]: ...

    def by_target(self, flux_per_j: FloatArray, values: Mapping[str, float] = ...) -> FloatArray: ...

    def total(self, flux_per_j: FloatArray, values: Mapping[str, float] = ...) -> float: ...

    def photons(self, flux_per_j: FloatArray) -> float: ...

    def simulate(
        self, flux_per_j: FloatArray, rng: np.random.Generator, values: Mapping[str, float] = ...
    ) -> GammaLikelihood: ...


def one_sided_fall(level: float) -> float:
    """Fall of the log-likelihood at a one-sided limit of this confidence level; 1.353 at 95 %."""
    return 0.5 * float(norm.isf(1.0 - level)) ** 2


def without_shared(likelihood: GammaLikelihood, flux_per_j: FloatArray) -> float:
    """Log-likelihood with shared nuisances profiled, their measurements included (up to constants)."""
    if not likelihood.shared:
        return likelihood.total(flux_per_j)
    values = {one.name: one.centre for one in likelihood.shared}

    def value(changed: Mapping[str, float]) -> float:
        penalty = sum(((changed[one.name] - one.centre) / one.error) ** 2 for one in likelihood.shared)
        return likelihood.total(flux_per_j, changed) - 0.5 * penalty

    best = value(values)
    for _ in range(_UPDATES):
        for one in likelihood.shared:
            step = 0.1 * one.error
            here = values[one.name]
            above, below = value({**values, one.name: here + step}), value({**values, one.name: here - step})
            curvature = (2.0 * best - above - below) / step**2
            # The measurement alone has curvature 1 / error^2: less means that the log-likelihood is not concave here.
            move = 0.5 * (above - below) / step / max(curvature, one.error**-2)
            tried = {**values, one.name: here + float(np.clip(move, -3.0 * one.error, 3.0 * one.error))}
            found = value(tried)
            if found > best:
                best, values = found, tried
    return best


@dataclass(frozen=True)
class FluxScan:
    """Log-likelihood along multiples of a flux.

    Parameters
    ----------
    likelihood : GammaLikelihood
        The data.
    flux_per_j : ndarray
        The flux at factor one.
    """

    likelihood: GammaLikelihood
    flux_per_j: FloatArray

    def value(self, factor: float) -> float:
        """Log-likelihood of `factor` times the flux."""
        return without_shared(self.likelihood, factor * self.flux_per_j)

    def best(self, fall: float = 0.0) -> tuple[float, float, list[tuple[float, float]]]:
        """Best factor, its log-likelihood, and the values on the way up to where they fell by more than `fall`."""
        photons = self.likelihood.photons(self.flux_per_j)
        path = [(0.0, self.value(0.0))]
        log_factor = math.log(_FEWEST_PHOTONS / photons)
        for number in range(_MOST_STEPS):
            path.append((math.exp(log_factor), self.value(math.exp(log_factor))))
            if path[-1][1] < max(value for _, value in path) - fall - 3.0:
                break
            log_factor += 4.0 * _STEP if number < 2 else _STEP
        at = max(range(len(path)), key=lambda k: path[k][1])
        if at == 0:
            return (*path[0], path)
        low = path[max(at - 1, 1)][0]
        high = path[min(at + 1, len(path) - 1)][0]
        found = minimize_scalar(
            lambda point: -self.value(math.exp(point)),
            bounds=(math.log(low), math.log(high)),
            method="bounded",
            options={"xatol": 1e-3},
        )
        if -found.fun <= path[at][1]:
            return (*path[at], path)
        return math.exp(float(found.x)), -float(found.fun), path

    def upper_limit(self, fall: float) -> float:
        """Largest factor whose log-likelihood lies at most `fall` below the maximum over factors >= 0.

        Infinite if the flux is zero or the data cannot limit it.
        """
        if not self.likelihood.photons(self.flux_per_j) > 1e-299:
            return math.inf
        _, highest, path = self.best(fall)
        inside = max(k for k in range(len(path)) if path[k][1] >= highest - fall)
        if inside == len(path) - 1:
            return math.inf
        left, right = path[inside][0], path[inside + 1][0]
        return float(brentq(lambda factor: self.value(factor) - highest + fall, left, right, rtol=1e-5, xtol=1e-300))

    def credible_limit(self, level: float) -> float:
        """Factor below which `level` of the posterior lie, prior flat in the factor; infinite if the flux is zero."""
        photons = self.likelihood.photons(self.flux_per_j)
        if not photons > 1e-299:
            return math.inf
        _, highest, path = self.best(_TAIL)
        inside = [k for k in range(1, len(path)) if path[k][1] > highest - _TAIL] or [len(path) - 1]
        low, high = path[max(inside[0] - 1, 1)][0], path[min(inside[-1] + 1, len(path) - 1)][0]
        if path[-1][1] > highest - _TAIL:
            return math.inf
        low = max(low, 0.05 / photons)
        for _ in range(_ZOOMS):
            factors = np.geomspace(low, high, _NODES)
            values = np.array([self.value(float(factor)) for factor in factors])
            near = np.flatnonzero(values > values.max() - _TAIL)
            if near.size >= _NODES // 2:
                break
            low, high = factors[max(near[0] - 1, 0)], factors[min(near[-1] + 1, _NODES - 1)]
        fine = np.geomspace(low, high, 40 * _NODES)
        density = np.exp(CubicSpline(np.log(factors), values)(np.log(fine)) - values.max())
        # Below the first node the likelihood is constant, or nothing is left.
        pieces = 0.5 * (density[1:] + density[:-1]) * np.diff(fine)
        below = low * density[0] + np.concatenate([[0.0], np.cumsum(pieces)])
        return float(np.interp(level * below[-1], below, fine))


def upper_limit(likelihood: GammaLikelihood, flux_per_j: FloatArray, level: float = 0.95) -> float:
    """Largest factor on `flux_per_j` allowed at this level: profiled, or credible where J is integrated out."""
    scan = FluxScan(likelihood, flux_per_j)
    return scan.upper_limit(one_sided_fall(level)) if likelihood.inner == "profile" else scan.credible_limit(level)


def fall_at_truth(likelihood: GammaLikelihood, flux_per_j: FloatArray) -> float:
    """How far the truth lies below the best smaller flux; zero where the best flux exceeds it."""
    best, highest, _ = FluxScan(likelihood, flux_per_j).best()
    return highest - without_shared(likelihood, flux_per_j) if best < 1.0 else 0.0


def calibrated_fall(
    likelihood: GammaLikelihood, flux_per_j: FloatArray, level: float, experiments: int, rng: np.random.Generator
) -> float:
    """The fall that excludes this true flux in a fraction 1 - level of pseudo-experiments."""
    falls = [fall_at_truth(likelihood.simulate(flux_per_j, rng), flux_per_j) for _ in range(experiments)]
    return float(np.quantile(falls, level))


@dataclass(frozen=True)
class TargetExcess:
    """What one target says alone about a flux.

    Parameters
    ----------
    name : str
        Of the target.
    best_factor : float
        Multiple of the flux that it prefers, at its measured J-factor or as profiled.
    test_statistic : float
        2 ln(likelihood ratio) of that to no signal, at least zero.
    local_p_value : float
        Chance of at least this much without a signal, 1 - Phi(sqrt TS): asymptotic, for one target and one spectrum.
    """

    name: str
    best_factor: float
    test_statistic: float
    local_p_value: float


def target_excesses(likelihood: GammaLikelihood, flux_per_j: FloatArray, names: tuple[str, ...]) -> list[TargetExcess]:
    """How much each target prefers a multiple of the flux, strongest first; shared nuisances at measured values."""
    photons = likelihood.photons(flux_per_j)
    if not photons > 1e-299:
        return [TargetExcess(name, 0.0, 0.0, 0.5) for name in names]
    factors = np.concatenate([[0.0], np.exp(np.arange(math.log(1e-3), math.log(1e7), 0.1)) / photons])
    table = np.array([likelihood.by_target(factor * flux_per_j) for factor in factors])
    rows = table.argmax(axis=0)
    gain = 2.0 * (table.max(axis=0) - table[0])
    found = [
        TargetExcess(name, float(factors[row]), float(ts), float(norm.sf(math.sqrt(ts))))
        for name, row, ts in zip(names, rows, gain, strict=True)
    ]
    return sorted(found, key=lambda one: -one.test_statistic)
