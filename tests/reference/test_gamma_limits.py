"""Flux normalisation and limits against published statements and an independent forecast."""

import math
from types import SimpleNamespace

import numpy as np
import pytest

from scanfit.likelihoods.gamma_dwarfs.dispersion import normal_response
from scanfit.likelihoods.gamma_dwarfs.likelihood import DwarfLikelihood
from scanfit.likelihoods.gamma_dwarfs.limits import upper_limit
from scanfit.likelihoods.gamma_dwarfs.spectra import TABLE_CHANNELS, TABLE_COLUMN, photon_table
from scanfit.likelihoods.gamma_dwarfs.telescope import Observation
from scanfit.likelihoods.gamma_dwarfs.term import annihilation_factor

# log10 J within 0.5 degrees and its error for the fifteen targets of arXiv:1503.02641 (Table 1, from a transcription).
LOG10_J = np.array([18.8, 17.9, 18.1, 19.0, 18.8, 18.2, 18.1, 17.6, 17.9, 18.6, 19.5, 18.4, 19.3, 18.8, 19.1])
J_ERROR = np.array([0.22, 0.25, 0.23, 0.25, 0.16, 0.21, 0.25, 0.18, 0.28, 0.18, 0.29, 0.27, 0.28, 0.19, 0.31])


def particle(mass, self_conjugate=True, fraction=1.0):
    return SimpleNamespace(mass=mass, self_conjugate=self_conjugate, dm_fraction=fraction)


def test_the_flux_of_a_thermal_candidate():
    # 2.2e-26 cm^3/s, 100 GeV, J = 1e19 GeV^2 cm^-5: 8.7535e-13 photons / (cm^2 s) per photon and annihilation.
    assert 2.2e-26 * 1e19 * annihilation_factor(particle(100.0)) == pytest.approx(8.7535e-13, rel=1e-4)
    assert annihilation_factor(particle(100.0, self_conjugate=False)) == pytest.approx(
        0.5 * annihilation_factor(particle(100.0)), rel=1e-12
    )
    assert annihilation_factor(particle(100.0, fraction=0.1)) == pytest.approx(
        0.01 * annihilation_factor(particle(100.0)), rel=1e-12
    )


def forecast():
    """Expected data of fifteen targets with a guessed exposure and background.

    2e11 cm^2 s; 1.2e-6 photons / (cm^2 s sr) above 1 GeV falling as E^-2.4; the aperture holds 68 % of a point source
    and has a radius guessed here as sqrt((0.8 deg (E/GeV)^-0.8)^2 + (0.1 deg)^2).
    """
    edges = np.geomspace(0.5, 500.0, 25)
    middle = np.sqrt(edges[1:] * edges[:-1])
    aperture = math.pi * np.radians(np.hypot(0.8 * middle**-0.8, 0.1)) ** 2
    background = np.tile(2e11 * 1.2e-6 * (edges[:-1] ** -1.4 - edges[1:] ** -1.4) * aperture, (15, 1))
    return DwarfLikelihood(
        Observation(
            title="forecast",
            invented=False,
            names=tuple(f"target {i}" for i in range(15)),
            response=normal_response(edges, 0.0),
            acceptance=np.full((15, 24), 0.68 * 2e11),
            log10_j=LOG10_J,
            j_minus=J_ERROR,
            j_plus=J_ERROR,
            background=background,
            background_error=np.zeros(15),
            background_centre=np.ones(15),
            observed=background,
        ),
        "profile",
    )


def limit(likelihood, channel, mass):
    weights = np.zeros(len(TABLE_CHANNELS))
    weights[TABLE_COLUMN[channel]] = 1.0
    photons = likelihood.observation.response.photons(photon_table(), weights, 0.0, mass)
    return upper_limit(likelihood, annihilation_factor(particle(mass)) * photons)


def test_the_targets_are_the_published_ones():
    assert np.log10(np.sum(10.0**LOG10_J)) == pytest.approx(20.02, abs=0.006)


@pytest.mark.parametrize(
    ("channel", "mass", "independent", "factor"),
    [
        # An independent forecast with the same exposure and background flux. It states neither the spectral index of
        # the background nor the aperture above 10 GeV. Here they are 2.4 and 0.1 degrees, chosen beforehand. With 2.2
        # and 0.2 degrees all seven limits agree to 15 %, but that is hindsight: so the three that live above 10 GeV get
        # a wider tolerance.
        ("bb", 10.0, 5.5e-27, 1.3),
        ("bb", 30.0, 1.07e-26, 1.3),
        ("bb", 100.0, 3.3e-26, 1.3),
        ("tautau", 10.0, 4.8e-27, 1.3),
        ("bb", 300.0, 1.2e-25, 2.0),
        ("bb", 1000.0, 5.5e-25, 2.0),
        ("tautau", 100.0, 7.9e-26, 2.0),
    ],
)
def test_the_forecast_agrees_with_an_independent_one(channel, mass, independent, factor):
    ratio = limit(forecast(), channel, mass) / independent
    assert 1.0 / factor < ratio < factor


def test_limits_cross_the_thermal_cross_section_near_100_gev():
    """arXiv:1503.02641, abstract: below the thermal value for masses up to about 100 GeV in quark and tau channels."""
    likelihood = forecast()
    for channel in ("bb", "tautau"):
        masses = np.geomspace(20.0, 400.0, 25)
        limits = np.array([limit(likelihood, channel, float(mass)) for mass in masses])
        crossing = float(np.interp(0.0, np.log(limits / 2.1e-26), masses))
        assert 50.0 < crossing < 200.0, channel
