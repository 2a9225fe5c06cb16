"""The mono-x term as a scan uses it, on the invented demo search."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError, MissingPrediction, PointError
from scanfit.likelihoods.candidate import Annihilation, Candidate, CosmologyOptions, SpinOneMediator
from scanfit.likelihoods.mediator_widths import spin_one_total_width
from scanfit.likelihoods.mono_x.term import MonoX

DEMO = Path(__file__).parents[2] / "runs" / "demo"
NOTHING = Annihilation(channels=(), sigma_v=lambda s: np.zeros((0, len(s))), total=np.zeros_like)


def candidate(mass=10.0, mediator_mass=1500.0, coupling="axial", g_quark=0.25, g_dark=1.0, g_lepton=0.0) -> Candidate:
    width = spin_one_total_width(mediator_mass, coupling, mass, g_dark, g_quark, g_lepton)
    mediator = SpinOneMediator(mediator_mass, width, coupling, g_quark, g_dark, g_lepton)
    return Candidate(
        mass=mass, self_conjugate=False, spin_degrees_of_freedom=2, annihilation=NOTHING, mediator=mediator
    )


def build(inner="marginal", **options) -> MonoX:
    return MonoX(MonoX.Options(data="brackwater_mono_jet.toml", **options), BuildContext(DEMO, inner))


@pytest.fixture(scope="module")
def term() -> MonoX:
    return build()


def test_the_demo_says_that_it_is_invented_and_names_its_files(term):
    assert any("invented data" in caveat for caveat in term.caveats)
    assert {path.name for path in term.data_files} == {"brackwater_mono_jet.toml", "mono_jet_13tev.npz"}
    assert all(path.exists() for path in term.data_files)


@pytest.mark.parametrize("inner", ["marginal", "profile"])
def test_likelihood_excludes_strong_couplings_only(inner):
    term = build(inner)
    weak, strong = (term.loglike(candidate(g_quark=g), {}) for g in (1e-4, 0.3))
    nothing = term.loglike(candidate(g_quark=0.0), {})
    assert weak == pytest.approx(nothing, abs=1e-3)
    assert strong < nothing - 5.0
    assert math.isfinite(term.loglike(candidate(mediator_mass=50.0, g_quark=3.0), {}))


def test_likelihood_does_not_depend_on_earlier_calls(term):
    points = [candidate(mediator_mass=m) for m in (300.0, 3000.0, 1200.0)]
    first = [term.loglike(point, {}) for point in points]
    assert [term.loglike(point, {}) for point in reversed(points)] == first[::-1]


def test_a_collider_does_not_care_for_the_abundance(term):
    point = candidate()
    scaled = dataclasses.replace(point, cosmology=CosmologyOptions(underabundant="assume-all"))
    assert term.loglike(point, {}) == term.loglike(scaled, {})


def test_what_the_signal_needs_is_said_when_it_is_missing(term):
    point = candidate()
    with pytest.raises(MissingPrediction, match="a spin-one mediator"):
        term.loglike(dataclasses.replace(point, mediator=None), {})
    with pytest.raises(MissingPrediction, match="decays into a fermion"):
        term.loglike(dataclasses.replace(point, spin_degrees_of_freedom=1), {})
    with pytest.raises(PointError, match="no vector coupling"):
        term.loglike(dataclasses.replace(candidate(coupling="vector"), self_conjugate=True), {})
    stuck = dataclasses.replace(point, mediator=SpinOneMediator(1000.0, 0.0, "axial", 0.25, 1.0, 0.0))
    with pytest.raises(PointError, match="width must be positive"):
        term.loglike(stuck, {})


def test_majorana_dark_matter_has_half_the_partial_width(term):
    point = candidate()
    majorana = dataclasses.replace(point, self_conjugate=True)
    np.testing.assert_allclose(term.signal(majorana)[0], 0.5 * term.signal(point)[0], rtol=1e-14)


def test_neutrinos_are_invisible_too(term):
    """With no coupling to dark matter what is left is three left-handed neutrinos: 1.5 Dirac fermions."""
    width = spin_one_total_width(800.0, "vector", 1.0, 0.0, 0.25, 0.4)

    def signal(g_dark: float, g_lepton: float, mass: float) -> np.ndarray:
        mediator = SpinOneMediator(800.0, width, "vector", 0.25, g_dark, g_lepton)
        return term.signal(dataclasses.replace(candidate(mass=mass), mediator=mediator))[0]

    np.testing.assert_allclose(signal(0.0, 0.4, 1.0), 1.5 * signal(0.4, 0.0, 1e-3), rtol=1e-4)


def test_options_scale_the_signal_and_its_uncertainty():
    point = candidate()
    signal, uncertainty = build().signal(point)
    plain, only_shower = build(shower_factor=1.0, scale_uncertainty=False, signal_uncertainty=0.2).signal(point)
    np.testing.assert_allclose(signal, 1.12 * plain, rtol=1e-13)
    np.testing.assert_allclose(only_shower, math.log(1.2), rtol=1e-13)
    assert np.all(uncertainty > math.log(1.1))


def test_explanation_sets_every_bin_beside_its_count(term):
    rows = term.explain(candidate(), {})
    assert len(rows) == 1 + term.analysis.count
    assert rows[0].unit == "fb"
    signal = term.signal(candidate())[0]
    assert rows[0].predicted == pytest.approx(signal.sum() / 100.0)
    assert [row.observed for row in rows[1:]] == list(term.analysis.observed)
    assert rows[-1].predicted == pytest.approx(206.0 + signal[-1])


def test_expected_data_favour_the_point_that_made_them(term):
    point = candidate(mediator_mass=1000.0)
    for inner in ("marginal", "profile"):
        asimov = build(inner).expected(point, {})
        at_truth = asimov.loglike(point, {})
        assert at_truth > asimov.loglike(candidate(mediator_mass=1000.0, g_quark=0.0), {}) + 5.0
        assert at_truth > asimov.loglike(candidate(mediator_mass=700.0), {})
    assert term.analysis.observed[0] == 1105039


def test_pseudo_data_spread_as_the_covariance_says(term):
    """Mean and covariance of simulated counts against background + signal; 400 draws, five standard errors."""
    point = candidate(g_quark=0.0)
    rng = np.random.default_rng(3)
    draws = np.array([term.simulate(point, {}, rng)._likelihood.observed for _ in range(400)])
    background = np.array(term.analysis.background)
    covariance = term.analysis.covariance_matrix() + np.diag(background)
    pulls = (draws.mean(axis=0) - background) / np.sqrt(np.diag(covariance) / 400)
    assert np.abs(pulls).max() < 5.0
    ratio = np.cov(draws.T) / covariance
    np.testing.assert_allclose(ratio, 1.0, atol=5.0 * math.sqrt(2.0 / 400))


def loose(tmp_path, inner) -> MonoX:
    text = (DEMO / "brackwater_mono_jet.toml").read_text(encoding="utf-8").replace("0.08, 0.10]", "0.08, 0.40]")
    (tmp_path / "loose.toml").write_text(text, encoding="utf-8")
    return MonoX(MonoX.Options(data="loose.toml"), BuildContext(tmp_path, inner))


def test_backgrounds_near_zero_are_sampled_when_marginalised(tmp_path):
    assert any("importance sampling" in caveat for caveat in loose(tmp_path, "marginal").caveats)
    assert not any("sampling" in caveat for caveat in loose(tmp_path, "profile").caveats)
    assert not any("sampling" in caveat for caveat in build().caveats)


def with_validity(tmp_path, lines: str) -> MonoX:
    text = (DEMO / "brackwater_mono_jet.toml").read_text(encoding="utf-8")
    (tmp_path / "search.toml").write_text(f"{text}\n[validity]\n{lines}\n", encoding="utf-8")
    return MonoX(MonoX.Options(data="search.toml"), BuildContext(tmp_path, "marginal"))


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ("mediator_mass = [100.0, 1400.0]", "mediator mass of 1500 GeV lies outside its range, 100 to 1400 GeV"),
        ("dark_mass = [20.0, 1000.0]", "dark-matter mass of 10 GeV lies outside its range, 20 to 1000 GeV"),
        ("width_ratio_below = 0.01", r"width of 0\.0\d+ of its mass is above the limit of 0\.01"),
    ],
)
def test_points_outside_the_range_of_validity_are_refused_or_left_alone(tmp_path, lines, message, term):
    refusing = with_validity(tmp_path, lines)
    with pytest.raises(PointError, match=message):
        refusing.loglike(candidate(), {})
    ignoring = with_validity(tmp_path, f'{lines}\noutside = "ignore"')
    assert ignoring.loglike(candidate(g_quark=3.0), {}) == term.loglike(candidate(g_quark=0.0), {})
    assert any("says nothing outside" in caveat for caveat in ignoring.caveats)
    generous = with_validity(tmp_path, "mediator_mass = [100.0, 5000.0]\nwidth_ratio_below = 0.3")
    assert generous.loglike(candidate(), {}) == term.loglike(candidate(), {})


def test_a_spin_zero_mediator_is_refused_with_the_reason(term):
    @dataclasses.dataclass(frozen=True)
    class SpinZero:
        mass: float = 500.0

    with pytest.raises(MissingPrediction, match="top loop, whose amplitude with a hard jet is not tabulated"):
        term.loglike(dataclasses.replace(candidate(), mediator=SpinZero()), {})


def test_mixed_couplings_add_vector_and_axial_rates(term):
    """Massless quarks: rate ~ (g_V^2 + g_A^2) (Gamma_V + Gamma_A); widths add, since the interference vanishes."""
    width = 60.0

    def events(**couplings) -> np.ndarray:
        mediator = SpinOneMediator(1500.0, width, **{"g_lepton": 0.0, **couplings})
        return term.signal(dataclasses.replace(candidate(mass=300.0), mediator=mediator))[0]

    vector = events(coupling="vector", g_quark=0.2, g_dark=0.8)
    axial = events(coupling="axial", g_quark=0.2, g_dark=0.5)
    mixed = events(coupling="vector", g_quark=0.12, g_dark=0.8, other_g_quark=0.16, other_g_dark=0.5)
    np.testing.assert_allclose(mixed, vector + axial, rtol=1e-12)
    # A purely right-handed lepton current leaves neutrinos alone; a left-handed one doubles their amplitude.
    blind = events(coupling="vector", g_quark=0.2, g_dark=0.8, g_lepton=0.1, other_g_lepton=0.1)
    np.testing.assert_allclose(blind, vector, rtol=1e-12)


def test_heavy_mediators_and_left_out_bands_are_marked():
    """At 4 TeV no coupling up to sqrt(4 pi) is excluded in the invented search: its limit is infinite."""
    curve = build("profile").limit_curve("vector", points=2, pseudo_experiments=0)
    assert curve.bands is None
    assert 0.0 < curve.observed[0] < 0.1
    assert curve.observed[1] == math.inf


def test_limit_on_the_coupling_brackets_what_is_expected():
    term = build("profile")
    curve = term.limit_curve("axial", points=3)
    assert curve.level == 0.95
    assert np.all(np.diff(curve.bands[:2], axis=1) > 0.0)
    # The limit is where CLs is 5 %: evaluated again at the limit itself.
    mass, g_quark = float(curve.x_values[1]), float(curve.observed[1])
    observed, _ = term.confidence(candidate(mass=1.0, mediator_mass=mass, g_quark=g_quark))
    assert observed == pytest.approx(0.05, abs=2e-3)
    _, expected = term.confidence(candidate(mass=1.0, mediator_mass=mass, g_quark=float(curve.bands[1, 2])))
    assert expected == pytest.approx(0.05, abs=2e-3)
    with pytest.raises(InputError, match=r"no limit curve of this name.*allowed: vector, axial"):
        term.limit_curve("scalar")
