"""Priors against scipy.stats, the general-purpose reference."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError
from scipy import stats
from scipy.integrate import quad

from scanfit.priors import PRIORS, Fixed, LogNormal, LogUniform, Normal, Prior, TruncatedNormal, Uniform

CASES = [
    (Uniform(low=-2.0, high=5.0), stats.uniform(-2.0, 7.0)),
    (LogUniform(low=1e-3, high=40.0), stats.loguniform(1e-3, 40.0)),
    (Normal(mean=1.5, sigma=0.2), stats.norm(1.5, 0.2)),
    (TruncatedNormal(mean=0.0, sigma=1.0, low=-1.0, high=2.5), stats.truncnorm(-1.0, 2.5)),
    (TruncatedNormal(mean=0.0, sigma=1.0, low=8.0, high=9.0), stats.truncnorm(8.0, 9.0)),
    (LogNormal(centre=0.4, factor=1.35), stats.lognorm(math.log(1.35), scale=0.4)),
]
NAMES = ["uniform", "log-uniform", "normal", "truncated", "truncated far in the tail", "log-normal"]


@pytest.mark.parametrize(("prior", "reference"), CASES, ids=NAMES)
def test_agrees_with_scipy(prior: Prior, reference: stats.rv_continuous) -> None:
    unit = np.linspace(0.001, 0.999, 101)
    value = prior.from_unit(unit)
    np.testing.assert_allclose(value, reference.ppf(unit), rtol=1e-9)
    np.testing.assert_allclose(prior.to_unit(value), unit, rtol=1e-7)
    np.testing.assert_allclose([prior.log_density(v) for v in value], reference.logpdf(value), atol=1e-9)


@pytest.mark.parametrize(("prior", "reference"), CASES, ids=NAMES)
def test_density_is_normalised_and_vanishes_outside(prior: Prior, reference: stats.rv_continuous) -> None:
    low, high = reference.ppf([1e-10, 1.0 - 1e-10])
    mass, _ = quad(lambda x: math.exp(prior.log_density(x)), low, high, limit=200)
    assert mass == pytest.approx(1.0, abs=1e-6)
    below, above = prior.support
    assert not math.isfinite(below) or prior.log_density(below - 1e-6) == -math.inf
    assert not math.isfinite(above) or prior.log_density(above + 1e-6) == -math.inf


@pytest.mark.parametrize(("prior", "reference"), CASES, ids=NAMES)
def test_faces_of_the_cube_are_finite_and_inside(prior: Prior, reference: stats.rv_continuous) -> None:
    faces = prior.from_unit(np.array([0.0, 1.0]))
    assert np.isfinite(faces).all()
    assert all(prior.log_density(float(value)) > -math.inf for value in faces)


@pytest.mark.parametrize(("prior", "reference"), CASES, ids=NAMES)
@given(unit=st.lists(st.floats(0.0, 1.0), min_size=1, max_size=40), stride=st.integers(1, 3))
def test_a_point_has_the_same_bytes_in_any_batch(
    prior: Prior, reference: stats.rv_continuous, unit: list[float], stride: int
) -> None:
    together = prior.from_unit(np.array(unit))
    alone = np.array([prior.from_unit(np.array([u]))[0] for u in unit])
    assert together.tobytes() == alone.tobytes()


def test_fixed_takes_its_value_and_no_density() -> None:
    prior = Fixed(value=3.0)
    assert prior.from_unit(np.array([0.1, 0.9])).tolist() == [3.0, 3.0]
    assert prior.log_density(3.0) == 0.0
    assert prior.log_density(3.1) == -math.inf
    assert prior.median == 3.0


def test_run_file_names_lead_to_their_classes() -> None:
    for name, kind in PRIORS.items():
        assert kind.model_fields["prior"].default == name


@pytest.mark.parametrize(
    "table",
    [
        {"prior": "uniform", "from": 2.0, "to": 1.0},
        {"prior": "uniform", "from": 1.0, "to": 1.0},
        {"prior": "log-uniform", "from": 0.0, "to": 1.0},
        {"prior": "normal", "mean": 0.0, "sigma": -1.0},
        {"prior": "normal", "mean": float("nan"), "sigma": 1.0},
        {"prior": "log-normal", "median": 0.4, "factor": 1.0},
        {"prior": "log-normal", "median": -0.4, "factor": 2.0},
        {"prior": "uniform", "from": 1.0},
    ],
)
def test_impossible_priors_are_refused(table: dict[str, object]) -> None:
    with pytest.raises(ValidationError):
        PRIORS[str(table["prior"])].model_validate(table)
