"""What targets share, their velocities, limit curves and the table of excesses."""

import dataclasses
import math

import numpy as np
import pytest
from scipy.optimize import minimize

from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.candidate import DWARF_VELOCITY, Annihilation, Candidate, CosmologyOptions
from scanfit.likelihoods.constants import GEV_M2_TO_CM3_S, SPEED_OF_LIGHT_KM_S
from scanfit.likelihoods.gamma_dwarfs.curves import CURVES
from scanfit.likelihoods.gamma_dwarfs.likelihood import DwarfLikelihood
from scanfit.likelihoods.gamma_dwarfs.limits import without_shared
from scanfit.likelihoods.gamma_dwarfs.spectra import LINE, TABLE_CHANNELS
from scanfit.likelihoods.gamma_dwarfs.telescope import read_observation
from scanfit.likelihoods.gamma_dwarfs.term import GammaDwarfs
from tests.unit.test_gamma_dwarfs import candidate, term

SHARED = """
title = "two of a kind"
j_systematic = "profile_shape"
[energy]
edges = [1.0, 3.0, 10.0, 30.0]
resolution = 0.1
[telescope]
exposure = 1e11
[[shared_backgrounds]]
name = "diffuse"
error = 0.1
[[targets]]
name = "one"
log10_j = 18.5
log10_j_error = 0.2
log10_j_shift = -0.3
background = [100.0, 20.0, 4.0]
observed = [117, 25, 3]
shared_background = "diffuse"
velocity_dispersion = 9.0
[[targets]]
name = "two"
log10_j = 19.0
log10_j_error = 0.3
background = [200.0, 40.0, 8.0]
observed = [222, 44, 9]
shared_background = "diffuse"
[[targets]]
name = "three"
log10_j = 18.0
log10_j_error = 0.3
log10_j_shift = 0.1
background = [50.0, 10.0, 2.0]
background_error = 0.05
observed = [48, 9, 2]
"""


@pytest.fixture
def path(tmp_path):
    file = tmp_path / "shared.toml"
    file.write_text(SHARED)
    return file


def shared_term(path, inner="profile"):
    return GammaDwarfs(GammaDwarfs.Options(data=path.name), BuildContext(path.parent, inner))


def test_what_is_shared_becomes_parameters_of_the_scan(path):
    nuisances = {one.name: one for one in shared_term(path).nuisances}
    assert set(nuisances) == {"profile_shape", "diffuse"}
    assert {one.kind for one in nuisances.values()} == {"nuisance"}
    assert (nuisances["profile_shape"].prior.mean, nuisances["profile_shape"].prior.sigma) == (0.0, 1.0)
    assert (nuisances["diffuse"].prior.mean, nuisances["diffuse"].prior.sigma) == (1.0, 0.1)
    assert term().nuisances == ()


@pytest.mark.parametrize("inner", ["profile", "marginal"])
def test_shared_nuisances_act_on_their_targets_alone(path, inner):
    data = read_observation(path)
    flux = np.array([3e-30, 1e-30, 2e-31])
    shifted = DwarfLikelihood(data, inner).by_target(flux, {"profile_shape": 2.0, "diffuse": 1.2})
    by_hand = dataclasses.replace(
        data,
        shared=(),
        log10_j=np.array([17.9, 19.0, 18.2]),
        background=data.background * np.array([1.2, 1.2, 1.0])[:, None],
    )
    assert shifted == pytest.approx(DwarfLikelihood(by_hand, inner).by_target(flux), abs=1e-12)
    unchanged = DwarfLikelihood(data, inner).by_target(flux)
    assert np.all(np.abs(shifted - unchanged) > 1e-3)
    assert DwarfLikelihood(data, inner).by_target(flux, {"profile_shape": 0.0, "diffuse": 1.0}) == pytest.approx(
        unchanged
    )


@pytest.mark.parametrize("strength", [0.0, 1.0, 10.0])
def test_limits_profile_over_shared_nuisances(path, strength):
    """Against a general-purpose minimiser over both at once."""
    likelihood = DwarfLikelihood(read_observation(path), "profile")
    flux = strength * np.array([3e-30, 1e-30, 2e-31])

    def minus(point):
        value = likelihood.total(flux, {"profile_shape": point[0], "diffuse": point[1]})
        return 0.5 * point[0] ** 2 + 0.5 * ((point[1] - 1.0) / 0.1) ** 2 - value

    best = minimize(minus, [0.0, 1.0], method="Nelder-Mead", options={"xatol": 1e-6, "fatol": 1e-9})
    assert without_shared(likelihood, flux) == pytest.approx(-best.fun, abs=2e-3)
    assert -best.fun > likelihood.total(flux) + 0.05


def test_p_wave_annihilation_follows_the_velocity_of_each_target(path):
    """sigma v = b v^2: fluxes stand as the squares of the velocities, sqrt(6) times the dispersion."""

    def sigma_v(s):
        return np.array([1e-26 / GEV_M2_TO_CM3_S * 4.0 * (1.0 - 4.0 * 100.0**2 / s)])

    annihilation = Annihilation(("bb",), sigma_v, lambda s: sigma_v(s)[0])
    found = Candidate(100.0, True, 2, annihilation, cosmology=CosmologyOptions(underabundant="assume-all"))
    flux = shared_term(path).flux_per_j(found)
    assert flux.shape == (3, 3)
    assert flux[0] / flux[1] == pytest.approx(6.0 * (9.0 / SPEED_OF_LIGHT_KM_S) ** 2 / DWARF_VELOCITY**2, rel=1e-5)
    s_wave = shared_term(path).flux_per_j(candidate(100.0, {"bb": 1e-26}))
    assert flux[1] / s_wave[1] == pytest.approx(DWARF_VELOCITY**2, rel=1e-5)
    assert s_wave[0] == pytest.approx(s_wave[1])
    # So weak a signal changes nothing.
    nothing = shared_term(path).loglike(candidate(100.0, {"bb": 0.0}), {})
    assert shared_term(path).loglike(found, {}) == pytest.approx(nothing, abs=1e-4)


