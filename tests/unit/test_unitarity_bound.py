"""The unitarity bound: its thermal average, and the term."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError, PointError
from scanfit.likelihoods.candidate import Annihilation, Candidate
from scanfit.likelihoods.constants import GEV_M2_TO_CM3_S
from scanfit.likelihoods.relic_abundance.cross_sections import constant_average
from scanfit.likelihoods.relic_abundance.unitarity import s_wave_bound
from scanfit.likelihoods.unitarity_bound import UnitarityBound
from scanfit.validation import check
from tests.reference import relic_reference


def term(**options: object) -> UnitarityBound:
    return UnitarityBound(check(UnitarityBound.Options, options), BuildContext(Path()))


def candidate(sigma_v: float, mass: float = 1000.0) -> Candidate:
    annihilation = constant_average(mass=mass, sigma_v=sigma_v)
    return Candidate(mass=mass, self_conjugate=True, spin_degrees_of_freedom=2, annihilation=annihilation)


@pytest.mark.parametrize("x", [1.0, 5.0, 25.0, 300.0])
def test_closed_form_against_quadrature(x: float) -> None:
    """sigma = pi/k^2 with k^2 = s/4 - m^2, times v_rel, through scipy's quadrature."""
    mass = 50.0

    def largest(s: float) -> float:
        # Finite at the very threshold, where the weight vanishes.
        return math.pi / max(0.25 * s - mass**2, 1e-200) * 2.0 * math.sqrt(max(0.0, 1.0 - 4.0 * mass**2 / s))

    assert s_wave_bound(mass, x) == pytest.approx(relic_reference.thermal_average(largest, mass, x), rel=1e-7)


def test_limit_of_low_temperature() -> None:
    """4 pi/(m^2 v) averaged without relativity is 4 pi/m^2 sqrt(x/pi); relativity still takes 11 % at x = 25."""
    usual = 4.0 * math.pi * math.sqrt(1e5 / math.pi)
    assert s_wave_bound(1.0, 1e5) == pytest.approx(usual, rel=1e-4)
    assert s_wave_bound(1.0, 25.0) / (4.0 * math.pi * math.sqrt(25.0 / math.pi)) == pytest.approx(0.894, abs=2e-3)


def at_the_bound(mass: float, self_conjugate: bool) -> Candidate:
    """Annihilation as fast as one s-wave allows, at every energy."""

    def total(s: np.ndarray) -> np.ndarray:
        return np.asarray(8.0 * math.pi / np.sqrt(s * np.maximum(s - 4.0 * mass**2, 1e-12 * mass**2)))

    annihilation = Annihilation(("bb",), lambda s: total(s)[None, :], total)
    return Candidate(mass=mass, self_conjugate=self_conjugate, spin_degrees_of_freedom=2, annihilation=annihilation)


@pytest.mark.parametrize(("self_conjugate", "published"), [(True, 197e3), (False, 139e3)])
def test_heaviest_thermal_relic(self_conjugate: bool, published: float) -> None:
    """arXiv:1407.7874, from memory: s-wave unitarity allows 197 TeV when self-conjugate, 139 TeV otherwise."""
    relic = at_the_bound(published, self_conjugate).relic
    x = relic.x_freeze_out
    assert relic.sigma_v_freeze_out == pytest.approx(s_wave_bound(published, x) * GEV_M2_TO_CM3_S, rel=1e-3)
    # The abundance grows as m^2, so 10 % in the mass are 20 % here.
    assert relic.omega_h2 == pytest.approx(0.12, rel=0.2)


def test_a_cut_and_nothing_else() -> None:
    own = term()
    below, above = candidate(1e-22), candidate(1e-21)
    assert own.loglike(below, {}) == 0.0
    assert own.loglike(above, {}) == -math.inf
    assert above.relic.flags["above_unitarity_bound"]
    assert not below.relic.flags["above_unitarity_bound"]
    assert term(partial_waves=2).loglike(above, {}) == 0.0
    assert term(partial_waves=2).bound(above) == pytest.approx(4.0 * own.bound(above))
    (line,) = own.explain(above, {})
    assert line.limit is not None
    assert line.predicted > line.limit
    assert own.simulate(below, {}, np.random.default_rng(1)) is own.expected(below, {}) is own


def test_no_abundance_is_a_point_error() -> None:
    nothing = Annihilation(("bb",), lambda s: np.full((1, len(s)), np.nan), lambda s: np.full(len(s), np.nan))
    broken = Candidate(mass=100.0, self_conjugate=True, spin_degrees_of_freedom=2, annihilation=nothing)
    with pytest.raises(PointError, match="freeze-out"):
        term().loglike(broken, {})


@pytest.mark.parametrize("options", [{"partial_waves": 0}, {"partial_waves": 1.5}, {"waves": 1}])
def test_bad_options(options: dict[str, object]) -> None:
    with pytest.raises(InputError):
        term(**options)
