"""Do several explorers agree?

Each pair of posteriors is compared parameter by parameter: means, widths and whole distributions. Two tests decide. A
difference is *material* when a reader would notice it (`TOLERANCES`), and *significant* when the Monte-Carlo error
does not explain it (`SIGNIFICANCE` standard errors, or the corresponding distance of the two-sample
Kolmogorov-Smirnov test). Material and significant is "disagree"; immaterial with an error that would have shown a
material one is "agree"; anything else is "undecided": more points are needed.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final, Literal, TypeAlias

import numpy as np
import pandas as pd

from scanfit.priors import FloatArray
from scanfit.results import Axis
from scanfit.statistics.density import effective_size
from scanfit.statistics.scale import to_scale

Verdict: TypeAlias = Literal["agree", "disagree", "undecided"]
EffectiveSize: TypeAlias = float | Mapping[str, float]

TOLERANCES: Final = {"mean": 0.20, "width": 0.15, "distribution": 0.10, "evidence": 0.5}
"""Smallest material difference: of means in posterior standard deviations, of the log of the ratio of widths, of
cumulative distributions, and of log-evidences."""
SIGNIFICANCE: Final = 3.5
"""Standard errors beyond which a difference is no accident: five times in ten thousand, but many are looked at."""

CRITERION: Final = (
    f"Disagreement is a difference larger than {TOLERANCES['mean']:g} posterior standard deviations in a mean, "
    f"{100 * TOLERANCES['width']:.0f} % in a width, {TOLERANCES['distribution']:g} in a cumulative distribution or "
    f"{TOLERANCES['evidence']:g} in the log-evidence that is also beyond {SIGNIFICANCE:g} standard errors; agreement "
    "is a smaller one, known to better than the tolerance."
)


@dataclass(frozen=True)
class _Difference:
    kind: str
    value: float
    error: float
    """Standard error under the hypothesis that both sample the same distribution."""

    @property
    def verdict(self) -> Verdict:
        material = abs(self.value) > TOLERANCES[self.kind]
        if material:
            return "disagree" if abs(self.value) > SIGNIFICANCE * self.error else "undecided"
        return "agree" if self.error <= TOLERANCES[self.kind] else "undecided"


def compare(
    posteriors: Mapping[str, pd.DataFrame],
    axes: Mapping[str, Axis],
    *,
    evidences: Mapping[str, tuple[float, float]] | None = None,
    effective_sizes: Mapping[str, EffectiveSize] | None = None,
) -> dict[str, Any]:
    """Compare every pair of posteriors.

    Parameters
    ----------
    posteriors : mapping of str to DataFrame
        Weighted points with a column ``weight``, by explorer.
    axes : mapping of str to Axis
        What to compare, normally the free parameters; means and widths are taken on the axis' scale.
    evidences : mapping of str to (log_evidence, error), optional
        Of those explorers that give one.
    effective_sizes : mapping of str to (float, or mapping of str to float), optional
        Number of independent points of an explorer, of each parameter where they differ, where it knows better than the
        weights do: for a Markov chain, its length over its autocorrelation time. Without it errors of chains come out
        too small.

    Returns
    -------
    dict, JSON-ready
        ``verdict`` ("agree", "disagree" or "undecided"; "alone" when there is one posterior), ``criterion``,
        ``effective_sizes``, and ``pairs``: for each pair ``first``, ``second``, ``verdict``, ``worst`` (the sentence
        that names the largest difference), ``parameters`` and ``evidence`` (None unless both give one). Every
        parameter has ``mean_shift`` in posterior standard deviations, ``mean_shift_error``,
        ``mean_shift_significance``, ``width_ratio``, ``log_width_ratio_error``, ``distance``, ``distance_error`` and
        ``verdict``.
    """
    given = effective_sizes or {}
    sizes: dict[str, EffectiveSize] = {
        name: given.get(name, effective_size(frame["weight"].to_numpy(dtype=float)))
        for name, frame in posteriors.items()
    }
    pairs = [
        _pair(first, second, posteriors, axes, sizes, evidences or {})
        for first, second in itertools.combinations(posteriors, 2)
    ]
    verdict = _joint([pair["verdict"] for pair in pairs]) if pairs else "alone"
    smallest = {explorer: min((_size(size, name) for name in axes), default=0.0) for explorer, size in sizes.items()}
    return {"verdict": verdict, "criterion": CRITERION, "effective_sizes": smallest, "pairs": pairs}


def distribution_distance(
    first: FloatArray, first_weights: FloatArray, second: FloatArray, second_weights: FloatArray
) -> float:
    """Largest difference of two weighted cumulative distributions (the Kolmogorov-Smirnov distance)."""
    values = np.concatenate([first, second])
    steps = np.concatenate([first_weights / first_weights.sum(), -second_weights / second_weights.sum()])
    order = np.argsort(values, kind="stable")
    ordered, gap = values[order], np.cumsum(steps[order])
    last_of_equals = np.r_[ordered[1:] != ordered[:-1], True]
    return float(np.abs(gap[last_of_equals]).max())


def _pair(
    first: str,
    second: str,
    posteriors: Mapping[str, pd.DataFrame],
    axes: Mapping[str, Axis],
    sizes: Mapping[str, EffectiveSize],
    evidences: Mapping[str, tuple[float, float]],
) -> dict[str, Any]:
    parameters: dict[str, Any] = {}
    judged: list[tuple[str, _Difference]] = []
    for name, axis in axes.items():
        samples = _sample(posteriors[first], axis), _sample(posteriors[second], axis)
        differences = _differences(*samples, _size(sizes[first], name), _size(sizes[second], name))
        judged += [(f"{name}: {difference.kind}", difference) for difference in differences.values()]
        mean, width, shape = differences["mean"], differences["width"], differences["distribution"]
        parameters[name] = {
            "mean_shift": mean.value,
            "mean_shift_error": mean.error,
            "mean_shift_significance": mean.value / mean.error,
            "width_ratio": math.exp(width.value),
            "log_width_ratio_error": width.error,
            "distance": shape.value,
            "distance_error": shape.error,
            "verdict": _joint([difference.verdict for difference in differences.values()]),
        }
    evidence = None
    if first in evidences and second in evidences:
        (one, one_error), (two, two_error) = evidences[first], evidences[second]
        difference = _Difference("evidence", one - two, math.hypot(one_error, two_error))
        judged.append(("log-evidence", difference))
        evidence = {"difference": difference.value, "error": difference.error, "verdict": difference.verdict}
    verdict = _joint([difference.verdict for _, difference in judged])
    return {
        "first": first,
        "second": second,
        "verdict": verdict,
        "worst": _worst(judged),
        "parameters": parameters,
        "evidence": evidence,
    }


def _size(size: EffectiveSize, parameter: str) -> float:
    return size if isinstance(size, int | float) else size[parameter]


def _sample(posterior: pd.DataFrame, axis: Axis) -> tuple[FloatArray, FloatArray]:
    scaled = to_scale(posterior[axis.name].to_numpy(dtype=float), axis)
    weights = posterior["weight"].to_numpy(dtype=float)
    usable = np.isfinite(scaled) & (weights > 0.0)
    return scaled[usable], weights[usable] / weights[usable].sum()


def _differences(
    first: tuple[FloatArray, FloatArray], second: tuple[FloatArray, FloatArray], size: float, other_size: float
) -> dict[str, _Difference]:
    (mean, variance, tail), (other_mean, other_variance, other_tail) = _moments(*first), _moments(*second)
    pooled = math.sqrt(0.5 * (variance + other_variance)) or 1.0
    shift_error = math.sqrt(variance / size + other_variance / other_size) / pooled
    # The variance of a sample variance is (kurtosis - 1)/n in units of the variance squared; half of it for the log
    # width.
    width_error = 0.5 * math.sqrt(max(tail - 1.0, 0.0) / size + max(other_tail - 1.0, 0.0) / other_size)
    log_ratio = 0.5 * math.log(variance / other_variance) if variance > 0.0 and other_variance > 0.0 else 0.0
    # Tail of the Kolmogorov distribution, p = 2 exp(-2 n d^2): the distance whose p equals that of SIGNIFICANCE.
    harmonic = size * other_size / (size + other_size)
    chance = math.erfc(SIGNIFICANCE / math.sqrt(2.0))
    distance_error = math.sqrt(-0.5 * math.log(0.5 * chance) / harmonic) / SIGNIFICANCE
    return {
        "mean": _Difference("mean", (mean - other_mean) / pooled, shift_error or 1e-300),
        "width": _Difference("width", log_ratio, width_error),
        "distribution": _Difference("distribution", distribution_distance(*first, *second), distance_error),
    }


def _moments(values: FloatArray, weights: FloatArray) -> tuple[float, float, float]:
    """Mean, variance and kurtosis."""
    mean = float(weights @ values)
    squares = np.square(values - mean)
    variance = float(weights @ squares)
    return mean, variance, float(weights @ np.square(squares)) / variance**2 if variance > 0.0 else 1.0


def _joint(verdicts: list[Verdict]) -> Verdict:
    if "disagree" in verdicts:
        return "disagree"
    return "undecided" if "undecided" in verdicts else "agree"


def _worst(judged: list[tuple[str, _Difference]]) -> str:
    name, difference = max(judged, key=lambda item: abs(item[1].value) / TOLERANCES[item[1].kind])
    return (
        f"{name} differs by {abs(difference.value):.2g} ± {difference.error:.1g} "
        f"(tolerance {TOLERANCES[difference.kind]:g})"
    )
