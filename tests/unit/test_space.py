"""The space joins parameters by name and is the only door between cube and values."""

from __future__ import annotations

import math

import numpy as np
import pytest

from scanfit.errors import InputError
from scanfit.priors import Fixed, LogUniform, Normal, Uniform
from scanfit.space import Parameter, Space

MASS = Parameter("mass", "GeV", "m", LogUniform(low=1.0, high=1000.0))
TILT = Parameter("tilt", "", "", Normal(mean=0.0, sigma=1.0), "nuisance")
HELD = Parameter("held", "", "", Fixed(value=7.0))


def test_fixed_parameters_take_no_dimension() -> None:
    space = Space([MASS, HELD, TILT])
    assert space.free_names == ("mass", "tilt")
    assert space.dimension == 2
    assert space.values(np.array([10.0, 0.5])) == {"mass": 10.0, "held": 7.0, "tilt": 0.5}


def test_cube_and_values_are_inverse() -> None:
    space = Space([MASS, TILT])
    unit = np.random.default_rng(1).random((50, 2))
    np.testing.assert_allclose(space.to_unit(space.from_unit(unit)), unit, rtol=1e-9)


def test_joint_prior_is_the_product() -> None:
    space = Space([Parameter("a", prior=Uniform(low=0.0, high=4.0)), Parameter("b", prior=Uniform(low=0.0, high=0.5))])
    assert space.log_prior(np.array([1.0, 0.1])) == pytest.approx(-math.log(4.0 * 0.5))
    assert space.log_prior(np.array([1.0, 0.6])) == -math.inf


def test_a_name_declared_twice_and_a_missing_prior_are_told_together() -> None:
    with pytest.raises(InputError) as caught:
        Space([MASS, MASS, Parameter("bare")])
    assert [problem.where for problem in caught.value.problems] == ["parameters.bare", "parameters.mass"]


def test_labels_carry_symbol_and_unit() -> None:
    assert MASS.label == "$m$ [GeV]"
    assert Parameter("dark_coupling").label == "dark coupling"
