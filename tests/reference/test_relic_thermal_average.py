"""The thermal average against exact identities, independent numbers and adaptive quadrature."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from scipy.special import kve

from scanfit.likelihoods.relic_abundance.thermal_average import average, thermal_nodes
from scanfit.priors import FloatArray
from tests.reference import relic_reference

MASS = 100.0
NO_POLES = np.zeros((0, 2))
NO_THRESHOLDS = np.zeros(0)


def nodes(
    total: Callable[[FloatArray], FloatArray], poles: FloatArray = NO_POLES, thresholds: FloatArray = NO_THRESHOLDS
) -> FloatArray:
    return thermal_nodes(total, MASS, poles, thresholds)[0]


def v_cm(s: FloatArray) -> FloatArray:
    return 2.0 * np.sqrt(1.0 - 4.0 * MASS**2 / s)


def v_lab(s: FloatArray) -> FloatArray:
    return np.sqrt(s * (s - 4.0 * MASS**2)) / (s - 2.0 * MASS**2)


@pytest.mark.parametrize("x", [1.0, 5.0, 20.0, 100.0, 1e4, 1e6])
def test_constant_laboratory_rate_averages_to_itself(x: float) -> None:
    """sigma = 1/v_lab averages to exactly 1 (Gondolo & Gelmini, Nucl. Phys. B 360 (1991) 145)."""
    assert average(nodes(lambda s: v_cm(s) / v_lab(s)), x) == pytest.approx(1.0, rel=5e-6)


@pytest.mark.parametrize(("x", "expected"), [(10.0, 0.41405), (20.0, 0.24520), (30.0, 0.17406), (100.0, 0.05742)])
def test_square_of_laboratory_velocity(x: float, expected: float) -> None:
    """sigma v_lab = v_lab^2, computed independently; the leading order 6/x is far off."""
    assert average(nodes(lambda s: v_cm(s) * v_lab(s)), x) == pytest.approx(expected, abs=6e-6)


@pytest.mark.parametrize(("x", "expected"), [(10.0, 0.87583), (20.0, 0.93195), (30.0, 0.95317), (100.0, 0.98530)])
def test_constant_rate_in_the_centre_of_mass(x: float, expected: float) -> None:
    """sigma = 1/v_cm, computed independently: the two velocities differ at finite temperature."""
    assert average(nodes(np.ones_like), x) == pytest.approx(expected, abs=6e-6)


@pytest.mark.parametrize(("width", "expected"), [(1.0, 0.9720), (0.1, 0.99732), (0.01, 0.99973), (0.001, 0.999973)])
def test_narrow_resonance(width: float, expected: float) -> None:
    """sigma = 1/((s - M^2)^2 + M^2 Gamma^2), M = 210 GeV, x = 25, over its narrow-width limit; independent numbers."""
    pole, x = 210.0, 25.0

    def total(s: FloatArray) -> FloatArray:
        return v_cm(s) / ((s - pole**2) ** 2 + (pole * width) ** 2)

    temperature = MASS / x
    # The exponentials of K_1(M/T)/K_2(m/T)^2 leave exp(-(M - 2 m)/T).
    bessel = kve(1, pole / temperature) / kve(2, x) ** 2 * math.exp(-(pole - 2.0 * MASS) / temperature)
    narrow = math.pi / (pole * width) * (pole**2 - 4.0 * MASS**2) * pole * bessel / (8.0 * MASS**4 * temperature)
    own = average(nodes(total, np.array([[pole, width]])), x)
    assert own / narrow == pytest.approx(expected, abs=6e-5 if width == 1.0 else 6e-6)


@pytest.mark.parametrize("x", [2.0, 20.0, 100.0])
@pytest.mark.parametrize(
    ("pole", "width"), [(210.0, 2.1e-4), (200.02, 2e-4), (199.0, 2e-4), (300.0, 100.0), (150.0, 10.0), (800.0, 8e-3)]
)
def test_resonances_against_quadrature(pole: float, width: float, x: float) -> None:
    def total(s: FloatArray) -> FloatArray:
        return 1.0 / ((s - pole**2) ** 2 + (pole * width) ** 2)

    expected = relic_reference.thermal_average(lambda s: float(total(np.array(s))), MASS, x, ((pole, width),))
    assert average(nodes(total, np.array([[pole, width]])), x) == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize("power", [0.5, 1.5])
@pytest.mark.parametrize("edge", [200.5, 205.0, 220.0, 260.0])
def test_thresholds_against_quadrature(edge: float, power: float) -> None:
    """A closed channel with a thousand times the coupling of the open one; it opens thermally."""

    def total(s: FloatArray) -> FloatArray:
        return np.asarray(1e-3 + np.maximum(0.0, 1.0 - edge**2 / s) ** power)

    for x in (3.0, 20.0, 50.0):
        expected = relic_reference.thermal_average(lambda s: float(total(np.array(s))), MASS, x, (), (edge,))
        own = average(nodes(total, thresholds=np.array([edge])), x)
        assert own == pytest.approx(expected, rel=1e-5)


def test_undeclared_threshold_costs_little() -> None:
    """A model that forgets a threshold gets more nodes and an average good to half a per cent instead of 1e-5."""
    edge, x = 220.0, 20.0

    def total(s: FloatArray) -> FloatArray:
        return np.asarray(1e-3 + np.sqrt(np.maximum(0.0, 1.0 - edge**2 / s)))

    own_nodes = nodes(total)
    expected = relic_reference.thermal_average(lambda s: float(total(np.array(s))), MASS, x, (), (edge,))
    assert average(own_nodes, x) == pytest.approx(expected, rel=5e-3)
    assert len(own_nodes) > len(nodes(np.ones_like))


def test_undeclared_narrow_pole_is_noticed() -> None:
    """A pole of relative width 5e-5 that nobody declared cannot be resolved blindly, but the error estimate says so."""
    pole, width = 225.0, 0.01

    def total(s: FloatArray) -> FloatArray:
        return np.asarray(1.0 / ((s - pole**2) ** 2 + (pole * width) ** 2))

    assert thermal_nodes(total, MASS, NO_POLES, NO_THRESHOLDS)[2] > 0.01
