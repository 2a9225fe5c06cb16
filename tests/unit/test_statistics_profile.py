"""Profile likelihood and deciding terms of archives whose profiles are known in closed form."""

import json

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from scanfit.priors import LogNormal, Normal, Uniform
from scanfit.results import Axis
from scanfit.statistics import decision_map, intervals, profile_table, term_records
from scanfit.statistics.binned import Archive, Grid, log_constraint
from scanfit.statistics.decides import EMPTY
from scanfit.statistics.goodness import pull, share_of_limit
from scanfit.statistics.levels import LEVELS
from scanfit.statistics.profile import COLUMNS, profile, profile_intervals

AXES = {
    "a": Axis("a", "a", "linear", -20.0, 20.0),
    "b": Axis("b", "b", "log", 1e-5, 1e5),
    "c": Axis("c", "c", "linear"),
}


def archive(size=30_000, seed=1):
    """A correlated normal likelihood in (a, log10 b), times one in c, with one term for each."""
    x, y, z = 1.8 * np.random.default_rng(seed).normal(size=(3, size))
    frame = pd.DataFrame({"a": x, "b": 10.0**y, "c": z})
    frame["status"] = 0.0
    frame["loglike_plane"] = -0.5 * (np.square(x) - 2.0 * 0.8 * x * y + np.square(y)) / (1.0 - 0.8**2)
    frame["loglike_third"] = -0.5 * np.square(z) - 7.0
    frame["log_likelihood"] = frame["loglike_plane"] + frame["loglike_third"]
    return frame


@pytest.fixture(scope="module")
def points():
    return archive()


@pytest.mark.parametrize(("label", "sigmas"), [("68", 1.0), ("95", 2.0)])
def test_intervals_of_a_gaussian(points, label, sigmas):
    curve = profile(points, (AXES["a"],))
    assert profile_intervals(curve, LEVELS[label]) == [pytest.approx((-sigmas, sigmas), abs=0.06)]
    curve = profile(points, (AXES["b"],))
    assert np.log10(profile_intervals(curve, LEVELS[label])[0]) == pytest.approx((-sigmas, sigmas), abs=0.06)


def test_profile_is_a_lower_bound_to_the_likelihood(points):
    curve = profile(points, (AXES["a"],))
    place = curve.places[0]
    assert np.all(curve.two_delta >= np.square(place) - 2.0 * abs(points["log_likelihood"].max() + 7.0) - 1e-9)
    assert np.nanmedian(curve.two_delta - np.square(place)) < 0.2


def test_area_of_a_region(points):
    found = profile(points, (AXES["a"], AXES["b"]))
    cell = np.prod([edge[1] - edge[0] for edge in found.grid.edges])
    area = np.count_nonzero(found.two_delta <= stats.chi2.ppf(LEVELS["95"], 2)) * cell
    # Ellipse of the covariance with correlation 0.8; cells on the border count when any point in them is inside.
    expected = np.pi * stats.chi2.ppf(LEVELS["95"], 2) * 0.6
    assert 0.9 * expected < area < 1.35 * expected


def test_two_modes_give_two_intervals():
    x = np.random.default_rng(2).uniform(-10.0, 10.0, 20_000)
    frame = pd.DataFrame({"a": x, "status": 0.0})
    frame["log_likelihood"] = frame["loglike_t"] = np.logaddexp(stats.norm.logpdf(x, -5, 1), stats.norm.logpdf(x, 5, 1))
    found = profile_intervals(profile(frame, (AXES["a"],)), LEVELS["68"])
    assert found == [pytest.approx((-6.0, -4.0), abs=0.05), pytest.approx((4.0, 6.0), abs=0.05)]


def sparse_tail(seed, hole=False):
    """Likelihood flat over six decades of which the search visits the lowest ones ever more rarely; with `hole`, bad
    from -3 to -2."""
    x = -np.random.default_rng(seed).exponential(0.75, 4000)
    x = x[x > -6.0]
    value = np.where(hole & (x > -3.0) & (x < -2.0), -8.0, -0.2 * np.random.default_rng(seed + 50).random(len(x)))
    return pd.DataFrame({"b": 10.0**x, "status": 0.0, "loglike_t": value, "log_likelihood": value})


@pytest.mark.parametrize("seed", range(8))
def test_gaps_of_a_sparse_search_are_no_gaps(seed):
    frame = sparse_tail(seed)
    curve = profile(frame, (AXES["b"],))
    assert len(profile_intervals(curve, LEVELS["95"])) == 1


