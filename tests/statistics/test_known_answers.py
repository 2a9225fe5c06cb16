"""Both explorers recover known posteriors and evidences within their own stated errors.

The tolerance is 4.5 standard errors: about 600 numbers are compared, so that a right explorer fails with one choice of
the seeds in 200. They are fixed.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import known_problems as known
import numpy as np
import pytest
from known_explorations import explore, pulls
from scipy.stats import chi2

from scanfit.contracts import Explorer
from scanfit.explorers.ensemble import Ensemble
from scanfit.explorers.nested import Nested

LARGEST_PULL = 4.5

GAUSSIANS = [known.correlated_gaussian(dimension) for dimension in (2, 5, 10)]
SHELLS = [known.gaussian_shells(dimension) for dimension in (2, 5)]
CHAIN = known.rosenbrock_chain(3)


def check(kind: type[Explorer], problem: known.Problem, seed: int, options: Mapping[str, Any]) -> None:
    found = explore(kind, problem, seed, options)
    assert found.converged, found.verdict
    assert found.log_evidence is not None
    for quantity, pull in pulls(found, problem).items():
        assert pull < LARGEST_PULL, f"{quantity} is off by {pull:.1f} standard errors"


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("problem", [*GAUSSIANS, CHAIN], ids=lambda problem: problem.name)
def test_nested_sampling(problem: known.Problem, seed: int) -> None:
    check(Nested, problem, seed, {"live_points": 300})


@pytest.mark.parametrize("seed", [1, 2])
@pytest.mark.parametrize("problem", SHELLS, ids=lambda problem: problem.name)
def test_nested_sampling_of_shells(problem: known.Problem, seed: int) -> None:
    check(Nested, problem, seed, {"live_points": 300})


@pytest.mark.parametrize("problem", [GAUSSIANS[1], CHAIN], ids=lambda problem: problem.name)
def test_dynamic_nested_sampling(problem: known.Problem) -> None:
    check(Nested, problem, 1, {"mode": "dynamic", "live_points": 200, "effective_samples": 4000})


def test_nested_sampling_by_random_walks() -> None:
    check(Nested, GAUSSIANS[1], 1, {"live_points": 150, "proposal": "random-walk"})


@pytest.mark.parametrize("seed", [1, 2])
@pytest.mark.parametrize("problem", GAUSSIANS[:2], ids=lambda problem: problem.name)
def test_ensembles(problem: known.Problem, seed: int) -> None:
    check(Ensemble, problem, seed, {})


@pytest.mark.parametrize("problem", [GAUSSIANS[2], *SHELLS, CHAIN], ids=lambda problem: problem.name)
def test_ensembles_on_harder_problems(problem: known.Problem) -> None:
    # Half the usual length keeps the whole file below a minute and a half; the soak tests use the defaults.
    check(Ensemble, problem, 1, {"autocorrelation_times": 25.0})


def test_stated_evidence_errors_are_the_real_ones() -> None:
    """Over 20 seeds the deviations from the truth scatter as stated and have no bias."""
    problem = GAUSSIANS[0]
    deviations = []
    for seed in range(20):
        found = explore(Nested, problem, seed, {"live_points": 100})
        assert found.log_evidence is not None
        assert found.log_evidence_error is not None
        deviations.append((found.log_evidence - problem.log_evidence) / found.log_evidence_error)
    assert abs(np.mean(deviations)) < 3.5 / np.sqrt(len(deviations))
    assert 1e-4 < chi2.sf(np.square(deviations).sum(), len(deviations)) < 1.0 - 1e-4


@pytest.mark.soak
@pytest.mark.parametrize("seed", range(10, 20))
@pytest.mark.parametrize("kind", [Nested, Ensemble], ids=lambda kind: kind.name)
@pytest.mark.parametrize("problem", [*GAUSSIANS, *SHELLS, CHAIN], ids=lambda problem: problem.name)
def test_many_seeds_with_default_options(problem: known.Problem, kind: type[Explorer], seed: int) -> None:
    check(kind, problem, seed, {})
