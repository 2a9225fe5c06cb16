"""The term, its data file and the energy response."""

import math
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError, PointError
from scanfit.likelihoods.candidate import CHANNELS, Annihilation, Candidate, CosmologyOptions
from scanfit.likelihoods.constants import GEV_M2_TO_CM3_S
from scanfit.likelihoods.gamma_dwarfs.dispersion import EnergyResponse, normal_response
from scanfit.likelihoods.gamma_dwarfs.limits import upper_limit
from scanfit.likelihoods.gamma_dwarfs.spectra import LINE, PHOTONLESS, TABLE_CHANNELS, TABLE_COLUMN, photon_table
from scanfit.likelihoods.gamma_dwarfs.telescope import read_observation
from scanfit.likelihoods.gamma_dwarfs.term import GammaDwarfs

RUNS = Path(__file__).parents[2] / "runs"
SKUA = RUNS / "demo" / "skua_dwarfs.toml"
SMALL = """
title = "small"
[energy]
edges = [1.0, 3.0, 10.0]
resolution = 0.1
[telescope]
exposure = 1e11
[[targets]]
name = "one"
log10_j = 18.5
log10_j_error = [0.2, 0.3]
background = [10.0, 2.0]
observed = [11, 1]
"""


def candidate(mass, sigma_v, self_conjugate=True):
    """A candidate with constant sigma v in cm^3/s per channel that makes up all dark matter."""
    values = np.array(list(sigma_v.values())) / GEV_M2_TO_CM3_S

    def by_channel(s):
        return np.outer(values, np.ones_like(s))

    annihilation = Annihilation(tuple(sigma_v), by_channel, lambda s: by_channel(s).sum(axis=0))
    return Candidate(mass, self_conjugate, 2, annihilation, cosmology=CosmologyOptions(underabundant="assume-all"))


def term(inner="profile", data="demo/skua_dwarfs.toml", folder=RUNS):
    return GammaDwarfs(GammaDwarfs.Options(data=data), BuildContext(folder, inner))


def problems(text, tmp_path):
    path = tmp_path / "telescope.toml"
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        read_observation(path)
    assert caught.value.source == str(path)
    return {problem.where: str(problem) for problem in caught.value.problems}


def test_every_final_state_is_known():
    assert set(CHANNELS) == set(TABLE_COLUMN) | PHOTONLESS | {LINE}
    assert [name for name in TABLE_CHANNELS if name not in CHANNELS] == []


def test_the_demo_says_that_it_is_invented_and_how_it_was_made():
    skua = term()
    assert any("invented" in caveat for caveat in skua.caveats)
    assert skua.data_files == (SKUA,)
    data = skua.likelihood.observation
    assert np.array_equal(data.observed, np.random.default_rng(20261201).poisson(data.background))


@pytest.mark.parametrize("inner", ["profile", "marginal"])
def test_the_demo_limit_lies_near_the_thermal_cross_section(inner):
    skua = term(inner)
    found = candidate(80.0, {"bb": 2.2e-26})
    limit = 2.2e-26 * upper_limit(skua.likelihood, skua.flux_per_j(found))
    assert 1e-26 < limit < 4e-26
    assert skua.loglike(found, {}) < skua.loglike(candidate(80.0, {"bb": 0.0}), {})
    assert skua.loglike(candidate(80.0, {"bb": 100.0 * limit}), {}) < skua.loglike(found, {}) - 50.0


def test_final_states_add_up():
    skua = term()
    parts = [skua.flux_per_j(candidate(200.0, {name: 1e-26})) for name in ("bb", "WW", "tautau")]
    mixed = skua.flux_per_j(candidate(200.0, {"bb": 1e-26, "WW": 1e-26, "tautau": 1e-26}))
    assert mixed == pytest.approx(sum(parts), rel=1e-9)
    assert skua.flux_per_j(candidate(200.0, {"dd": 1e-26, "ss": 1e-26})) == pytest.approx(
        2.0 * skua.flux_per_j(candidate(200.0, {"uu": 1e-26}))
    )


def test_particles_with_antiparticles_annihilate_half_as_often():
    skua = term()
    own = skua.flux_per_j(candidate(50.0, {"bb": 1e-26}))
    assert skua.flux_per_j(candidate(50.0, {"bb": 1e-26}, self_conjugate=False)) == pytest.approx(0.5 * own)