@pytest.mark.parametrize(
    ("old", "new", "where"),
    [
        ('j_systematic = "profile_shape"\n', "", "targets.0.log10_j_shift"),
        ('j_systematic = "profile_shape"', 'j_systematic = "profile shape"', "j_systematic"),
        ('j_systematic = "profile_shape"', 'j_systematic = "diffuse"', "shared_backgrounds"),
        ('name = "diffuse"', 'name = "galactic"', "targets.0.shared_background"),
        ("velocity_dispersion = 9.0", "velocity_dispersion = -9.0", "targets.0.velocity_dispersion"),
    ],
)
def test_broken_sharing_is_refused(path, old, new, where):
    path.write_text(SHARED.replace(old, new))
    with pytest.raises(InputError) as caught:
        read_observation(path)
    assert where in {problem.where for problem in caught.value.problems}


def test_there_is_a_curve_for_every_final_state_with_photons():
    assert set(GammaDwarfs.curves) == set(CURVES) == {*TABLE_CHANNELS, LINE}


@pytest.mark.parametrize("inner", ["profile", "marginal"])
def test_a_limit_curve_is_the_limit_of_its_candidates(inner):
    skua = term(inner)
    curve = skua.limit_curve("bb", points=4, pseudo_experiments=12)
    for mass, limit in zip(curve.x_values, curve.observed, strict=True):
        found = skua.explain(candidate(float(mass), {"bb": 1e-26}), {})[0].limit
        assert limit == pytest.approx(found, rel=2e-3)
    assert curve.level == 0.95
    assert curve.bands.shape == (4, 5)
    assert np.all(np.diff(curve.bands, axis=1) >= 0.0)
    assert np.all((curve.bands[:, 2] > 0.2 * curve.observed) & (curve.bands[:, 2] < 5.0 * curve.observed))
    assert any("invented" in caveat for caveat in curve.caveats)
    again = skua.limit_curve("bb", points=4, pseudo_experiments=12)
    assert np.array_equal(curve.bands, again.bands)
    weaker = skua.limit_curve("bb", level=0.9, points=4, pseudo_experiments=0)
    assert weaker.bands is None
    assert np.all(weaker.observed < curve.observed)


def test_a_line_has_a_curve_within_the_energy_range():
    curve = term().limit_curve("gammagamma", points=3, pseudo_experiments=0)
    assert 0.5 < curve.x_values[0] < curve.x_values[-1] < 500.0
    assert np.all(np.isfinite(curve.observed))


def test_calibrated_limits_are_never_stronger():
    plain = term().limit_curve("tautau", points=2, pseudo_experiments=0)
    context = BuildContext(term().data_files[0].parent, "profile")
    calibrated = GammaDwarfs(GammaDwarfs.Options(data="skua_dwarfs.toml", calibration=60), context)
    found = calibrated.limit_curve("tautau", points=2, pseudo_experiments=0)
    assert np.all(found.observed >= plain.observed * (1.0 - 1e-6))
    assert np.all(found.observed < 5.0 * plain.observed)


@pytest.mark.parametrize(("curve", "level", "where"), [("ww", None, "curve"), ("bb", 95.0, "level")])
def test_unknown_curves_and_levels_are_refused(curve, level, where):
    with pytest.raises(InputError) as caught:
        term().limit_curve(curve, level=level)
    assert caught.value.problems[0].where == where


def test_a_final_state_out_of_reach_is_refused(path):
    """Energies end at 30 GeV; at 0.3 GeV instead, even the lightest tops are out of reach."""
    assert shared_term(path).limit_curve("tt", points=2, pseudo_experiments=0).x_values[0] > 172.7
    path.write_text(SHARED.replace("edges = [1.0, 3.0, 10.0, 30.0]", "edges = [0.1, 0.15, 0.2, 0.3]"))
    with pytest.raises(InputError, match="masses above 174 GeV"):
        shared_term(path).limit_curve("tt", points=2)


def test_an_excess_is_found_in_its_target():
    """Counts of one target alone are raised by the expectation of a strong signal."""
    skua, truth = term(), candidate(60.0, {"bb": 3e-25})
    data = skua.likelihood.observation
    signal = skua.likelihood.signal(skua.flux_per_j(truth))
    observed = data.background.copy()
    observed[3] += signal[3]
    skua.likelihood = DwarfLikelihood(dataclasses.replace(data, observed=observed), "profile")
    excesses = skua.target_excesses(truth)
    assert excesses[0].name == data.names[3]
    assert excesses[0].best_factor == pytest.approx(1.0, rel=0.06)
    # J is free and its best value the measured one, so the likelihood ratio is that of the counts alone.
    mean = observed[3]
    expected = 2.0 * np.sum(mean * np.log(mean / data.background[3]) - signal[3])
    assert excesses[0].test_statistic == pytest.approx(expected, rel=0.01)
    assert excesses[0].local_p_value == pytest.approx(0.5 * math.erfc(math.sqrt(0.5 * expected)), rel=0.3)
    assert all(one.test_statistic < 1e-6 for one in excesses[1:])
    assert all(one.test_statistic == 0.0 for one in skua.target_excesses(candidate(60.0, {"nunu": 1e-26})))