@pytest.mark.parametrize("seed", range(4))
def test_control_gap_that_was_searched_stays(seed):
    """The same search, with a valley that it visited often enough to know."""
    found = profile_intervals(profile(sparse_tail(seed, hole=True), (AXES["b"],)), LEVELS["95"])
    assert len(found) == 2
    assert np.log10([found[0][1], found[1][0]]) == pytest.approx([-3.0, -2.0], abs=0.25)


@pytest.mark.parametrize("size", [300, 3000, 30_000])
def test_control_two_modes_stay_apart(size):
    """As an explorer finds them, with few points between."""
    rng = np.random.default_rng(size)
    x = np.where(rng.random(size) < 0.3, rng.normal(-4.0, 1.5, size), rng.normal(4.0, 1.5, size))
    value = np.logaddexp(stats.norm.logpdf(x, -4.0, 1.0), stats.norm.logpdf(x, 4.0, 1.0))
    frame = pd.DataFrame({"a": x, "status": 0.0, "loglike_t": value, "log_likelihood": value})
    assert len(profile_intervals(profile(frame, (AXES["a"],)), LEVELS["95"])) == 2


def test_interval_reaches_the_bound():
    x = np.random.default_rng(3).uniform(0.0, 5.0, 20_000)
    frame = pd.DataFrame({"a": x, "status": 0.0, "loglike_t": -0.5 * x**2, "log_likelihood": -0.5 * x**2})
    found = profile_intervals(profile(frame, (Axis("a", "a", "linear", 0.0, 5.0),)), LEVELS["95"])
    assert found == [pytest.approx((0.0, 2.0), abs=0.02)]
    assert found[0][0] == 0.0


def test_empty_cells_stay_empty():
    x = np.r_[np.random.default_rng(4).uniform(-1.0, -0.5, 2000), np.random.default_rng(5).uniform(0.5, 1.0, 2000)]
    frame = pd.DataFrame({"a": x, "status": 0.0, "loglike_t": 0.0 * x, "log_likelihood": 0.0 * x})
    table = profile_table(frame, {"a": AXES["a"]})
    middle = table[(table["x_low"] > -0.45) & (table["x_high"] < 0.45)]
    assert len(middle) > 5
    assert middle["log_likelihood"].isna().all()
    assert set(middle["decided_by"]) == {""}
    assert len(profile_intervals(profile(frame, (AXES["a"],)), LEVELS["68"])) == 2


def test_table_agrees_with_a_plain_group_by(points):
    table = profile_table(points, {"a": AXES["a"]})
    assert tuple(table.columns) == COLUMNS
    edges = np.r_[table["x_low"], table["x_high"].iloc[-1]]
    # Reference: pandas' own binning and maximum.
    expected = points.groupby(pd.cut(points["a"], edges, include_lowest=True), observed=False)["log_likelihood"].max()
    assert table["log_likelihood"].to_numpy() == pytest.approx(expected.to_numpy())
    assert table["two_delta_lnl"].min() == 0.0


def test_table_of_a_plane_has_a_row_a_cell(points):
    table = profile_table(points, AXES, [("a", "b")])
    plane = table[table["axis_y"] == "b"]
    cells = len(plane["x_low"].unique())
    assert len(plane) == cells**2
    filled = plane[plane["log_likelihood"].notna()]
    assert (filled["x"].between(filled["x_low"] - 1e-9, filled["x_high"] + 1e-9)).all()
    assert (filled["y"].between(filled["y_low"] * (1 - 1e-9), filled["y_high"] * (1 + 1e-9))).all()
    assert set(filled["decided_by"]) <= {"plane", "third", "none"}


def test_failed_points_take_no_part(points):
    spoiled = points.copy()
    spoiled.loc[0, ["status", "log_likelihood"]] = [1.0, 1e6]
    spoiled.loc[1, "loglike_third"] = np.nan
    assert Archive(spoiled).profiled[Archive(spoiled).best_row] < 0.0
    with pytest.raises(ValueError, match="no point"):
        Archive(points.assign(log_likelihood=-np.inf))


def test_nuisance_measured_elsewhere_is_constrained(points):
    free = points.assign(loglike_third=0.0, log_likelihood=points["loglike_plane"])
    width = [
        np.ptp(profile_intervals(profile(free, (AXES["c"],), Archive(free, priors)), LEVELS["68"]))
        for priors in ({}, {"c": Normal(mean=0.0, sigma=0.7)})
    ]
    assert width[0] > 4.0  # nothing holds it
    assert width[1] == pytest.approx(1.4, abs=0.1)


