"""The shipped photon spectra against published fits, published multiplicities and simulation kept out of the table.

"Independent simulation" below means another run of the same general-purpose generator (1500-2500 events of
e+e- -> f fbar at sqrt(s) = 2m without initial-state radiation), made apart from the script that makes the table.
"""

import hashlib
import json
from importlib.resources import files
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from scanfit.errors import PointError
from scanfit.likelihoods.constants import ELECTRON_MASS, MUON_MASS
from scanfit.likelihoods.gamma_dwarfs.spectra import (
    TABLE_CHANNELS,
    TABLE_COLUMN,
    box_edges,
    final_state_radiation,
    photon_table,
)


@pytest.fixture(scope="module")
def arrays():
    with files("scanfit.likelihoods.tables").joinpath("photon_spectra.npz").open("rb") as file:
        return dict(np.load(file))


def weights(channel):
    one = np.zeros(len(TABLE_CHANNELS))
    one[TABLE_COLUMN[channel]] = 1.0
    return one


def counts(channel, mass, edges):
    """Photons per annihilation between neighbouring energies."""
    return -np.diff(photon_table().photons_above(weights(channel), mass, np.asarray(edges, dtype=float)))


def test_the_file_is_what_the_script_wrote(arrays):
    metadata = json.loads(str(arrays["metadata"]))
    digest = hashlib.sha256()
    for name in sorted(set(arrays) - {"metadata"}):
        digest.update(name.encode())
        digest.update(np.ascontiguousarray(arrays[name]).tobytes())
    assert digest.hexdigest() == metadata["sha256"]
    assert {run["generator"] for run in metadata["runs"]} == {"pythia8mc 8.317.2"}


@pytest.mark.parametrize(
    ("name", "published", "error"),
    [
        # Means of hadronic Z decays as remembered from the Review of Particle Physics.
        ("charged", 20.76, 0.16),
        ("photons", 20.97, 1.17),
        ("neutral_pions", 9.76, 0.26),
        ("protons", 1.05, 0.04),
    ],
)
def test_z_bosons_at_rest_decay_as_measured(arrays, name, published, error):
    mean, simulation_error = json.loads(str(arrays["metadata"]))["runs"][-1]["z_boson_multiplicities"][name]
    assert abs(mean - published) < 2.5 * np.hypot(error, simulation_error)


@pytest.mark.parametrize(
    ("channel", "mass", "fraction", "above_one"),
    [
        # Energy fraction in photons and their number above 1 GeV, independent simulation.
        ("bb", 100.0, 0.277, 13.67),
        ("bb", 1000.0, 0.281, 45.9),
        ("WW", 100.0, 0.212, 9.95),
        ("WW", 1000.0, 0.229, 26.2),
        ("uu", 100.0, 0.304, 11.55),
        ("tautau", 100.0, 0.150, 2.24),
        ("tautau", 1000.0, 0.155, 2.60),
        ("tt", 1000.0, 0.244, 52.7),
    ],
)
def test_energy_and_number_agree_with_independent_simulation(arrays, channel, mass, fraction, above_one):
    at = np.interp(np.log(mass), np.log(arrays[f"{channel}_mass"]), arrays[f"{channel}_energy_fraction"])
    # W bosons are polarised in e+e- and not here; for this route .21-.22 was found independently. Statistics: 2 %.
    assert at == pytest.approx(fraction, rel=0.055 if channel == "WW" else 0.04)
    assert photon_table().photons_above(weights(channel), mass, np.array([1.0]))[0] == pytest.approx(
        above_one, rel=0.04
    )


def test_gluons_put_the_expected_energy_into_photons(arrays):
    mass = arrays["gg_mass"]
    inside = arrays["gg_energy_fraction"][(mass > 20.0) & (mass < 2000.0)]
    assert np.all((inside > 0.27) & (inside < 0.31))  # .28-.31 in independent simulation


@pytest.mark.parametrize(
    ("channel", "published"),
    [
        ("bb", [7.16, 11.37, 8.76, 4.24, 0.648, 0.0216]),
        ("tautau", [0.081, 0.164, 0.394, 0.838, 0.766, 0.207]),
        ("WW", [6.42, 9.38, 6.37, 3.01, 0.548, 0.0228]),
    ],
)
def test_shapes_agree_with_independent_simulation_at_100_gev(channel, published):
    found = counts(channel, 100.0, 100.0 * np.array([0.001, 0.003, 0.01, 0.03, 0.1, 0.3, 0.6]))
    # Events behind the published numbers: about 2000, photons independent enough for a square root.
    error = np.sqrt(np.array(published) / 2000.0 * 2.0) + 0.03 * np.array(published)
    assert np.all(np.abs(found - published) < 3.0 * error)


