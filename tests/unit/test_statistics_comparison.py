"""Agreement of explorers: equal posteriors pass, shifted, widened and distorted ones are caught."""

import json

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from scanfit.results import Axis
from scanfit.statistics import compare
from scanfit.statistics.comparison import TOLERANCES, distribution_distance

AXES = {"a": Axis("a", "a", "linear"), "b": Axis("b", "b", "log")}


def sample(seed, size=4000, shift=0.0, stretch=1.0):
    rng = np.random.default_rng(seed)
    frame = pd.DataFrame({"a": shift + stretch * rng.normal(size=size), "b": 10.0 ** rng.normal(size=size)})
    return frame.assign(weight=1.0 / size)


def weighted(seed, size=40_000):
    """The same posterior as weighted points of a wider distribution."""
    frame = sample(seed, size)
    rng = np.random.default_rng(seed)
    x = 2.0 * rng.normal(size=size)
    weight = stats.norm.pdf(x) / stats.norm.pdf(x, scale=2.0)
    return frame.assign(a=x, weight=weight / weight.sum())


@pytest.mark.parametrize("seed", range(5))
def test_equal_posteriors_agree(seed):
    found = compare({"one": sample(seed), "two": weighted(100 + seed)}, AXES)
    assert found["verdict"] == "agree"
    row = found["pairs"][0]["parameters"]["a"]
    assert abs(row["mean_shift_significance"]) < 4.0
    assert row["width_ratio"] == pytest.approx(1.0, abs=0.06)


@pytest.mark.parametrize("wrong", [{"shift": 0.35}, {"shift": -0.35}, {"stretch": 1.3}, {"stretch": 0.75}])
def test_control_wrong_ensemble_is_caught(wrong):
    found = compare({"one": sample(1), "two": sample(2, **wrong)}, AXES)
    assert found["verdict"] == "disagree"
    parameters = found["pairs"][0]["parameters"]
    assert parameters["a"]["verdict"] == "disagree"
    assert parameters["b"]["verdict"] == "agree"
    assert found["pairs"][0]["worst"].startswith("a:")


def test_control_missed_mode_is_caught():
    """The trap that one criterion passes: a chain that never finds a mode that holds a third of the weight."""
    rng = np.random.default_rng(3)
    both = np.r_[rng.normal(-3.0, 1.0, 4000), rng.normal(3.0, 1.0, 2000)]
    frames = [pd.DataFrame({"a": values, "weight": 1.0 / len(values)}) for values in (both, both[:4000])]
    assert compare({"one": frames[0], "two": frames[1]}, {"a": AXES["a"]})["verdict"] == "disagree"


def test_too_few_independent_points_cannot_tell():
    posteriors = {"one": sample(1), "two": sample(2, shift=0.3)}
    assert compare(posteriors, AXES, effective_sizes={"two": 12.0})["verdict"] == "undecided"
    assert compare({"one": sample(1), "two": sample(4)}, AXES, effective_sizes={"two": 12.0})["verdict"] == "undecided"


def test_effective_size_may_differ_between_parameters():
    posteriors = {"one": sample(1), "two": sample(2)}
    found = compare(posteriors, AXES, effective_sizes={"two": {"a": 900.0, "b": 16.0}})
    rows = found["pairs"][0]["parameters"]
    assert (rows["a"]["verdict"], rows["b"]["verdict"]) == ("agree", "undecided")
    assert found["effective_sizes"] == {"one": pytest.approx(4000.0), "two": 16.0}


def test_evidence():
    posteriors = {"one": sample(1), "two": sample(2), "three": sample(3)}
    good = compare(posteriors, AXES, evidences={"one": (-10.0, 0.1), "two": (-10.2, 0.1)})
    assert good["verdict"] == "agree"
    assert [pair["evidence"] is None for pair in good["pairs"]] == [False, True, True]
    assert compare(posteriors, AXES, evidences={"one": (-10.0, 0.1), "two": (-11.0, 0.1)})["verdict"] == "disagree"
    assert compare(posteriors, AXES, evidences={"one": (-10.0, 0.9), "two": (-11.0, 0.1)})["verdict"] == "undecided"


def test_standard_errors_describe_the_scatter():
    """Over many pairs the shift in standard errors must have unit variance, else verdicts mean nothing."""
    pulls = [
        compare({"one": sample(2 * k, 300), "two": sample(2 * k + 1, 500)}, AXES)["pairs"][0]["parameters"]["a"]
        for k in range(150)
    ]
    shifts = [row["mean_shift_significance"] for row in pulls]
    widths = [np.log(row["width_ratio"]) / row["log_width_ratio_error"] for row in pulls]
    # The sample variance of 150 normal numbers scatters by 0.12.
    assert np.var(shifts) == pytest.approx(1.0, abs=0.45)
    assert np.var(widths) == pytest.approx(1.0, abs=0.45)


def test_distance_is_the_two_sample_statistic():
    rng = np.random.default_rng(5)
    one, two = rng.integers(0, 30, 400).astype(float), rng.normal(14.0, 9.0, 300)
    expected = stats.ks_2samp(one, two).statistic  # reference: scipy
    assert distribution_distance(one, np.ones(400), two, np.ones(300)) == pytest.approx(expected)


def test_one_explorer_is_alone_and_everything_is_json():
    assert compare({"one": sample(1)}, AXES)["verdict"] == "alone"
    found = compare({"one": sample(1), "two": sample(2)}, AXES, evidences={"one": (-1.0, 0.1), "two": (-1.0, 0.1)})
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    for tolerance in (TOLERANCES["mean"], TOLERANCES["distribution"], TOLERANCES["evidence"]):
        assert f"{tolerance:g}" in found["criterion"]
