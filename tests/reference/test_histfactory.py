"""Full likelihoods against pyhf, a published general-purpose reference for HistFactory models (skipped without it)."""

from __future__ import annotations

import copy
import json
import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.exclusion_plane import spin_one_candidate
from scanfit.likelihoods.mono_x.histfactory import HistFactoryLikelihood
from scanfit.likelihoods.mono_x.histfactory_kernel import expectations
from scanfit.likelihoods.mono_x.term import MonoX

pyhf = pytest.importorskip("pyhf")
# pyhf 0.7 uses a class that its schema library has deprecated.
pytestmark = pytest.mark.filterwarnings("ignore:jsonschema.RefResolver is deprecated:DeprecationWarning")

SETTINGS = {"normsys": {"interpcode": "code4"}, "histosys": {"interpcode": "code4p"}}
# Invented: every standard modifier, parameters shared between samples and channels, one signal and one control region.
WORKSPACE: dict[str, Any] = {
    "version": "1.0.0",
    "channels": [
        {
            "name": "signal region",
            "samples": [
                {
                    "name": "signal",
                    "data": [1.0, 1.0, 1.0, 1.0],
                    "modifiers": [{"name": "mu", "type": "normfactor", "data": None}],
                },
                {
                    "name": "Z",
                    "data": [120.0, 60.0, 25.0, 8.0],
                    "modifiers": [
                        {"name": "norm", "type": "normfactor", "data": None},
                        {
                            "name": "scale",
                            "type": "histosys",
                            "data": {"hi_data": [126.0, 66.0, 29.0, 10.5], "lo_data": [115.0, 55.0, 22.0, 6.5]},
                        },
                        {"name": "theory", "type": "normsys", "data": {"hi": 1.10, "lo": 0.93}},
                        {"name": "statistics", "type": "staterror", "data": [5.0, 3.0, 2.0, 1.2]},
                    ],
                },
                {
                    "name": "other",
                    "data": [20.0, 10.0, 5.0, 2.0],
                    "modifiers": [
                        {"name": "lumi", "type": "lumi", "data": None},
                        {"name": "scale", "type": "normsys", "data": {"hi": 1.05, "lo": 0.96}},
                        {"name": "other counts", "type": "shapesys", "data": [4.0, 3.0, 2.0, 1.0]},
                        {"name": "statistics", "type": "staterror", "data": [2.0, 1.0, 1.0, 0.5]},
                    ],
                },
            ],
        },
        {
            "name": "control region",
            "samples": [
                {
                    "name": "Z",
                    "data": [300.0, 150.0],
                    "modifiers": [
                        {"name": "norm", "type": "normfactor", "data": None},
                        {"name": "theory", "type": "normsys", "data": {"hi": 1.06, "lo": 0.95}},
                        {
                            "name": "scale",
                            "type": "histosys",
                            "data": {"hi_data": [310.0, 160.0], "lo_data": [292.0, 141.0]},
                        },
                    ],
                },
                {
                    "name": "free",
                    "data": [10.0, 10.0],
                    "modifiers": [{"name": "shape", "type": "shapefactor", "data": None}],
                },
            ],
        },
    ],
    "observations": [
        {"name": "signal region", "data": [150.0, 77.0, 24.0, 14.0]},
        {"name": "control region", "data": [310.0, 170.0]},
    ],
    "measurements": [
        {
            "name": "invented",
            "config": {
                "poi": "mu",
                "parameters": [
                    {"name": "lumi", "auxdata": [1.0], "sigmas": [0.02], "bounds": [[0.5, 1.5]], "inits": [1.0]}
                ],
            },
        }
    ],
}


def write(tmp_path: Path, workspace: dict[str, Any] = WORKSPACE) -> Path:
    path = tmp_path / "workspace.json"
    path.write_text(json.dumps(workspace), encoding="utf-8")
    return path


@pytest.fixture
def likelihood(tmp_path) -> HistFactoryLikelihood:
    return HistFactoryLikelihood(write(tmp_path), ("signal region",))


def reference_model(signal: np.ndarray):
    spec = copy.deepcopy(WORKSPACE)
    spec["channels"][0]["samples"][0]["data"] = list(signal)
    workspace = pyhf.Workspace(spec)
    model = workspace.model(modifier_settings=SETTINGS)
    return model, workspace.data(model)