def analytic(channel, x):
    """Published fits, as remembered: astro-ph/9712318 and its successors, astro-ph/0407342 for taus; dN/dx."""
    if channel == "tautau":
        return np.maximum(x**-1.31 * (6.94 * x - 4.93 * x**2 - 0.51 * x**3) * np.exp(-4.53 * x), 0.0)
    a, b = {"WW": (0.73, 7.76), "bb": (1.0, 10.7), "tt": (1.1, 15.1), "uu": (0.95, 6.5)}[channel]
    return a * np.exp(-b * x) / (x**1.5 + 0.00014)


@pytest.mark.parametrize(
    ("channel", "mass", "ratios"),
    [
        # Fit over simulation in bins of x; the fits are 20-30 % low where dwarf limits are made: hence the table.
        ("bb", 100.0, [0.98, 0.75, 0.69, 0.75, 0.75]),
        # The last entry was given as 0.64 from about 50 photons; 6000 new events each of e+e- -> bb at 2 TeV and of the
        # resonance used here gave 0.93 and 1.00 (error 0.09 each), so their mean stands here.
        ("bb", 1000.0, [0.72, 0.73, 0.76, 0.95, 0.97]),
        ("WW", 100.0, [0.88, 0.79, 0.82, 1.01, 1.55]),
        ("WW", 1000.0, [0.92, 0.84, 0.82, 0.85, 0.62]),
        ("uu", 100.0, [1.19, 1.03, 0.90, 0.78, 0.69]),
        ("tautau", 100.0, [1.40, 1.09, 1.00, 1.13, 1.30]),
        ("tautau", 1000.0, [1.04, 1.03, 1.01, 1.13, 1.19]),
        ("tt", 1000.0, [0.63, 0.76, 0.92, 1.00, 0.43]),
    ],
)
def test_published_fits_stand_in_the_stated_ratio(channel, mass, ratios):
    edges = np.array([0.003, 0.01, 0.03, 0.1, 0.3, 0.6])
    fit = [quad(lambda x: float(analytic(channel, x)), *pair)[0] for pair in pairwise(edges)]
    found = np.array(fit) / counts(channel, mass, mass * edges)
    # Photons in the bin of the independent run (2000 events) and of ours (6000); few per cent for polarisation.
    photons = np.array(fit) / ratios * 1500.0
    tolerance = (0.04 + 3.0 / np.sqrt(photons)) * np.array(ratios)
    assert np.all(np.abs(found - ratios) < tolerance)


@pytest.mark.parametrize(("channel", "lepton"), [("ee", ELECTRON_MASS), ("mumu", MUON_MASS)])
@pytest.mark.parametrize("mass", [10.0, 100.0, 1000.0, 1e5])
def test_light_leptons_radiate_as_the_collinear_formula_says(channel, lepton, mass):
    edges = np.array([0.001, 0.01, 0.1, 0.3, 0.6, 0.8])
    expected = [
        quad(lambda x: float(final_state_radiation(np.array(x), mass, lepton)), *pair)[0] for pair in pairwise(edges)
    ]
    # The formula is leading-logarithmic: a tenth is what it is good for. At least 30,000 events were simulated.
    tolerance = 0.1 * np.array(expected) + 3.0 * np.sqrt(np.array(expected) / 30_000.0)
    assert np.all(np.abs(counts(channel, mass, mass * edges) - expected) < tolerance)


def test_masses_kept_out_of_the_table_are_interpolated(arrays):
    """N(> x) to 2.5 % below x = 0.2 and 5 % up to 0.5, on top of three standard errors of table and simulation."""
    edges = arrays["log10_x_edges"]
    checked = 0
    for channel, mass, photons, error in zip(
        arrays["held_out_channel"],
        arrays["held_out_mass"],
        arrays["held_out_photons"].astype(float),
        arrays["held_out_error"].astype(float),
        strict=True,
    ):
        truth = photons[::-1].cumsum()[::-1]
        found = photon_table().photons_above(weights(str(channel)), float(mass), float(mass) * 10.0 ** edges[:-1])
        above = int(np.searchsorted(arrays[f"{channel}_mass"], mass))
        own = arrays[f"{channel}_above_error"][above - 1 : above + 1].max(axis=0)
        # Where no photon was seen the error of the simulation is that of one.
        events = 6000.0
        spread = np.sqrt((error**2)[::-1].cumsum()[::-1] + 1.0 / events**2 + own**2)
        for low, high, tolerance in ((1e-5, 0.2, 0.025), (0.2, 0.5, 0.05)):
            inside = (10.0 ** edges[:-1] >= low) & (10.0 ** edges[:-1] < high)
            excess = np.abs(found - truth)[inside] - 3.0 * spread[inside]
            assert np.all(excess < tolerance * truth[inside]), (channel, mass)
            checked += int(inside.sum())
    assert checked > 1000


