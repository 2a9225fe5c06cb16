"""Experiment files: what they mean, and one clear message for everything that can be wrong with them."""

from __future__ import annotations

import math
import re
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.direct_detection.experiment import Efficiency, Resolution, read_experiment
from scanfit.likelihoods.direct_detection.term import DirectDetection

DEMO = Path(__file__).parents[2] / "runs" / "demo"

GOOD = """
title = "two bins"
source = "none"
exposure_tonne_year = 2.0
target = { Xe = 1 }

[efficiency]
energy_kev = [3.0, 6.0, 40.0]
value = [0.0, 0.8, 0.85]

[resolution]
noise_kev = 0.3

[bins]
intervals_kev = [[4, 9], [9, 14]]
background = [1.2, 0.8]
observed = [1, 0]

[background_uncertainty]
relative = 0.2
"""

TABLE = "energy_kev = [3.0, 6.0, 40.0]\nvalue = [0.0, 0.8, 0.85]"

BROKEN = {
    "efficiency above one": (
        "value = [0.0, 0.8, 0.85]",
        "value = [0.0, 0.8, 1.2]",
        r"efficiency\.value\.2: must be less than or equal to 1 \(given: 1\.2\)",
    ),
    "efficiency table too short": (
        "energy_kev = [3.0, 6.0, 40.0]",
        "energy_kev = [3.0, 6.0, 12.0]",
        r"efficiency: the table must cover every bin, 4 to 14 keV, but it spans 3 to 12 keV",
    ),
    "efficiency table unsorted": (
        "energy_kev = [3.0, 6.0, 40.0]",
        "energy_kev = [3.0, 40.0, 6.0]",
        r"efficiency\.energy_kev: energies must ascend, but 6 follows 40",
    ),
    "efficiency table ragged": (
        "value = [0.0, 0.8, 0.85]",
        "value = [0.0, 0.8]",
        r"efficiency\.value: 'value' has 2 entries where 'energy_kev' has 3",
    ),
    "overlapping bins": (
        "[[4, 9], [9, 14]]",
        "[[4, 9], [8, 14]]",
        r"bins\.intervals_kev: bins must ascend and not overlap, but \[8, 14\] follows \[4, 9\]",
    ),
    "unsorted bins": (
        "[[4, 9], [9, 14]]",
        "[[9, 14], [4, 9]]",
        r"bins\.intervals_kev: bins must ascend and not overlap",
    ),
    "reversed bin": ("[[4, 9], [9, 14]]", "[[9, 4], [9, 14]]", r"bins\.intervals_kev: a bin must have its lower edge"),
    "negative background": (
        "background = [1.2, 0.8]",
        "background = [1.2, -0.8]",
        r"bins\.background\.1: must be greater than or equal to 0 \(given: -0\.8\)",
    ),
    "negative exposure": (
        "exposure_tonne_year = 2.0",
        "exposure_tonne_year = -2.0",
        r"exposure_tonne_year: must be greater than 0 \(given: -2\.0\)",
    ),
    "unknown element": (
        "target = { Xe = 1 }",
        "target = { Xx = 1 }",
        r"target: unknown element or isotope 'Xx'.*elements: O, F, Na",
    ),
    "misspelt isotope": ("target = { Xe = 1 }", 'target = { "Xe-113" = 1 }', r"'Xe-113' \(did you mean 'Xe-1\d\d'\?\)"),
    "counts missing a bin": (
        "observed = [1, 0]",
        "observed = [1]",
        r"bins\.observed: 'observed' has 1 entries where 'intervals_kev' has 2",
    ),
    "fractional counts": ("observed = [1, 0]", "observed = [1, 0.5]", r"bins\.observed\.1: must be a valid integer"),
    "not a number": ("background = [1.2, 0.8]", "background = [1.2, nan]", r"bins\.background\.1: must be a finite"),
    "no counts": ("observed = [1, 0]", "", r"bins: 'observed' is required unless the experiment is 'planned'"),
    "planned with counts": ("exposure", "planned = true\nexposure", r"bins: a planned experiment has observed nothing"),
    "misspelt key": ("noise_kev", "noise_keV", r"resolution\.noise_keV: unknown key; did you mean 'noise_kev'\?"),
    "two efficiencies": (
        "value = [0.0, 0.8, 0.85]",
        "value = [0.0, 0.8, 0.85]\nplateau = 0.8\nhalf_at_kev = 4.0\nwidth_kev = 1.0",
        r"efficiency: give either a table, 'energy_kev' with 'value', or a formula, 'plateau' with",
    ),
    "half a table": (
        "value = [0.0, 0.8, 0.85]",
        "",
        r"efficiency: give either a table.*; missing: 'value'$",
    ),
    "half a formula": (
        TABLE,
        "half_at_kev = 4.0",
        r"efficiency: give either a table.*; missing: 'plateau', 'width_kev'$",
    ),
    "plateau above one": (
        TABLE,
        "plateau = 1.1\nhalf_at_kev = 4.0\nwidth_kev = 1.0",
        r"efficiency\.plateau: must be less than or equal to 1 \(given: 1\.1\)",
    ),
    "no plateau": (
        TABLE,
        "plateau = 0.0\nhalf_at_kev = 4.0\nwidth_kev = 1.0",
        r"efficiency\.plateau: must be greater than 0",
    ),
    "threshold without width": (
        TABLE,
        "plateau = 0.8\nhalf_at_kev = 4.0\nwidth_kev = 0.0",
        r"efficiency\.width_kev: must be greater than 0",
    ),
    "negative threshold": (
        TABLE,
        "plateau = 0.8\nhalf_at_kev = -4.0\nwidth_kev = 1.0",
        r"efficiency\.half_at_kev: must be greater than or equal to 0",
    ),
    "formula where quenching is unknown": (
        "[efficiency]\n" + TABLE,
        "[quenching]\nenergy_kev = [1, 50]\nfactor = [0.2, 0.25]\n"
        "[efficiency]\nplateau = 0.8\nhalf_at_kev = 4.0\nwidth_kev = 1.0",
        r"efficiency: quenching must be known in every bin, .* to 56 keV, but its table spans 1 to 50 keV",
    ),
    "missing table": (
        "[efficiency]\nenergy_kev = [3.0, 6.0, 40.0]\nvalue = [0.0, 0.8, 0.85]",
        "",
        r"efficiency: this key is required",
    ),
    "uncertainty for too many bins": (
        "relative = 0.2",
        "relative = [0.2, 0.1, 0.3]",
        r"background_uncertainty: 'relative' has 3 entries where 'bins' has 2",
    ),
    "two kinds of uncertainty": (
        "relative = 0.2",
        "relative = 0.2\nabsolute = [0.1, 0.1]",
        r"background_uncertainty: give either 'relative' or 'absolute'",
    ),
    "correlation above one": (
        "relative = 0.2",
        "relative = 0.2\ncorrelation = 1.5",
        r"background_uncertainty\.correlation: must be less than or equal to 1",
    ),
    "impossible correlations": (
        "relative = 0.2",
        "relative = 0.2\ncorrelation_matrix = [[1, 2], [2, 1]]",
        r"background_uncertainty\.correlation_matrix: is not a correlation matrix",
    ),
    "absolute uncertainty of nothing": (
        "background = [1.2, 0.8]\nobserved = [1, 0]\n\n[background_uncertainty]\nrelative = 0.2",
        "background = [1.2, 0]\nobserved = [1, 0]\n\n[background_uncertainty]\nabsolute = [0.2, 0.1]",
        r"background_uncertainty: 'absolute' must be 0 in a bin that expects no background",
    ),
    "not TOML": ("title = ", "title ", r"the file is not valid TOML"),
}


