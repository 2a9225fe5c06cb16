"""One row holds everything known about a point, and nothing that a plug-in does gets out."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from scanfit.driver.summary import describe_point
from scanfit.errors import InputError
from scanfit.posterior import Posterior, Status
from scanfit.runfile import load

Toy = Callable[..., Path]
TROUBLE = "[explore]"


def with_trouble(toy: Toy, how: str) -> Posterior:
    term = f'[terms.trouble]\nuse = "toy.py:Trouble"\nhow = "{how}"\n\n[explore]'
    return load(toy((TROUBLE, term))).posterior


def test_rows_hold_parameters_likelihoods_and_derived_quantities(toy: Toy) -> None:
    posterior = load(toy()).posterior
    points = np.array([[0.3, 0.4, 0.0], [0.9, -0.8, 0.05]])
    rows = posterior.evaluate_many(points).rows
    # scipy.stats is the reference for the toy's bivariate Gaussian.
    gaussian = stats.multivariate_normal(cov=0.04 * np.array([[1.0, 0.6], [0.6, 1.0]]))
    expected = gaussian.logpdf(points[:, :2] - points[:, [2]] * np.array([1.0, 0.0]))
    np.testing.assert_allclose(rows[:, posterior.column("log_likelihood")], expected, rtol=1e-12)
    np.testing.assert_allclose(rows[:, posterior.column("loglike_bump")], expected, rtol=1e-12)
    np.testing.assert_allclose(rows[:, posterior.column("radius")], np.hypot(points[:, 0], points[:, 1]))
    assert rows[:, posterior.column("flag_far")].tolist() == [0.0, 1.0]
    assert rows[0, posterior.column("log_prior")] == pytest.approx(2 * math.log(0.5) + stats.norm(0, 0.05).logpdf(0.0))


def test_outside_the_prior_costs_no_physics(toy: Toy) -> None:
    posterior = with_trouble(toy, "raise")
    batch = posterior.evaluate_many(np.array([[1.5, 0.0, 0.0]]))
    assert batch.failures == ()
    assert batch.rows[0, posterior.column("log_prior")] == -math.inf
    assert batch.rows[0, posterior.column("log_likelihood")] == -math.inf


@pytest.mark.parametrize(
    ("how", "message"),
    [
        ("nan", "the log-likelihood is nan"),
        ("infinity", "the log-likelihood is inf"),
        ("raise", "ZeroDivisionError: one over nothing"),
        ("missing", "the model does not predict a third coordinate"),
    ],
)
def test_trouble_is_marked_named_and_kept_to_its_point(toy: Toy, how: str, message: str) -> None:
    posterior = with_trouble(toy, how)
    batch = posterior.evaluate_many(np.array([[0.1, 0.0, 0.0], [0.9, 0.0, 0.0], [0.2, 0.0, 0.0]]))
    (failure,) = batch.failures
    assert (failure.row, failure.culprit, failure.message) == (1, "terms.trouble", message)
    status = batch.rows[:, posterior.column("status")]
    assert status.tolist() == [Status.EVALUATED, Status.FAILED, Status.EVALUATED]
    log_likelihood = batch.rows[:, posterior.column("log_likelihood")]
    assert np.isfinite(log_likelihood).tolist() == [True, False, True]
    assert log_likelihood[1] == -math.inf


def test_a_model_may_have_no_meaning_somewhere(toy: Toy) -> None:
    posterior = load(toy(('use = "toy.py:Plane"', 'use = "toy.py:Plane"\nhole = 0.5'))).posterior
    (failure,) = posterior.evaluate_many(np.array([[0.1, 0.1, 0.0], [0.6, 0.1, 0.0]])).failures
    assert (failure.row, failure.culprit, failure.message) == (0, "model", "inside the hole")


def test_minus_infinity_is_a_likelihood_not_a_failure(toy: Toy) -> None:
    posterior = with_trouble(toy, "zero")
    batch = posterior.evaluate_many(np.array([[0.9, 0.0, 0.0]]))
    assert batch.failures == ()
    assert batch.rows[0, posterior.column("status")] == Status.EVALUATED


REJECT = ("seed = 7", 'seed = 7\nreject_flags = ["far"]')


def test_a_rejected_flag_is_likelihood_zero_but_no_failure(toy: Toy) -> None:
    posterior = load(toy(REJECT)).posterior
    batch = posterior.evaluate_many(np.array([[0.3, 0.4, 0.0], [0.9, -0.8, 0.05]]))
    assert batch.failures == ()
    assert batch.rows[:, posterior.column("status")].tolist() == [Status.EVALUATED, Status.REJECTED]
    assert np.isfinite(batch.rows[:, posterior.column("log_likelihood")]).tolist() == [True, False]
    assert batch.rows[1, posterior.column("log_likelihood")] == -math.inf
    # No term was asked, but what the model predicts is there.
    assert math.isnan(batch.rows[1, posterior.column("loglike_bump")])
    assert batch.rows[1, posterior.column("radius")] == pytest.approx(math.hypot(0.9, 0.8))
    assert batch.rows[:, posterior.column("flag_far")].tolist() == [0.0, 1.0]


def test_a_rejected_point_is_still_explained(toy: Toy) -> None:
    """A single point for people shows its terms, with likelihood zero all the same."""
    posterior, free = (load(toy(*replacement)).posterior for replacement in ((REJECT,), ()))
    values = {"x": 0.9, "y": -0.8, "shift": 0.05}
    row = posterior.evaluate(values).rows[0]
    assert row[posterior.column("log_likelihood")] == -math.inf
    assert row[posterior.column("loglike_bump")] == free.evaluate(values).rows[0][free.column("loglike_bump")]
    found = describe_point(posterior, values)
    assert found["rejected_for"] == ["far"]
    assert describe_point(free, values)["rejected_for"] == []


def test_only_a_flag_of_the_model_can_be_rejected(toy: Toy) -> None:
    with pytest.raises(InputError, match=r"run\.reject_flags.*given: 'farr'.*did you mean 'far'\?; allowed: far"):
        load(toy(("seed = 7", 'seed = 7\nreject_flags = ["farr"]')))
