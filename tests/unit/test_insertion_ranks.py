"""Insertion ranks: right draws pass, wrong draws are found."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import kstest

from scanfit.explorers.insertion import InsertionRanks, uniformity


def insert(ranks: InsertionRanks, missed: float, count: int) -> None:
    """Replace live points of a problem whose log-likelihood is minus the log of the volume above it.

    New points are uniform in the volume above the threshold, except for the innermost part, `missed` of it.
    """
    random = np.random.default_rng(3)
    live = random.exponential(size=100)
    for _ in range(count):
        worst = int(live.argmin())
        threshold = live[worst]
        live[worst] = threshold - np.log(missed + (1.0 - missed) * random.random())
        ranks.add(live, worst, threshold)


def test_the_distance_is_the_textbook_one() -> None:
    places = np.random.default_rng(1).random(200)
    assert uniformity(places) == pytest.approx(kstest(places, "uniform", method="exact").pvalue, rel=1e-6)


def test_uniform_draws_pass_and_biased_draws_are_found() -> None:
    right, wrong = (InsertionRanks(np.random.default_rng(2)) for _ in range(2))
    insert(right, 0.0, 2000)
    insert(wrong, 0.2, 2000)
    assert right.p_value() > 0.01
    assert right.p_value_rolling(100) > 0.01
    assert wrong.p_value() < 1e-6


def test_a_short_failure_is_found_by_the_rolling_test() -> None:
    ranks = InsertionRanks(np.random.default_rng(2))
    insert(ranks, 0.0, 4000)
    start = len(ranks.places) // 2
    ranks.places[start : start + 100] = [0.5 + 0.5 * place for place in ranks.places[start : start + 100]]
    assert ranks.p_value() > 1e-4
    assert ranks.p_value_rolling(100) < 1e-4


def test_no_ranks_say_nothing() -> None:
    ranks = InsertionRanks(np.random.default_rng(2))
    assert ranks.p_value() == 1.0
    assert ranks.p_value_rolling(10) == 1.0


def test_points_at_or_below_the_threshold_are_no_competitors() -> None:
    # Half of the live points have likelihood zero; a new point above zero competes with the other half only.
    random = np.random.default_rng(4)
    ranks = InsertionRanks(np.random.default_rng(5))
    for _ in range(1000):
        live = np.where(np.arange(100) < 50, -1e300, random.random(100))
        live[0] = random.random()
        ranks.add(live, 0, -1e300)
    assert ranks.p_value() > 0.001
