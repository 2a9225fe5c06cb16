"""Draws within ellipsoids and the memory of chains."""

from __future__ import annotations

import numpy as np
import pytest
from dynesty.bounding import MultiEllipsoid, UnitCube

from scanfit.explorers.proposals import Memory, draw_within


def two_discs(distance: float, radius: float = 0.2) -> MultiEllipsoid:
    """Two discs of equal radius in the plane, their centres `distance` apart."""
    centres = np.array([[0.5 - distance / 2.0, 0.5], [0.5 + distance / 2.0, 0.5]])
    return MultiEllipsoid(2, ctrs=centres, covs=np.array([radius**2 * np.eye(2)] * 2))


def test_draws_are_uniform_over_the_union() -> None:
    distance, radius = 0.2, 0.2
    points = draw_within(two_discs(distance, radius), 40_000, np.random.default_rng(1))
    inside = [np.linalg.norm(points - [0.5 + side * distance / 2.0, 0.5], axis=1) < radius for side in (-1, 1)]
    assert np.all(inside[0] | inside[1])
    # Area of the lens of two equal circles, a textbook formula.
    lens = 2 * radius**2 * np.arccos(distance / (2 * radius)) - distance / 2 * np.sqrt(4 * radius**2 - distance**2)
    share = lens / (2 * np.pi * radius**2 - lens)
    error = np.sqrt(share * (1.0 - share) / len(points))
    assert (inside[0] & inside[1]).mean() == pytest.approx(share, abs=4.0 * error)
    # Control: without the correction for the overlap the share would be that of the lens counted twice.
    assert abs(2.0 * lens / (2 * np.pi * radius**2) - share) > 20.0 * error


def test_draws_stay_in_the_cube_and_are_as_many_as_asked_for() -> None:
    outside = MultiEllipsoid(2, ctrs=np.array([[0.0, 0.0]]), covs=np.array([0.04 * np.eye(2)]))
    points = draw_within(outside, 1000, np.random.default_rng(2))
    assert points.shape == (1000, 2)
    assert points.min() > 0.0
    assert draw_within(UnitCube(3), 17, np.random.default_rng(3)).shape == (17, 3)


def test_memory_of_chains_that_stay_forget_and_half_forget() -> None:
    bound = two_discs(0.6)
    random = np.random.default_rng(4)
    starts, fresh = draw_within(bound, 5000, random), draw_within(bound, 5000, random)
    side = (starts[:, :1] > 0.5).astype(float)
    centres = np.column_stack([0.2 + 0.6 * side[:, 0], np.full(5000, 0.5)])
    own_mode = np.column_stack([np.where((fresh[:, 0] > 0.5) == (side[:, 0] == 1.0), fresh[:, 0], 1.0 - fresh[:, 0])])
    elsewhere_in_own_mode = np.column_stack([own_mode[:, 0], fresh[:, 1]])
    for ends, expected in (
        (starts, 1.0),
        (elsewhere_in_own_mode, 0.0),  # a chain need not change mode to have forgotten
        (centres + 0.5 * (starts - centres), 0.5),
    ):
        memory = Memory()
        memory.add(bound, starts, ends)
        assert memory.value == pytest.approx(expected, abs=0.05)
        assert memory.chains == 5000
    assert Memory().value == 0.0