def test_an_underabundant_candidate_is_dimmer_by_the_square():
    skua, found = term(), candidate(50.0, {"bb": 1e-26})
    full = skua.flux_per_j(found)
    object.__setattr__(found, "dm_fraction", 0.2)
    assert skua.flux_per_j(found) == pytest.approx(0.04 * full)


def test_a_line_is_seen_at_the_mass():
    skua = term()
    photons = skua.flux_per_j(candidate(100.0, {"gammagamma": 1e-26}))
    edges = skua.likelihood.observation.response.edges
    assert edges[photons.argmax()] <= 100.0 < edges[photons.argmax() + 1]
    assert photons.sum() == pytest.approx(2e-26 / (8.0 * math.pi * 1e4), rel=1e-6)
    # 10 % resolution: bins are 33 % wide, so a few per cent of the photons land two bins away at most.
    assert photons[np.abs(np.arange(24) - photons.argmax()) > 2].sum() < 1e-3 * photons.sum()


def test_masses_outside_the_table_fail_unless_there_is_nothing_to_see():
    skua = term()
    for mass in (2.0, 2e5):
        with pytest.raises(PointError, match="3 to 100000 GeV"):
            skua.loglike(candidate(mass, {"tautau": 1e-26}), {})
        silent = skua.loglike(candidate(mass, {"nunu": 1e-26, "dark": 1e-26}), {})
        assert silent == skua.loglike(candidate(100.0, {"bb": 0.0}), {})


def test_explain_states_limit_and_counts():
    skua = term()
    lines = skua.explain(candidate(100.0, {"bb": 1e-26, "tautau": 2e-26}), {})
    assert lines[0].predicted == pytest.approx(3e-26)
    assert 1e-26 < lines[0].limit < 1e-25
    assert lines[1].observed == skua.likelihood.observation.observed.sum()
    dark = skua.explain(candidate(100.0, {"nunu": 1e-26}), {})
    assert dark[0].limit is None
    assert "no limit" in dark[0].note


@pytest.mark.parametrize("inner", ["profile", "marginal"])
def test_an_injected_signal_is_found_again(inner):
    truth = candidate(60.0, {"bb": 3e-25})
    expected = term(inner).expected(truth, {})
    grid = {
        (mass, factor): expected.loglike(candidate(mass, {"bb": factor * 3e-25}), {})
        for mass in (30.0, 45.0, 60.0, 80.0, 120.0)
        for factor in (0.25, 0.5, 0.75, 1.0, 1.33, 2.0, 4.0)
    }
    mass, factor = max(grid, key=grid.get)
    assert mass == 60.0
    # Integrating over J favours a little less signal: the average J exceeds the measured one.
    assert factor == 1.0 if inner == "profile" else factor in (0.75, 1.0)
    drawn = term(inner).simulate(truth, {}, np.random.default_rng(8))
    assert drawn.loglike(truth, {}) > drawn.loglike(candidate(60.0, {"bb": 0.0}), {}) + 50.0
    again = term(inner).simulate(truth, {}, np.random.default_rng(8))
    assert again.loglike(truth, {}) == drawn.loglike(truth, {})


def test_an_asymmetric_error_and_defaults_are_read(tmp_path):
    path = tmp_path / "telescope.toml"
    path.write_text(SMALL)
    data = read_observation(path)
    assert (data.j_minus[0], data.j_plus[0]) == (0.2, 0.3)
    assert data.acceptance.tolist() == [[1e11, 1e11]]
    assert data.background_error.tolist() == [0.0]
    assert not data.invented


def test_all_problems_of_a_file_are_named_at_once(tmp_path):
    text = (
        SMALL.replace("exposure = 1e11", "exposure = -1.0")
        .replace("log10_j = 18.5", "log10_J = 18.5")
        .replace("observed = [11, 1]", "observed = [11, -1]")
        .replace("background = [10.0, 2.0]", "background = [10.0, 0.0]")
    )
    found = problems(text, tmp_path)
    assert {
        "telescope.exposure.0", "targets.0.log10_J", "targets.0.log10_j", "targets.0.observed.1",
        "targets.0.background.1",
    } == set(found)  # fmt: skip
    assert "did you mean 'log10_j'" in found["targets.0.log10_J"]


