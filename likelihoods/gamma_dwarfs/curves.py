"""Upper limits on the annihilation cross section against mass, one final state at a time."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Final

import numpy as np

from scanfit.contracts import LimitCurve, Quantity
from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from .dispersion import EnergyResponse
from .flux_table import FluxLikelihood
from .likelihood import DwarfLikelihood
from .limits import FluxScan, calibrated_fall, one_sided_fall, upper_limit
from .spectra import LINE, TABLE_CHANNELS, TABLE_COLUMN, THRESHOLDS, PhotonTable

CURVES: Final[Mapping[str, str]] = {
    name: f"sigma v into {name} alone, self-conjugate candidate that is all of the dark matter"
    for name in ("bb", "tautau", *(other for other in TABLE_CHANNELS if other not in ("bb", "tautau")), LINE)
}
"""Final states by name; the first is drawn where none is asked for."""
LEVEL: Final = 0.95
QUANTILES: Final = (0.025, 0.16, 0.5, 0.84, 0.975)
SEED: Final = 20_261_201
_SCALE: Final = 1e-26
"""cm^3/s; the factor on which limits are found."""
_ABOVE_BINS: Final = 20.0
"""Masses reach this many times the highest energy: showers make photons far below the mass."""


def flux_of(channel: str, mass: float, sigma_v: float, response: EnergyResponse, table: PhotonTable) -> FloatArray:
    """Photons per cm^2, s and GeV^2 cm^-5 of one final state of a self-conjugate candidate, shape (n_bins,)."""
    weights, line_weight = np.zeros(len(TABLE_CHANNELS)), 0.0
    if channel == LINE:
        line_weight = sigma_v
    else:
        weights[TABLE_COLUMN[channel]] = sigma_v
    return response.photons(table, weights, line_weight, mass) / (8.0 * math.pi * mass**2)


def masses_of(channel: str, points: int, response: EnergyResponse, table: PhotonTable) -> FloatArray:
    """Masses in GeV at which the curve is computed, evenly spaced in their logarithm."""
    low, high = table.mass_range
    if channel == LINE:
        low, high = 1.01 * float(response.edges[0]), 0.99 * float(response.edges[-1])
    else:
        low = max(low, 1.01 * THRESHOLDS.get(channel, 0.0), 1.5 * float(response.edges[0]))
        high = min(high, _ABOVE_BINS * float(response.edges[-1]))
    if low >= high:
        rule = f"needs masses above {low:.3g} GeV, of which the telescope's energies see nothing"
        raise InputError([Problem("curve", rule, channel)])
    return np.geomspace(low, high, points)


def _fall(
    likelihood: DwarfLikelihood | FluxLikelihood,
    flux: FloatArray,
    level: float,
    experiments: int,
    rng: np.random.Generator,
) -> float:
    """The fall at a limit; calibrated, if asked for, at the limit itself and never below the asymptotic one."""
    fall = one_sided_fall(level)
    if experiments == 0 or likelihood.inner == "marginal" or not isinstance(likelihood, DwarfLikelihood):
        return fall
    at_limit = FluxScan(likelihood, flux).upper_limit(fall)
    if not math.isfinite(at_limit):
        return fall
    return max(fall, calibrated_fall(likelihood, at_limit * flux, level, experiments, rng))


def limit_curve(
    likelihood: DwarfLikelihood | FluxLikelihood,
    table: PhotonTable,
    curve: str,
    level: float | None,
    points: int,
    pseudo_experiments: int,
    rng: np.random.Generator | None,
    caveats: tuple[str, ...],
    calibration: int = 0,
) -> LimitCurve:
    """Observed limits, and the bands of background-only pseudo-experiments; see `scanfit.contracts.Term.limit_curve`.

    The same pseudo-experiments serve all masses. Counts fluctuate in them, and so do the measurements of backgrounds;
    J-factors stay as measured, so that the observed limit and the band differ by the telescope's luck alone. Tables of
    log-likelihoods have no band.
    """
    if curve not in CURVES:
        raise InputError([Problem("curve", "not a final state with photons", curve, tuple(CURVES))])
    chosen = LEVEL if level is None else level
    if not 0.5 < chosen < 1.0:
        raise InputError([Problem("level", "must lie between 0.5 and 1", level)])
    response = likelihood.observation.response
    masses = masses_of(curve, points, response, table)
    fluxes = [flux_of(curve, float(mass), _SCALE, response, table) for mass in masses]
    source = np.random.default_rng(SEED) if rng is None else rng
    falls = [_fall(likelihood, flux, chosen, calibration, source) for flux in fluxes]

    def limit(data: DwarfLikelihood | FluxLikelihood, number: int) -> float:
        if data.inner == "marginal":
            return _SCALE * upper_limit(data, fluxes[number], chosen)
        return _SCALE * FluxScan(data, fluxes[number]).upper_limit(falls[number])

    observed = np.array([limit(likelihood, number) for number in range(masses.size)])
    bands = None
    if pseudo_experiments > 0 and isinstance(likelihood, DwarfLikelihood):
        nothing = np.zeros(response.edges.size - 1)
        drawn = [likelihood.simulate(nothing, source, measure_j_again=False) for _ in range(pseudo_experiments)]
        limits = [[limit(data, number) for data in drawn] for number in range(masses.size)]
        bands = np.quantile(np.array(limits), QUANTILES, axis=1, method="inverted_cdf").T
    return LimitCurve(
        title=f"{likelihood.observation.title}: annihilation into {curve}",
        x=Quantity("mass", "GeV", r"m_\chi", "mass of the candidate"),
        y=Quantity("sigma_v", "cm³/s", r"\langle\sigma v\rangle", "annihilation cross section times velocity"),
        level=chosen,
        x_values=masses,
        observed=observed,
        bands=bands,
        caveats=caveats,
    )