@pytest.mark.parametrize(
    ("channel", "at_a_fifth", "at_half"),
    [
        # Median over masses of the standard error of N(> x), relative: what the docstring of `spectra` promises.
        ("uu", 0.02, 0.05), ("cc", 0.02, 0.05), ("bb", 0.025, 0.07), ("gg", 0.035, 0.10), ("tt", 0.04, 0.12),
        ("WW", 0.03, 0.07), ("ZZ", 0.03, 0.08), ("hh", 0.04, 0.08), ("Zh", 0.04, 0.08), ("ee", 0.01, 0.02),
        ("mumu", 0.01, 0.02), ("tautau", 0.01, 0.02),
    ],
)  # fmt: skip
def test_the_table_is_as_precise_as_stated(arrays, channel, at_a_fifth, at_half):
    above = arrays[f"{channel}_photons"].astype(float)[:, ::-1].cumsum(axis=1)[:, ::-1]
    for x, stated in ((1e-3, 0.015), (0.2, at_a_fifth), (0.5, at_half)):
        column = int(np.argmin(np.abs(arrays["log10_x_edges"][:-1] - np.log10(x))))
        open_rows = above[:, column] > 1e-6
        relative = arrays[f"{channel}_above_error"][open_rows, column] / above[open_rows, column]
        assert np.median(relative) < stated, x


def test_all_energy_is_found_in_the_particles():
    """Photons, positrons (doubled for electrons), antiprotons (doubled, with rest mass) and neutrinos hold it all."""
    with files("scanfit.likelihoods.tables").joinpath("particle_spectra.npz").open("rb") as file:
        others = dict(np.load(file))
    with files("scanfit.likelihoods.tables").joinpath("photon_spectra.npz").open("rb") as file:
        photons = dict(np.load(file))
    for channel in ("bb", "tautau", "WW", "mumu"):
        energy = photons[f"{channel}_energy_fraction"].copy()
        energy += 2.0 * others[f"{channel}_positrons_energy_fraction"]
        energy += sum(
            others[f"{channel}_{flavour}_neutrinos_energy_fraction"] for flavour in ("electron", "muon", "tau")
        )
        number = others[f"{channel}_antiprotons"].sum(axis=1)
        protons = others[f"{channel}_antiprotons_energy_fraction"]
        energy += 2.0 * (protons + number * 0.938272 / (2.0 * others[f"{channel}_mass"]))
        # Particles and antiparticles fluctuate apart; above 300 GeV there are too few events for this check.
        assert energy[others[f"{channel}_mass"] <= 300.0] == pytest.approx(1.0, abs=0.015), channel
    # Michel decay: each muon gives its positron 7/20 of its energy, one of two muons is positive, less radiation.
    relative = others["mumu_positrons_energy_fraction"]
    assert relative[5] == pytest.approx(0.5 * 0.35, rel=0.03)


def test_counts_never_turn_negative_and_stop_at_the_mass():
    energies = np.geomspace(1e-3, 1e5, 2000)
    rng = np.random.default_rng(1)
    for mass in np.exp(rng.uniform(np.log(3.0), np.log(1e5), 60)):
        above = photon_table().photons_above(rng.random(len(TABLE_CHANNELS)), float(mass), energies)
        assert np.all(np.diff(above) <= 1e-12)
        assert np.all(above[energies >= mass] == 0.0)


def test_closed_channels_are_dark_and_their_thresholds_are_held():
    one = np.array([1.0])
    table = photon_table()
    assert table.photons_above(weights("WW"), 80.0, one)[0] == 0.0
    assert table.photons_above(weights("WW"), 80.4, one)[0] > 5.0
    assert table.photons_above(weights("bb"), 4.1, one)[0] == 0.0
    # Between threshold and first simulated mass the spectrum is held in x.
    assert table.photons_above(weights("bb"), 5.0, 5.0 * one / 10.0)[0] == pytest.approx(
        table.photons_above(weights("bb"), 5.5, 5.5 * one / 10.0)[0]
    )


def test_nothing_is_extrapolated_in_mass():
    with pytest.raises(PointError, match=r"from 3 to 100000 GeV, not for 2\.5 GeV"):
        photon_table().photons_above(weights("tautau"), 2.5, np.array([1.0]))
    assert photon_table().photons_above(np.zeros(len(TABLE_CHANNELS)), 2.5, np.array([1.0]))[0] == 0.0


def test_a_box_spans_the_kinematic_range():
    # phi of energy m at speed beta: photons from m(1-beta)/2 to m(1+beta)/2.
    low, high = box_edges(100.0, 60.0)
    assert (low, high) == (pytest.approx(10.0), pytest.approx(90.0))
    with pytest.raises(ValueError, match="lighter"):
        box_edges(100.0, 100.0)
