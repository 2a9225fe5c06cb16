"""One-dimensional summary of every parameter and derived quantity."""

from __future__ import annotations

import math
from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

import numpy as np
import pandas as pd

from scanfit.priors import FloatArray, Prior
from scanfit.results import Axis
from scanfit.statistics.binned import Archive
from scanfit.statistics.credible import Interval, credible_intervals, marginal_density
from scanfit.statistics.density import weighted_quantile
from scanfit.statistics.levels import LEVELS
from scanfit.statistics.profile import profile, profile_intervals
from scanfit.statistics.scale import from_scale, to_scale


def intervals(
    posterior: pd.DataFrame,
    points: pd.DataFrame,
    axes: Mapping[str, Axis],
    constraints: Mapping[str, Prior] = MappingProxyType({}),
) -> dict[str, dict[str, Any]]:
    """Moments, credible intervals and profile-likelihood intervals of every axis.

    Parameters
    ----------
    posterior : DataFrame
        Weighted posterior points with the columns of `axes` and ``weight``.
    points : DataFrame
        Archive with the columns of `axes`, ``log_likelihood``, ``status`` and ``loglike_<term>``.
    axes : mapping of str to Axis
        Parameters and derived quantities by column name.
    constraints : mapping of str to Prior
        Priors of the free nuisances, counted in the profile likelihood; see `binned.log_constraint`.

    Returns
    -------
    dict, JSON-ready
        By name: ``mean``, ``std`` (of the value itself) and ``median``; ``scale_mean`` and ``scale_std`` on the axis'
        scale, in dex where it is logarithmic; ``credible_68``, ``credible_95``, ``profile_68`` and ``profile_95``,
        each a list of intervals [low, high] in declared units; ``shown``, the posterior probability that the axis can
        show (the rest is undefined, or zero on a logarithmic axis) and that the intervals refer to. Numbers that do
        not exist are None. A quantity that takes one value has intervals of no width.
    """
    archive = Archive(points, constraints)
    weights = posterior["weight"].to_numpy(dtype=float)
    weights = weights / weights.sum()
    return {
        name: _summary(posterior[name].to_numpy(dtype=float), weights, points, archive, axis)
        for name, axis in axes.items()
    }


def _summary(
    values: FloatArray, weights: FloatArray, points: pd.DataFrame, archive: Archive, axis: Axis
) -> dict[str, Any]:
    scaled = to_scale(values, axis)
    usable = np.isfinite(scaled) & (weights > 0.0)
    finite = np.isfinite(values) & (weights > 0.0)
    mean, deviation = _moments(values[finite], weights[finite])
    scale_mean, scale_deviation = _moments(scaled[usable], weights[usable])
    median = float(weighted_quantile(values[finite], weights[finite], 0.5)) if finite.any() else None
    summary: dict[str, Any] = {
        "mean": mean,
        "std": deviation,
        "median": median,
        "scale_mean": scale_mean,
        "scale_std": scale_deviation,
        "shown": min(1.0, float(weights[usable].sum())),
    }
    density = marginal_density(values, weights, axis)
    curve = profile(points, (axis,), archive)
    # A quantity with one value has no density and no curve, but an interval all the same.
    single = scaled[usable]
    lone: list[Interval] = []
    if len(single):
        value = float(from_scale(single[:1], axis)[0])
        lone = [(value, value)]
    for label, level in LEVELS.items():
        credible = lone if density is None else credible_intervals(density, level, axis)
        profiled = lone if curve is None else profile_intervals(curve, level)
        summary[f"credible_{label}"] = [list(ends) for ends in credible]
        summary[f"profile_{label}"] = [list(ends) for ends in profiled]
    return summary


def _moments(values: FloatArray, weights: FloatArray) -> tuple[float | None, float | None]:
    if len(values) == 0:
        return None, None
    mean = float(np.average(values, weights=weights))
    deviation = math.sqrt(float(np.average(np.square(values - mean), weights=weights)))
    return mean, deviation
