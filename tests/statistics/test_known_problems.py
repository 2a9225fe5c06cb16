"""The known problems against published values, so that the truth itself is tested."""

from __future__ import annotations

import known_problems as known
import numpy as np
import pytest
from scipy.integrate import dblquad


@pytest.mark.parametrize(("dimension", "published"), [(2, -1.75), (5, -5.67), (10, -14.59)])
def test_shells_have_the_published_evidence(dimension: int, published: float) -> None:
    # arXiv:0809.3437, table 1 (analytic column), given to two decimals.
    assert known.gaussian_shells(dimension).log_evidence == pytest.approx(published, abs=0.006)


@pytest.mark.parametrize(
    ("dimension", "independent"), [(2, -5.8041), (3, -10.4770), (4, -15.1017), (5, -19.7324), (6, -24.3797)]
)
def test_chain_has_the_independently_computed_evidence(dimension: int, independent: float) -> None:
    # Another transfer-matrix quadrature, made independently of this one.
    assert known.rosenbrock_chain(dimension).log_evidence == pytest.approx(independent, abs=6e-5)


def test_two_dimensional_chain_against_a_general_integrator() -> None:
    problem = known.rosenbrock_chain(2)

    def density(y: float, x: float, power: int) -> float:
        return float(x**power * np.exp(-100.0 * (y - x**2) ** 2 - (1.0 - x) ** 2))

    total, first = (
        dblquad(density, -2.2, 2.2, lambda x: x**2 - 0.6, lambda x: x**2 + 0.6, args=(power,), epsabs=1e-9)[0]
        for power in (0, 1)
    )
    # Beyond |x| = 2.2 the box cuts off at y = 5; what lies there is the tolerance.
    assert problem.log_evidence == pytest.approx(np.log(total / 100.0), abs=0.1)
    assert problem.mean[0] == pytest.approx(0.5 + first / total / 10.0, abs=0.01)


@pytest.mark.parametrize(
    "problem",
    [
        known.correlated_gaussian(2),
        known.gaussian_shells(2),
        known.rosenbrock_chain(2),
        known.two_modes(2, deviation=0.05),
    ],
    ids=lambda problem: problem.name,
)
def test_evidence_and_moments_agree_with_a_plain_sum_over_a_grid(problem: known.Problem) -> None:
    axis = (np.arange(1000) + 0.5) / 1000.0
    points = np.stack(np.meshgrid(axis, axis, indexing="ij"), axis=-1).reshape(-1, 2)
    weights = np.exp(problem.log_likelihood(points)) / len(points)
    assert np.log(weights.sum()) == pytest.approx(problem.log_evidence, abs=2e-3)
    weights /= weights.sum()
    mean = weights @ points
    assert mean == pytest.approx(problem.mean, abs=2e-4)
    assert np.sqrt(weights @ (points - mean) ** 2) == pytest.approx(problem.deviation, abs=2e-4)