def test_profile_likelihood_ratios_agree_with_pyhf_to_1e_4(likelihood):
    """2 ln L at fixed signal, nuisances profiled by pyhf's own fit (scipy); relative to no signal."""
    signals = np.array([[0.0, 0.0, 0.0, 0.0], [5.0, 8.0, 9.0, 7.0], [2.0, 2.0, 2.0, 2.0], [60.0, 60.0, 60.0, 60.0]])
    ours = [2.0 * likelihood.profile(signal) for signal in signals]
    theirs = []
    for signal in signals:
        model, data = reference_model(signal)
        theirs.append(-float(pyhf.infer.mle.fixed_poi_fit(1.0, data, model, return_fitted_val=True)[1]))
    np.testing.assert_allclose(np.diff(ours), np.diff(theirs), rtol=0.0, atol=1e-4)


@pytest.mark.parametrize(
    ("signal", "counts"),
    [
        ([0.5, 5.0, 30.0, 1.0], [290.0, 161.0, 133.0, 80.0, 31.0, 9.0]),
        ([0.0, 0.0, 40.0, 30.0], [333.0, 140.0, 120.0, 66.0, 44.0, 3.0]),
        ([300.0, 5.0, 0.0, 0.5], [280.0, 160.0, 141.0, 70.0, 33.0, 14.0]),
        ([0.0, 5.0, 300.0, 30.0], [2.0, 0.0, 0.0, 0.0, 310.0, 0.0]),
        ([34.0, 6.0, 34.0, 0.6], [2.0, 0.0, 0.0, 0.0, 310.0, 0.0]),
    ],
)
def test_other_data_agree_as_well(likelihood, signal, counts):
    """Counts of control and signal region; the last two are absurd, and pull parameters to the walls of their box."""
    ours = likelihood._with_data(np.array(counts)).profile(np.array(signal))
    model, data = reference_model(np.array(signal))
    data = [*counts, *model.config.auxdata]
    fitted = float(pyhf.infer.mle.fixed_poi_fit(1.0, data, model, return_fitted_val=True)[1])
    # Constraints at their peaks, which the two normalise differently.
    init = np.array(model.config.suggested_init())
    peaks = float(model.constraint_logpdf(np.array(model.config.auxdata), init))
    assert 2.0 * (ours + peaks) == pytest.approx(-fitted, abs=1e-4)


def test_full_values_agree_with_pyhf_once_constraints_are_normalised(likelihood):
    """At arbitrary parameters; pyhf's Gaussians carry -ln(sqrt(2 pi) sigma) and its Poissons their peak height."""
    model, data = reference_model(np.zeros(4))
    theta = np.array(model.config.suggested_init())
    theta[model.config.poi_index] = 0.0
    centre = float(model.logpdf(list(theta), data)[0])
    rng = np.random.default_rng(4)
    for _ in range(20):
        moved = theta + rng.uniform(-0.5, 0.5, len(theta)) * np.where(theta == 1.0, 0.4, 4.0)
        moved[model.config.poi_index] = 0.0
        theirs = float(model.logpdf(list(moved), data)[0]) - centre
        ours = likelihood.log_likelihood(moved, np.zeros(4)) - likelihood.log_likelihood(theta, np.zeros(4))
        assert ours == pytest.approx(theirs, abs=1e-8 * max(abs(theirs), 1.0))


def test_derivatives_are_exact(likelihood):
    """Against central differences, away from the joints of the interpolation."""
    rng = np.random.default_rng(2)
    theta = likelihood._start + 0.3 * rng.uniform(-1.0, 1.0, len(likelihood._start))
    theta[0] += 1.3
    bins, count = len(likelihood._data), len(theta)
    rate, slope = np.empty(bins), np.empty((bins, count))
    expectations(likelihood._layout, theta, rate, slope)
    for p in range(count):
        sides = []
        for step in (1e-6, -1e-6):
            moved, scratch = theta.copy(), slope.copy()
            moved[p] += step
            side = np.empty(bins)
            expectations(likelihood._layout, moved, side, scratch)
            sides.append(side)
        if theta[p] != 0.0:
            np.testing.assert_allclose(slope[:, p], (sides[0] - sides[1]) / 2e-6, atol=1e-6)


