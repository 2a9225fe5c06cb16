"""Degrees of freedom: published forms against exact integrals, check values, and each other."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad

from scanfit.likelihoods.relic_abundance.degrees_of_freedom import (
    EQUATIONS_OF_STATE,
    FIT_FUNCTIONS,
    SOURCES,
    fit_function,
    g_star_sqrt,
    interpolate,
    solver_table,
)

DEFAULT = "arxiv-1803.01038"


def exact_fraction(y: float, *, fermion: bool, entropy: bool) -> float:
    """Energy or entropy density of a species of mass y T over its massless value: Fermi or Bose integral."""
    sign = 1.0 if fermion else -1.0

    def density(mass: float) -> float:
        def integrand(p: float) -> float:
            energy = math.hypot(p, mass)
            weight = energy + p * p / (3.0 * energy) if entropy else energy
            return p * p * weight / (math.exp(energy) + sign)

        return quad(integrand, 1e-12, 60.0 + mass, epsrel=1e-10, limit=200)[0]

    return density(y) / density(0.0)


@pytest.mark.parametrize("name", FIT_FUNCTIONS)
@pytest.mark.parametrize("y", [0.1, 0.5, 1.0, 2.0, 3.5, 5.0])
def test_fit_functions_against_exact_integrals(name: str, y: float) -> None:
    """A wrong digit in arXiv:1803.01038, appendix C, as transcribed here, would show."""
    exact = exact_fraction(y, fermion="fermion" in name, entropy="entropy" in name)
    assert float(fit_function(name, np.array(y))) == pytest.approx(exact, abs=1.2e-3)


@pytest.mark.parametrize("name", FIT_FUNCTIONS)
def test_fit_functions_in_the_tail(name: str) -> None:
    exact = exact_fraction(8.0, fermion="fermion" in name, entropy="entropy" in name)
    assert float(fit_function(name, np.array(8.0))) == pytest.approx(exact, rel=0.025)


@pytest.mark.parametrize(
    ("temperature", "g_rho", "g_s"),
    [
        (1e-5, 3.383, 3.931), (1e-4, 4.318, 4.798), (1e-3, 10.545, 10.548), (0.01, 10.743, 10.742),
        (0.1, 17.747, 17.328), (0.2, 39.942, 37.459), (1.0, 69.744, 68.772), (5.0, 79.947, 79.710),
        (50.0, 92.979, 92.114), (100.0, 101.320, 100.694), (1000.0, 104.178, 104.143),
    ],
)  # fmt: skip
def test_default_source_at_check_values(temperature: float, g_rho: float, g_s: float) -> None:
    """arXiv:1803.01038, appendix C, programmed independently."""
    g = SOURCES[DEFAULT]
    assert float(g.g_rho(np.array(temperature))) == pytest.approx(g_rho, abs=6e-4)
    assert float(g.g_s(np.array(temperature))) == pytest.approx(g_s, abs=6e-4)


def test_branches_of_the_default_source_meet() -> None:
    below, above = np.array(0.12 * (1 - 1e-9)), np.array(0.12)
    assert abs(float(SOURCES[DEFAULT].g_rho(above) - SOURCES[DEFAULT].g_rho(below))) < 0.008
    assert abs(float(SOURCES[DEFAULT].g_s(above) - SOURCES[DEFAULT].g_s(below))) < 0.008


@pytest.mark.parametrize("source", EQUATIONS_OF_STATE)
def test_ideal_gas_limits(source: str) -> None:
    """Photons, electrons, muons and three neutrinos at 10 MeV, 10.76; the whole Standard Model when hot, 106.75."""
    g = SOURCES[source]
    assert float(g.g_rho(np.array(0.01))) == pytest.approx(10.76, rel=0.01)
    hot = min(1e4, g.highest)
    assert 103.0 < float(g.g_rho(np.array(hot))) < 106.9
    assert 103.0 < float(g.g_s(np.array(hot))) < 106.9


@pytest.mark.parametrize("source", ["arxiv-1803.01038", "arxiv-0910.1066"])
def test_today(source: str) -> None:
    """g_s today is 3.91 for three instantly decoupled neutrinos and 3.94 with their heating."""
    assert float(SOURCES[source].g_s(np.array(1e-6))) == pytest.approx(3.92, rel=0.01)


def test_table_rows_of_the_spline_source() -> None:
    """Three rows of arXiv:1606.07494, table S2 (transcribed): g_rho and g_rho/g_s at log10(T/MeV)."""
    g = SOURCES["arxiv-1606.07494"]
    for log_t, g_rho, ratio in ((1.6, 13.68, 1.02159), (2.4, 47.83, 1.06118), (5.0, 102.17, 1.00750)):
        temperature = np.array(1e-3 * 10.0**log_t)
        assert float(g.g_rho(temperature)) == pytest.approx(g_rho, rel=1e-9)
        assert float(g.g_rho(temperature) / g.g_s(temperature)) == pytest.approx(ratio, rel=1e-9)


def test_spread_between_sources() -> None:
    """Known differences: 5 % at 1 to 2 GeV, 3 % at 10 GeV; the oldest source 4 to 13 % above at 0.5 to 50 GeV."""
    temperature = np.array([1.5, 10.0])
    table = SOURCES["arxiv-1606.07494"].g_rho(temperature) / SOURCES[DEFAULT].g_rho(temperature) - 1.0
    np.testing.assert_allclose(np.abs(table), [0.05, 0.03], atol=0.015)
    temperature = np.geomspace(0.5, 50.0, 30)
    old = SOURCES["arxiv-0910.1066"].g_rho(temperature) / SOURCES[DEFAULT].g_rho(temperature) - 1.0
    assert old.min() > 0.02
    assert old.max() < 0.15


@pytest.mark.parametrize("source", EQUATIONS_OF_STATE)
def test_solver_table_interpolates(source: str) -> None:
    log_t = np.random.default_rng(7).uniform(math.log(1e-6), math.log(9e5), 4000)
    table = solver_table(source)
    own = np.array([interpolate(table, value) for value in log_t.tolist()])
    exact = np.column_stack([SOURCES[source].g_s(np.exp(log_t)), g_star_sqrt(np.exp(log_t), source)])
    away = np.ones(len(log_t), dtype=bool)
    for edge in SOURCES[source].edges:
        away &= np.abs(log_t - math.log(edge)) > 0.025
    # A cubic spline bends at its knots.
    np.testing.assert_allclose(own[away], exact[away], rtol=3e-5 if source == "arxiv-1606.07494" else 1e-5)
    # Within a cell of an edge the table rounds off a published jump.
    np.testing.assert_allclose(own, exact, rtol=0.02)


def test_slope_term() -> None:
    """g*^(1/2) holds d ln g_s/d ln T: at the QCD transition it exceeds g_s/sqrt(g_rho) by more than half."""
    temperature = np.array([0.16, 2e3])
    g = SOURCES[DEFAULT]
    bare = g.g_s(temperature) / np.sqrt(g.g_rho(temperature))
    ratio = g_star_sqrt(temperature, DEFAULT) / bare
    assert ratio[0] > 1.5
    assert ratio[1] == pytest.approx(1.0, abs=0.01)
