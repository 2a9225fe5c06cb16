"""Decay widths of mediators against published widths of the Z and Higgs bosons and against independent computations."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.integrate import quad

from scanfit.likelihoods.constants import HIGGS_MASS, HIGGS_VEV, QUARK_MASSES, SIN2_THETA_W_MZ, Z_MASS
from scanfit.likelihoods.mediator_widths import (
    FERMION_CHANNELS,
    axial_width,
    gluon_width,
    pseudoscalar_loop,
    pseudoscalar_width,
    scalar_loop,
    scalar_width,
    spin_one_total_width,
    spin_one_widths,
    triangle,
    vector_width,
)


def test_z_boson_widths() -> None:
    """The Z boson is a spin-one mediator with known couplings.

    Review of Particle Physics, from memory: one charged lepton 83.98 MeV, invisible 499.0 MeV, hadrons 1744 MeV, of
    which the QCD correction 1 + alpha_s/pi is not part of the tree-level formula.
    """
    g = Z_MASS / HIGGS_VEV  # g/(2 cos theta_W)

    def width(isospin: float, charge: float) -> float:
        vector = g * (isospin - 2.0 * charge * SIN2_THETA_W_MZ)
        return vector_width(Z_MASS, 0.0, vector) + axial_width(Z_MASS, 0.0, g * isospin)

    assert width(-0.5, -1.0) == pytest.approx(0.08398, rel=0.01)
    assert 3.0 * width(0.5, 0.0) == pytest.approx(0.4990, rel=0.01)
    hadrons = 3.0 * (2.0 * width(0.5, 2.0 / 3.0) + 3.0 * width(-0.5, -1.0 / 3.0))
    assert hadrons * (1.0 + 0.1179 / math.pi) == pytest.approx(1.744, rel=0.01)


@pytest.mark.parametrize(
    ("coupling", "dark_mass", "into_dark", "into_quarks", "ratio", "invisible"),
    [
        ("vector", 1.0, 26.526, 29.814, 0.05634, 0.4708),
        ("axial", 1.0, 26.526, 28.978, 0.05550, 0.4779),
        ("vector", 400.0, 21.008, 29.814, None, 0.4134),
        ("axial", 400.0, 5.7296, 28.978, None, 0.1651),
    ],
)
def test_spin_one_benchmark(
    coupling: str, dark_mass: float, into_dark: float, into_quarks: float, ratio: float | None, invisible: float
) -> None:
    """Benchmark couplings of arXiv:1603.04156 (g_dark = 1, g_quark = 0.25), M = 1 TeV; computed independently."""
    widths = spin_one_widths(1000.0, coupling == "axial", dark_mass, 1.0, 0.25, 0.0)
    assert widths[-1] == pytest.approx(into_dark, rel=1e-4)
    assert widths[:-1].sum() == pytest.approx(into_quarks, rel=1e-4)
    assert widths[-1] / widths.sum() == pytest.approx(invisible, rel=1e-3)
    if ratio is not None:
        assert widths.sum() / 1000.0 == pytest.approx(ratio, rel=1e-3)


def test_neutrinos_are_half_a_dirac_fermion_each() -> None:
    """arXiv:1703.05703, from memory: g^2 M/(24 pi) per neutrino, g^2 M/(12 pi) per charged lepton."""
    for axial in (False, True):
        widths = dict(zip((*FERMION_CHANNELS, "dark"), spin_one_widths(500.0, axial, 1e3, 1.0, 0.0, 0.1), strict=True))
        assert widths["nunu"] == pytest.approx(3.0 * 0.01 * 500.0 / (24.0 * math.pi), rel=1e-12)
        assert widths["ee"] == pytest.approx(0.01 * 500.0 / (12.0 * math.pi), rel=1e-9)
        assert widths["dark"] == 0.0
        assert widths["uu"] == 0.0


def test_total_is_the_sum() -> None:
    parts = spin_one_widths(800.0, True, 50.0, 0.7, 0.2, 0.05)
    assert spin_one_total_width(800.0, "axial", 50.0, 0.7, 0.2, 0.05) == pytest.approx(parts.sum(), rel=1e-14)


@pytest.mark.parametrize(
    ("kind", "into_dark", "into_quarks", "into_gluons"),
    [("scalar", 15.915, 3.029, 0.0154), ("pseudoscalar", 15.915, 11.862, 0.0456)],
)
def test_spin_zero_benchmark(kind: str, into_dark: float, into_quarks: float, into_gluons: float) -> None:
    """M = 400 GeV, couplings 1, dark matter of 1 GeV; numbers computed independently, alpha_s = 0.1."""
    mass = 400.0
    width = scalar_width if kind == "scalar" else pseudoscalar_width
    loop = scalar_loop if kind == "scalar" else pseudoscalar_loop
    assert width(mass, 1.0, 1.0) == pytest.approx(into_dark, rel=1e-4)
    quarks = sum(3.0 * width(mass, m, m / HIGGS_VEV) for m in QUARK_MASSES.values())
    assert quarks == pytest.approx(into_quarks, rel=1e-3)
    gluons = gluon_width(mass, loop(4.0 * (QUARK_MASSES["t"] / mass) ** 2), 0.1, 1.0)
    assert gluons == pytest.approx(into_gluons, rel=0.005)


def test_gluon_width_of_the_higgs_boson() -> None:
    """Top quark alone at leading order: 0.196 MeV at alpha_s = 0.1127 (computed independently)."""
    width = gluon_width(HIGGS_MASS, scalar_loop(4.0 * (172.7 / HIGGS_MASS) ** 2), 0.1127, 1.0)
    assert width == pytest.approx(0.196e-3, rel=5e-3)
    # Heavy-quark limit of the literature: alpha_s^2 M^3/(72 pi^3 v^2).
    heavy = gluon_width(HIGGS_MASS, scalar_loop(1e8), 0.1127, 1.0)
    assert heavy == pytest.approx(0.1127**2 * HIGGS_MASS**3 / (72.0 * math.pi**3 * HIGGS_VEV**2), rel=1e-4)


@pytest.mark.parametrize("tau", [50.0, 3.0, 1.0 + 1e-9, 0.7, 0.1, 1e-3])
def test_triangle_against_its_feynman_integral(tau: float) -> None:
    """f(tau) = -(1/2) int_0^1 dx/x ln(1 - 4 x (1 - x)/tau - i 0), evaluated with a general-purpose integrator."""
    root = math.sqrt(max(0.0, 1.0 - tau))
    breaks = [0.5 * (1.0 - root), 0.5 * (1.0 + root)] if tau < 1.0 else [0.5]

    def integrand(x: float) -> float:
        argument = 1.0 - 4.0 * x * (1.0 - x) / tau
        return math.log(abs(argument)) / x if argument != 0.0 else 0.0

    edges = [0.0, *breaks, 1.0]
    real = sum(quad(integrand, a, b, limit=200)[0] for a, b in itertools.pairwise(edges))
    imaginary = -math.pi * math.log(breaks[-1] / breaks[0])
    value = triangle(tau)
    assert value.real == pytest.approx(-0.5 * real, rel=1e-6, abs=1e-6)
    assert value.imag == pytest.approx(-0.5 * imaginary, rel=1e-9, abs=1e-12)


def test_closed_channels_have_no_width() -> None:
    for width in (vector_width, axial_width, scalar_width, pseudoscalar_width):
        assert width(100.0, 50.0, 1.0) == 0.0
        assert width(100.0, 80.0, 1.0) == 0.0
        assert width(100.0, 49.9, 1.0) > 0.0


def test_threshold_powers() -> None:
    """Velocity for s-wave decays (vector, pseudoscalar), its cube for p-wave ones (axial, scalar): angular momentum."""
    near, far = (0.5 * math.sqrt(1.0 - beta**2) for beta in (1e-3, 2e-3))
    for width, power in ((vector_width, 1), (pseudoscalar_width, 1), (axial_width, 3), (scalar_width, 3)):
        assert width(1.0, far, 1.0) / width(1.0, near, 1.0) == pytest.approx(2.0**power, rel=1e-4)


def test_widths_grow_with_virtuality() -> None:
    """Massless final states: proportional to the virtuality, by dimension."""
    roots = np.array([10.0, 100.0, 1000.0])
    for width in (vector_width, axial_width, scalar_width, pseudoscalar_width):
        values = np.array([width(root, 0.0, 0.3) for root in roots])
        np.testing.assert_allclose(values / roots, values[0] / roots[0], rtol=1e-14)