def test_the_signal_nuisance_is_profiled_as_a_log_normal(likelihood):
    signal, spread = np.array([5.0, 8.0, 9.0, 7.0]), np.full(4, 0.3)
    z = np.linspace(-4.0, 4.0, 161)
    scanned = max(likelihood.profile(signal * np.exp(0.3 * x)) - 0.5 * x**2 for x in z)
    assert likelihood.profile(signal, spread) == pytest.approx(scanned, abs=1e-3)
    assert likelihood.profile(signal, spread) >= scanned


def test_profile_does_not_depend_on_earlier_calls(likelihood):
    signals = [np.full(4, s) for s in (0.0, 30.0, 1e4, 2.0)]
    first = [likelihood.profile(signal) for signal in signals]
    assert all(np.isfinite(first))
    assert [likelihood.profile(signal) for signal in reversed(signals)] == first[::-1]


def test_pseudo_data_have_the_expected_mean_and_spread(likelihood):
    rng = np.random.default_rng(8)
    signal = np.array([5.0, 8.0, 9.0, 7.0])
    draws = np.array([likelihood.drawn(signal, np.zeros(4), rng).observed for _ in range(600)])
    mean, deviation = likelihood.central()
    np.testing.assert_allclose(mean, [140.0, 70.0, 30.0, 10.0])
    np.testing.assert_allclose(likelihood.asimov(signal).observed, mean + signal)
    total = np.sqrt(deviation**2 + mean + signal)
    assert np.abs((draws.mean(axis=0) - mean - signal) / total).max() < 5.0 / np.sqrt(600)
    np.testing.assert_allclose(draws.std(axis=0) / total, 1.0, atol=5.0 / np.sqrt(2 * 600))


ANALYSIS = """
title = "invented"
source = "invented for this test"
invented = true
signature = "mono-jet"
sqrt_s = 13.0
luminosity = 10.0
edges = [250.0, 350.0, 500.0, 700.0]
overflow = true
workspace = "workspace.json"
channels = ["signal region"]
"""


def build(tmp_path: Path, inner="profile", old="", new="") -> MonoX:
    assert old in ANALYSIS
    (tmp_path / "search.toml").write_text(ANALYSIS.replace(old, new) if old else ANALYSIS, encoding="utf-8")
    return MonoX(MonoX.Options(data="search.toml"), BuildContext(tmp_path, inner))


def test_the_term_uses_a_workspace_for_its_bins(tmp_path):
    write(tmp_path)
    term = build(tmp_path)
    weak, strong = (spin_one_candidate(800.0, 10.0, "vector", g, 1.0) for g in (1e-4, 1.0))
    assert term.loglike(strong, {}) < term.loglike(weak, {}) - 5.0
    assert "full likelihood" in term.caveats[-1]
    assert term.explain(weak, {})[1].observed == 150.0
    observed, expected = term.confidence(strong)
    assert 0.0 <= observed < 0.05
    assert 0.0 <= expected < 0.05
    assert term.simulate(weak, {}, np.random.default_rng(1))._likelihood.observed.shape == (4,)


def test_mistakes_are_named(tmp_path):
    write(tmp_path)
    with pytest.raises(InputError, match='can only be profiled: set `inner_nuisances = "profile"`'):
        build(tmp_path, "marginal")
    with pytest.raises(InputError, match=r"did you mean 'signal region'.*allowed: control region, signal region"):
        build(tmp_path, old="signal region", new="signal regoin")
    with pytest.raises(InputError, match="the channels hold 2 bins, this file 4"):
        build(tmp_path, old="signal region", new="control region")
    with pytest.raises(InputError, match=r"no such measurement.*allowed: invented"):
        build(tmp_path, old="overflow = true", new='overflow = true\nmeasurement = "other"')
    with pytest.raises(InputError, match="cannot be read"):
        build(tmp_path, old="workspace.json", new="nowhere.json")
    write(tmp_path, {"version": "1.0.0"})
    with pytest.raises(InputError, match="no valid HistFactory workspace"):
        build(tmp_path)
    (tmp_path / "workspace.json").write_text("{", encoding="utf-8")
    with pytest.raises(InputError, match="not valid JSON"):
        build(tmp_path)


def test_reading_hides_one_known_warning_only(tmp_path):
    """pyhf's own deprecation is silenced while reading, and nothing else is."""
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        HistFactoryLikelihood(write(tmp_path), ("signal region",))