def test_constraint_is_the_log_ratio_of_the_prior_density():
    frame = pd.DataFrame({"c": [0.2, 0.4, 0.9]})
    # Reference: scipy's densities relative to their value at the centre (in the logarithm for the log-normal).
    normal = stats.norm(0.4, 0.1)
    expected = normal.logpdf(frame["c"]) - normal.logpdf(0.4)
    assert log_constraint(frame, {"c": Normal(mean=0.4, sigma=0.1)}) == pytest.approx(expected)
    log_normal = stats.norm(np.log(0.4), np.log(1.35))
    expected = log_normal.logpdf(np.log(frame["c"])) - log_normal.logpdf(np.log(0.4))
    prior = LogNormal.model_validate({"median": 0.4, "factor": 1.35})
    assert log_constraint(frame, {"c": prior}) == pytest.approx(expected)
    flat = Uniform.model_validate({"from": 0.0, "to": 1.0})
    assert np.all(log_constraint(frame, {"c": flat}) == 0.0)


def test_best_of_each_cell_wins_whatever_the_order():
    values = np.array([0.1, 0.2, 0.9, 0.15, np.nan, 1.0])
    grid = Grid((np.array([0.0, 0.5, 1.0]),))
    assert grid.best([values]).tolist() == [3, 5]


def test_deciding_term_is_the_one_furthest_below_its_best():
    x = np.linspace(-5.0, 5.0, 4001)
    frame = pd.DataFrame({"a": np.tile(x, 3), "b": np.repeat([1.0, 10.0, 100.0], len(x)), "status": 0.0})
    left, right = np.where(frame["a"] < -1.0, -4.0, 0.0), np.where(frame["a"] > 2.0, -9.0, 100.0) - 100.0
    frame["loglike_left"], frame["loglike_right"] = left, right
    frame["log_likelihood"] = left + right
    found = decision_map(frame, (AXES["a"], AXES["b"]), cells=10)
    assert found.terms == ("left", "right")
    filled = found.decider[:, 0].tolist()
    assert filled[:3] == [0, 0, 0]
    assert filled[4:7] == [-1, -1, -1]
    assert filled[8:] == [1, 1]
    assert (found.decider[:, 2] == EMPTY).all()


def test_term_that_forbids_a_point_decides_there():
    frame = archive(2000).assign(loglike_third=-np.inf)
    frame.loc[:200, "loglike_third"] = 0.0
    frame["log_likelihood"] = frame["loglike_plane"] + frame["loglike_third"]
    found = decision_map(frame, (AXES["a"], AXES["b"]), cells=6)
    assert np.isinf(found.two_delta).any()
    assert set(found.decider[np.isinf(found.two_delta)]) == {1}


def test_term_records(points):
    posterior = points.assign(weight=np.exp(points["log_likelihood"] - points["log_likelihood"].max()))
    posterior["weight"] /= np.exp(stats.norm.logpdf(points[["a", "c"]], scale=1.8).sum(axis=1)
                                  + stats.norm.logpdf(np.log10(points["b"]), scale=1.8))  # fmt: skip
    records, undecided = term_records(points, posterior)
    # Half the number of degrees of freedom: the mean of -ln L of a normal density relative to its peak.
    assert [record.posterior_deficit for record in records] == pytest.approx([1.0, 0.5], abs=0.06)
    assert sum(record.decides for record in records) + undecided == pytest.approx(1.0)
    both = stats.chi2.cdf(2.0, 2) * stats.chi2.cdf(2.0, 1)
    assert undecided == pytest.approx(both, abs=0.03)


def test_intervals_are_json_and_say_what_is_missing(points):
    axes = {**AXES, "gone": Axis("gone", "gone", "log"), "one": Axis("one", "one", "linear")}
    frame = points.assign(gone=np.where(points["a"] > 0.0, 0.0, np.nan), one=3.0, weight=1.0 / len(points))
    found = json.loads(json.dumps(intervals(frame, frame, axes), allow_nan=False))
    assert found["gone"]["credible_68"] == []
    assert found["gone"]["shown"] == 0.0
    assert found["gone"]["scale_mean"] is None
    assert found["one"]["credible_95"] == found["one"]["profile_68"] == [[3.0, 3.0]]
    assert found["a"]["mean"] == pytest.approx(0.0, abs=0.05)
    assert found["b"]["scale_std"] == pytest.approx(1.8, rel=0.02)


def test_pulls():
    assert pull(1.3, 1.0, 0.1) == pytest.approx(3.0)
    assert pull(1.3, None, 0.1) is pull(1.3, 1.0, None) is pull(1.3, 1.0, 0.0) is None
    assert share_of_limit(2.0, 4.0) == 0.5
    assert share_of_limit(2.0, None) is None
