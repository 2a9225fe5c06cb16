"""The direct-detection term: scaling laws, thresholds, pseudo-data and what it tells people."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq
from scipy.stats import norm

from scanfit.contracts import BuildContext, InnerNuisances
from scanfit.errors import MissingPrediction, PointError
from scanfit.likelihoods.candidate import Annihilation, Candidate, CosmologyOptions, NucleonCouplings
from scanfit.likelihoods.constants import GEV_M2_TO_CM2, PROTON_MASS
from scanfit.likelihoods.direct_detection.experiment import Experiment
from scanfit.likelihoods.direct_detection.folding import fold
from scanfit.likelihoods.direct_detection.halo import Halo
from scanfit.likelihoods.direct_detection.spectrum import differential_rate
from scanfit.likelihoods.direct_detection.term import DirectDetection

DEMO = Path(__file__).parents[2] / "runs" / "demo"
VALUES = {"local_density": 0.3, "most_probable_speed": 238.0, "escape_speed": 544.0, "earth_speed": 252.0}


def build(treatment: InnerNuisances = "marginal", name: str = "corrie_xenon.toml") -> DirectDetection:
    return DirectDetection(DirectDetection.Options(data=name), BuildContext(DEMO, treatment))


CORRIE = build()


def candidate(cross_section: float, mass: float = 40.0) -> Candidate:
    """Isospin-symmetric and all of the dark matter; cross section on protons in cm^2."""
    reduced = mass * PROTON_MASS / (mass + PROTON_MASS)
    coupling = math.sqrt(math.pi / 4.0 * cross_section / GEV_M2_TO_CM2) / reduced
    nothing = np.zeros((0, 1))
    return Candidate(
        mass=mass,
        self_conjugate=True,
        spin_degrees_of_freedom=1,
        annihilation=Annihilation((), lambda s: nothing, lambda s: nothing[0]),
        nucleon=NucleonCouplings(f_proton=coupling, f_neutron=coupling),
        cosmology=CosmologyOptions(underabundant="assume-all"),
    )


def detector(**changes: object) -> Experiment:
    """Eight contiguous bins, resolution of a few keV, efficiency with a threshold at 2 keV."""
    edges = [3.0, 5.0, 8.0, 12.0, 16.0, 22.0, 30.0, 40.0, 50.0]
    table: dict[str, object] = {
        "title": "a detector",
        "source": "none",
        "exposure_tonne_year": 1.0,
        "target": {"Xe": 1.0},
        "efficiency": {"energy_kev": (2.0, 6.0, 60.0), "value": (0.0, 0.8, 0.9)},
        "resolution": {"noise_kev": 0.3, "stochastic": 0.3, "constant": 0.02},
        "bins": {
            "intervals_kev": tuple(pairwise(edges)),
            "background": (0.0,) * 8,
            "observed": (0,) * 8,
        },
    }
    return Experiment.model_validate({**table, **changes})


# Scaling laws

masses = st.floats(6.0, 5000.0)
amplitudes = st.floats(-1e-7, 1e-7).map(lambda x: x if abs(x) > 1e-12 else 1e-12)


@settings(max_examples=60, deadline=None)
@given(masses, amplitudes, amplitudes, amplitudes, amplitudes, st.floats(0.01, 100.0))
def test_signal_is_linear_in_the_cross_section(
    mass: float, f_p: float, f_n: float, a_p: float, a_n: float, scale: float
) -> None:
    once = replace(candidate(0.0, mass), nucleon=NucleonCouplings(f_p, f_n, a_p, a_n))
    root = math.sqrt(scale)
    more = replace(once, nucleon=NucleonCouplings(root * f_p, root * f_n, root * a_p, root * a_n))
    single = CORRIE.signal(once, VALUES)
    assert np.all(single >= 0.0)
    np.testing.assert_allclose(CORRIE.signal(more, VALUES), scale * single, rtol=1e-10, atol=1e-14 * single.sum())


@settings(max_examples=40, deadline=None)
@given(masses, st.floats(0.05, 1.0), st.floats(1.01, 4.0))
def test_signal_grows_with_the_density(mass: float, density: float, factor: float) -> None:
    thin = CORRIE.signal(candidate(1e-46, mass), {**VALUES, "local_density": density})
    thick = CORRIE.signal(candidate(1e-46, mass), {**VALUES, "local_density": factor * density})
    np.testing.assert_allclose(thick, factor * thin, rtol=1e-12)


@settings(max_examples=30, deadline=None)
@given(st.floats(5.0, 9.0), st.floats(200.0, 260.0), st.floats(480.0, 600.0), st.floats(200.0, 270.0))
def test_signal_grows_with_the_escape_speed_at_the_threshold(
    mass: float, most_probable: float, escape: float, earth: float
) -> None:
    # More fast particles, more recoils above a threshold that only fast particles reach (light dark matter).
    halo = {"most_probable_speed": most_probable, "earth_speed": earth}
    slow = CORRIE.signal(candidate(1e-44, mass), {**VALUES, **halo, "escape_speed": escape}).sum()
    fast = CORRIE.signal(candidate(1e-44, mass), {**VALUES, **halo, "escape_speed": escape + 20.0}).sum()
    assert fast >= slow * (1.0 - 1e-6)


def test_signal_scales_with_the_fraction_of_the_dark_matter() -> None:
    part = candidate(1e-46)
    part.__dict__["dm_fraction"] = 0.25  # what the relic abundance would fill in
    np.testing.assert_allclose(CORRIE.signal(part, VALUES), 0.25 * CORRIE.signal(candidate(1e-46), VALUES))


def test_isospin_violation_hides_xenon() -> None:
    # f_n/f_p = -0.7 cancels the protons of xenon; what is left comes from the spread of its isotopes.
    hidden = replace(candidate(0.0), nucleon=NucleonCouplings(1e-8, -0.7e-8))
    plain = replace(candidate(0.0), nucleon=NucleonCouplings(1e-8, 1e-8))
    ratio = CORRIE.signal(hidden, VALUES).sum() / CORRIE.signal(plain, VALUES).sum()
    assert 0.0 < ratio < 1e-3


# Folding


@pytest.mark.parametrize("mass", [8.0, 10.0, 40.0, 1000.0])
def test_folding_against_a_dense_sum(mass: float) -> None:
    # The same experiment summed bin by bin on 200,000 energies, resolution by scipy's normal distribution.
    experiment = detector()
    energy = np.linspace(2.0, 60.0, 200_001)
    middle, step = 0.5 * (energy[1:] + energy[:-1]), energy[1] - energy[0]
    nucleon = candidate(1e-46, mass).nucleon
    assert nucleon is not None
    rate = differential_rate(middle, mass, nucleon, Halo(), {"Xe": 1.0}) * np.interp(
        middle, [2.0, 6.0, 60.0], [0.0, 0.8, 0.9]
    )
    width = np.sqrt(0.3**2 + 0.3**2 * middle + (0.02 * middle) ** 2)
    expected = np.array(
        [
            (rate * (norm.cdf((high - middle) / width) - norm.cdf((low - middle) / width))).sum() * step
            for low, high in experiment.bins.intervals_kev
        ]
    )
    found = fold(experiment).counts(mass, nucleon, Halo())
    np.testing.assert_allclose(found, expected, rtol=1e-3, atol=2e-5 * expected.sum())


def test_resolution_moves_events_but_loses_none() -> None:
    # Far from the table's ends every accepted recoil lands in some bin.
    wide = {"intervals_kev": ((1.0, 20.0), (20.0, 99.0)), "background": (0.0, 0.0), "observed": (0, 0)}
    flat = {"energy_kev": (1.0, 5.0, 5.001, 40.0, 40.001, 99.0), "value": (0.0, 0.0, 1.0, 1.0, 0.0, 0.0)}
    nucleon = candidate(1e-46, 100.0).nucleon
    assert nucleon is not None
    sharp = fold(detector(bins=wide, efficiency=flat, resolution={})).counts(100.0, nucleon, Halo())
    smeared = fold(detector(bins=wide, efficiency=flat, resolution={"noise_kev": 0.6, "stochastic": 0.2}))
    moved = smeared.counts(100.0, nucleon, Halo())
    assert moved.sum() == pytest.approx(sharp.sum(), rel=1e-6)
    assert abs(moved[0] - sharp[0]) > 1e-4 * sharp[0]


def test_light_dark_matter_below_threshold_gives_nothing() -> None:
    # Largest recoil of 5 GeV on Xe-124 with 796 km/s is 2.8 keV; Corrie accepts nothing below 3 keV.
    assert CORRIE.signal(candidate(1e-40, 5.0), VALUES).sum() == 0.0
    assert CORRIE.signal(candidate(1e-40, 6.0), VALUES).sum() > 0.0


@pytest.mark.parametrize("target", ["Xe", "Ar", "Ge", "Si", "O", "Ca", "W", "Na", "I", "F"])
def test_every_target_works(target: str) -> None:
    nucleon = candidate(1e-46, 30.0).nucleon
    assert nucleon is not None
    assert fold(detector(target={target: 1.0})).counts(30.0, nucleon, Halo()).min() >= 0.0


def test_heavier_target_wins_coherently() -> None:
    # At low energy the rate per mass goes as A^2 through sigma_A, for equal couplings: tungsten over silicon.
    nucleon = candidate(1e-46, 1000.0).nucleon
    assert nucleon is not None
    rates = [differential_rate(np.array([0.01]), 1000.0, nucleon, Halo(), {name: 1.0})[0] for name in ("W", "Si")]
    assert rates[0] / rates[1] == pytest.approx((183.9 / 28.1) ** 2, rel=0.02)


# The term


def test_candidate_without_scattering() -> None:
    with pytest.raises(MissingPrediction, match="scattering on nucleons"):
        CORRIE.loglike(replace(candidate(1e-46), nucleon=None), VALUES)


@pytest.mark.parametrize("name", list(VALUES))
def test_impossible_halo_is_a_point_error(name: str) -> None:
    with pytest.raises(PointError, match=name):
        CORRIE.loglike(candidate(1e-46), {**VALUES, name: -1.0})


def test_likelihood_does_not_depend_on_history() -> None:
    first = CORRIE.loglike(candidate(1e-47), VALUES)
    CORRIE.loglike(candidate(1e-40, 3000.0), {**VALUES, "local_density": 2.0})
    assert CORRIE.loglike(candidate(1e-47), VALUES) == first
    assert build().loglike(candidate(1e-47), VALUES) == first


@pytest.mark.parametrize("treatment", ["marginal", "profile"])
def test_strong_scattering_is_excluded_and_no_scattering_is_not(treatment: InnerNuisances) -> None:
    term = build(treatment)
    none = term.loglike(candidate(0.0), VALUES)
    assert none - term.loglike(candidate(1e-46), VALUES) > 10.0
    assert none - term.loglike(candidate(1e-50), VALUES) < 0.1
    assert math.isfinite(term.loglike(candidate(1e-36), VALUES))


def test_reach_of_the_invented_experiments() -> None:
    # A chamber of this exposure should exclude some 5e-48 cm^2 at 40 GeV, its planned successor several times less.
    limits = []
    for name in ("corrie_xenon.toml", "corrie_2_xenon.toml"):
        term = build("profile", name)
        best = max(term.loglike(candidate(x), VALUES) for x in (0.0, *np.geomspace(1e-50, 1e-46, 200)))
        limits.append(
            10.0
            ** brentq(lambda log, t=term, b=best: b - t.loglike(candidate(10.0**log), VALUES) - 1.353, -49.0, -45.0)
        )
    assert 3e-48 < limits[0] < 2e-47
    assert 2.0 < limits[0] / limits[1] < 15.0


def test_limit_at_low_mass_follows_the_escape_speed_and_at_high_mass_the_density_only() -> None:
    changed = {**VALUES, "escape_speed": 580.0}
    ratio = [CORRIE.signal(candidate(1e-45, m), changed).sum() / CORRIE.signal(candidate(1e-45, m), VALUES).sum()
             for m in (7.0, 500.0)]  # fmt: skip
    assert ratio[0] > 1.3
    assert ratio[1] == pytest.approx(1.0, abs=0.01)


def test_explanation_adds_up() -> None:
    lines = {line.name: line for line in CORRIE.explain(candidate(1e-47), VALUES)}
    bins = [line for name, line in lines.items() if name.startswith("events in")]
    assert sum(line.predicted for line in bins) == pytest.approx(
        lines["signal events"].predicted + lines["background events"].predicted
    )
    assert [line.observed for line in bins] == list(CORRIE.experiment.bins.observed or ())


def test_expected_data_prefer_the_point_that_made_them() -> None:
    truth = candidate(2e-47)
    asimov = build("profile").expected(truth, VALUES)
    at_truth = asimov.loglike(truth, VALUES)
    for factor in (0.5, 0.9, 1.1, 2.0):
        assert asimov.loglike(candidate(2e-47 * factor), VALUES) < at_truth
    np.testing.assert_allclose(asimov.counting.observed, asimov.signal(truth, VALUES) + asimov.counting.background)
    assert asimov.name == CORRIE.name
    assert asimov.caveats == CORRIE.caveats


def test_pseudo_data_are_reproducible_and_leave_the_term_alone() -> None:
    before = CORRIE.counting.observed.copy()
    draws = [CORRIE.simulate(candidate(3e-47), VALUES, np.random.default_rng(5)).counting.observed for _ in range(2)]
    np.testing.assert_array_equal(draws[0], draws[1])
    assert draws[0].sum() > before.sum()
    np.testing.assert_array_equal(CORRIE.counting.observed, before)


def test_planned_experiment_holds_its_background() -> None:
    term = build(name="corrie_2_xenon.toml")
    np.testing.assert_array_equal(term.counting.observed, term.counting.background)


def test_nuisances_are_shared_by_name_and_priced_once() -> None:
    names = [parameter.name for parameter in CORRIE.nuisances]
    assert names == ["local_density", "most_probable_speed", "escape_speed", "earth_speed"]
    assert all(parameter.kind == "nuisance" and parameter.prior is not None for parameter in CORRIE.nuisances)


def test_velocity_integral_keeps_the_shape_of_its_argument() -> None:
    speeds = np.array([[0.0, 100.0], [200.0, 300.0], [400.0, 500.0]])
    eta = Halo().mean_inverse_speed(speeds.T)
    np.testing.assert_array_equal(eta, Halo().mean_inverse_speed(speeds).T)
    assert eta.shape == (2, 3)