def test_lengths_order_and_names_are_checked(tmp_path):
    second = SMALL[SMALL.index("[[targets]]") :]
    text = (
        SMALL.replace("edges = [1.0, 3.0, 10.0]", "edges = [1.0, 3.0, 2.0]")
        .replace("observed = [11, 1]", "observed = [11]")
        .replace("exposure = 1e11", "exposure = [1e11, 1e11, 1e11]")
        + second
    )
    assert set(problems(text, tmp_path)) == {
        "energy.edges", "targets.0.observed", "telescope.exposure", "targets",
    }  # fmt: skip


@pytest.mark.parametrize(
    ("text", "where"),
    [
        (SMALL.replace("resolution = 0.1\n", ""), "energy"),
        (SMALL.replace("resolution = 0.1", "resolution = 0.9"), "energy.resolution"),
        (SMALL.replace("[0.2, 0.3]", "[0.2, 0.3, 0.4]"), "targets.0.log10_j_error"),
        (SMALL.replace("observed = [11, 1]", "observed = [11.5, 1]"), "targets.0.observed.0"),
        (SMALL[: SMALL.index("[[targets]]")], "targets"),
        (
            SMALL.replace("resolution = 0.1", "dispersion = { true_edges = [1.0, 5.0], matrix = [[0.5, 0.6]] }"),
            "energy.dispersion.matrix.0",
        ),
        (
            SMALL.replace("resolution = 0.1", "dispersion = { true_edges = [1.0, 5.0, 9.0], matrix = [[0.5, 0.4]] }"),
            "energy.dispersion.matrix",
        ),
        ("title = ", ""),
    ],
)
def test_broken_files_are_refused(text, where, tmp_path):
    assert where in problems(text, tmp_path)


def test_a_missing_file_is_named(tmp_path):
    with pytest.raises(InputError, match="cannot be read"):
        term(data="nowhere.toml", folder=tmp_path)


def test_a_measured_dispersion_moves_photons(tmp_path):
    """A matrix that puts every photon above 3 GeV into the lower bin, half of those below it nowhere."""
    path = tmp_path / "telescope.toml"
    path.write_text(
        SMALL.replace(
            "resolution = 0.1", "dispersion = { true_edges = [1.0, 3.0, 10.0], matrix = [[0.5, 0.0], [1.0, 0.0]] }"
        )
    )
    response = read_observation(path).response
    weights = np.zeros(len(TABLE_CHANNELS))
    weights[TABLE_COLUMN["bb"]] = 1.0
    true = -np.diff(photon_table().photons_above(weights, 100.0, np.array([1.0, 3.0, 10.0])))
    assert response.photons(photon_table(), weights, 0.0, 100.0) == pytest.approx([0.5 * true[0] + true[1], 0.0])
    assert response.line(5.0).tolist() == [1.0, 0.0]
    assert response.line(50.0).tolist() == [0.0, 0.0]


def test_normal_smearing_conserves_photons_and_matches_an_integral():
    """A power law smeared by a tenth, against numerical integration over true energies."""
    edges = np.geomspace(1.0, 100.0, 13)
    response = normal_response(edges, 0.1)
    true = response.true_edges
    smeared = response.matrix @ (true[:-1] ** -1.5 - true[1:] ** -1.5)
    energy = np.geomspace(true[0], true[-1], 200_001)
    density = 1.5 * energy**-2.5
    for k in (0, 5, 11):
        z_low, z_high = ((edge / energy - 1.0) / 0.1 for edge in (edges[k], edges[k + 1]))
        inside = 0.5 * np.vectorize(math.erf)(z_high / math.sqrt(2.0)) - 0.5 * np.vectorize(math.erf)(
            z_low / math.sqrt(2.0)
        )
        assert smeared[k] == pytest.approx(np.trapezoid(density * inside, energy), rel=5e-4)
    middle = (true[:-1] > 2.0) & (true[1:] < 50.0)
    assert response.matrix.sum(axis=0)[middle] == pytest.approx(1.0, abs=1e-6)


def test_perfect_resolution_is_the_identity():
    response = normal_response(np.array([1.0, 2.0, 4.0]), 0.0)
    assert isinstance(response, EnergyResponse)
    assert response.line(3.0).tolist() == [0.0, 1.0]
    assert np.array_equal(response.matrix, np.eye(2))
