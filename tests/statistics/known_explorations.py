"""Run an explorer on a known problem and measure how far its answer is from the truth, in units of its own errors."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from known_problems import Array, Problem

from scanfit.contracts import Exploration, Explorer


@dataclass
class Evaluation:
    """An `Evaluate` on a known log-likelihood that counts, and may split its batches as workers would."""

    problem: Problem
    split: int = 0
    calls: int = 0

    def __call__(self, unit_points: Array) -> Array:
        self.calls += len(unit_points)
        if self.split == 0:
            return self.problem.log_likelihood(unit_points)
        parts = [unit_points[first : first + self.split] for first in range(0, len(unit_points), self.split)]
        return np.concatenate([self.problem.log_likelihood(part) for part in parts])


def explore(
    kind: type[Explorer], problem: Problem, seed: int, options: Mapping[str, Any], split: int = 0
) -> Exploration:
    """Run to the end."""
    explorer = kind(kind.Options(**options))
    names = [f"x{number + 1}" for number in range(problem.dimension)]
    explorer.start(names, np.random.SeedSequence(seed), Evaluation(problem, split))
    while not explorer.finished:
        explorer.advance()
    return explorer.result()


def effective_samples(found: Exploration) -> float:
    """Of a weighted sample, by Kish; of chains, the smallest that they report."""
    reported = found.diagnostics["effective_samples"]
    return float(min(reported.values()) if isinstance(reported, dict) else reported)


def pulls(found: Exploration, problem: Problem) -> dict[str, float]:
    """Largest deviations from the truth in standard errors: of means, of standard deviations, of ln(evidence).

    The standard error of a standard deviation comes from the fourth moment of the sample. Both are for independent
    draws as many as the effective samples.
    """
    weights = np.exp(found.log_weights)
    number = effective_samples(found)
    mean = weights @ found.unit_points
    away = found.unit_points - mean
    variance = weights @ away**2
    kurtosis = (weights @ away**4) / variance**2
    errors = {
        "mean": np.abs(mean - problem.mean) / np.sqrt(variance / number),
        "deviation": np.abs(np.sqrt(variance) / problem.deviation - 1.0) / np.sqrt((kurtosis - 1.0) / (4.0 * number)),
    }
    largest = {name: float(values.max()) for name, values in errors.items()}
    if found.log_evidence is not None and found.log_evidence_error is not None:
        largest["log_evidence"] = abs(found.log_evidence - problem.log_evidence) / found.log_evidence_error
    return largest