def write(folder: Path, text: str) -> Path:
    path = folder / "experiment.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.parametrize(("old", "new", "message"), BROKEN.values(), ids=BROKEN)
def test_broken_file_gives_one_clear_message(tmp_path: Path, old: str, new: str, message: str) -> None:
    assert old in GOOD
    path = write(tmp_path, GOOD.replace(old, new, 1))
    with pytest.raises(InputError) as caught:
        read_experiment(path)
    assert len(caught.value.problems) == 1, str(caught.value)
    assert re.search(message, str(caught.value)), str(caught.value)
    assert str(path) in str(caught.value)


def test_all_problems_come_at_once(tmp_path: Path) -> None:
    text = GOOD
    for case in ("efficiency above one", "overlapping bins", "negative exposure", "unknown element", "misspelt key"):
        text = text.replace(*BROKEN[case][:2])
    with pytest.raises(InputError) as caught:
        read_experiment(write(tmp_path, text))
    assert len(caught.value.problems) == 5


def test_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"nowhere\.toml.*cannot be read"):
        DirectDetection(DirectDetection.Options(data="nowhere.toml"), BuildContext(tmp_path))


def test_efficiency_is_linear_and_never_extrapolated() -> None:
    efficiency = Efficiency(energy_kev=(3.0, 6.0, 40.0), value=(0.0, 0.8, 0.85))
    np.testing.assert_allclose(
        efficiency.at(np.array([2.9, 3.0, 4.5, 6.0, 40.0, 40.1])), [0.0, 0.0, 0.4, 0.8, 0.85, 0.0], atol=1e-15
    )
    assert efficiency.range_kev == (3.0, 40.0)


def test_efficiency_by_formula_is_an_error_function() -> None:
    efficiency = Efficiency(plateau=0.85, half_at_kev=4.0, width_kev=1.2)
    energies = np.array([0.0, 2.0, 4.0, 5.2, 9.0, 500.0])
    by_definition = [0.425 * (1.0 + math.erf((energy - 4.0) / (math.sqrt(2.0) * 1.2))) for energy in energies]
    np.testing.assert_allclose(efficiency.at(energies), by_definition, rtol=1e-12)
    assert efficiency.range_kev == (0.0, math.inf)
    assert Efficiency(plateau=0.85, half_at_kev=40.0, width_kev=1.0).range_kev[0] == 32.0


def test_demo_events_are_drawn_as_they_say() -> None:
    corrie = read_experiment(DEMO / "corrie_argon_events.toml")
    events = corrie.events
    assert events is not None
    assert events.background_shape is not None
    assert "default_rng(20261202)" in corrie.source
    rng = np.random.default_rng(20261202)
    count = rng.poisson(events.background)
    energies, heights = rng.uniform(40.0, 140.0, 1000), rng.uniform(0.0, 3.0, 1000)
    shape = events.background_shape
    kept = energies[heights < np.interp(energies, shape.energy_kev, shape.density)]
    assert events.energies_kev == tuple(sorted(np.round(kept[:count], 1).tolist()))
    assert events.window_kev == (40.0, 140.0)


def test_resolution_adds_in_quadrature() -> None:
    resolution = Resolution(noise_kev=0.3, stochastic=0.4, constant=0.1)
    assert resolution.width(np.array([4.0]))[0] == pytest.approx((0.09 + 0.64 + 0.16) ** 0.5)
    assert Resolution().perfect
    assert not resolution.perfect


@pytest.mark.parametrize(
    ("uncertainty", "covariance"),
    # Covariance of the log backgrounds of the two bins, 1.2 and 0.8 events.
    [
        ("relative = 0.2", np.log(1.2) ** 2 * np.array([[1.0, 1.0], [1.0, 1.0]])),
        ("relative = 0.2\ncorrelation = 0.0", np.log(1.2) ** 2 * np.eye(2)),
        ("absolute = [0.24, 0.4]", np.outer(np.log([1.2, 1.5]), np.log([1.2, 1.5]))),
        (
            "relative = [0.2, 0.5]\ncorrelation_matrix = [[1, 0.3], [0.3, 1]]",
            np.outer(np.log([1.2, 1.5]), np.log([1.2, 1.5])) * np.array([[1.0, 0.3], [0.3, 1.0]]),
        ),
    ],
)
def test_loading_reproduces_the_covariance(tmp_path: Path, uncertainty: str, covariance: np.ndarray) -> None:
    experiment = read_experiment(write(tmp_path, GOOD.replace("relative = 0.2", uncertainty)))
    loading = experiment.background_loading()
    np.testing.assert_allclose(loading @ loading.T, covariance, rtol=1e-10, atol=1e-14)
    assert loading.shape[1] == np.linalg.matrix_rank(covariance)


def test_no_uncertainty_means_no_nuisance(tmp_path: Path) -> None:
    text = GOOD.replace("[background_uncertainty]\nrelative = 0.2", "")
    assert read_experiment(write(tmp_path, text)).background_loading().shape == (2, 0)


def test_demo_counts_are_drawn_as_they_say() -> None:
    corrie = read_experiment(DEMO / "corrie_xenon.toml")
    assert "default_rng(20261201).poisson(background)" in corrie.source
    assert corrie.bins.observed == tuple(np.random.default_rng(20261201).poisson(corrie.bins.background).tolist())


@pytest.mark.parametrize("name", ["corrie_xenon.toml", "corrie_2_xenon.toml", "corrie_argon_events.toml"])
def test_demo_says_that_it_is_invented(name: str) -> None:
    term = DirectDetection(DirectDetection.Options(data=name), BuildContext(DEMO))
    assert any("invented data, not a measurement" in caveat for caveat in term.caveats)
    assert "(invented" in term.experiment.title
    assert term.experiment.planned == ("_2_" in name)
    assert term.experiment.planned == any("background-only expectation" in caveat for caveat in term.caveats)
