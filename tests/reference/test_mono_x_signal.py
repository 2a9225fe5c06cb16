"""Mediator production with a jet against independent computations and limits that are known exactly.

The cross sections in `INDEPENDENT` were computed outside this project, at leading order with the same parton densities,
and are quoted with two digits.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.interpolate import CubicSpline
from scipy.stats import qmc

from scanfit.likelihoods.constants import GEV_M2_TO_PB
from scanfit.likelihoods.mediator_widths import axial_width, spin_one_total_width, vector_width
from scanfit.likelihoods.mono_x.signal import VIRTUALITY_SCALE, SpinOneSignal, load_table

TABLE = load_table("mono-jet", 13.0)
ABOVE_200 = SpinOneSignal(TABLE, (200.0, math.inf))

# coupling, mediator mass, dark-matter mass, cut: pb for g_quark = 0.25, g_dark = 1, 13 TeV, jet |y| < 2.4.
INDEPENDENT = {
    ("vector", 1000, 1, 150): 0.97, ("vector", 1000, 1, 200): 0.61, ("vector", 1000, 1, 250): 0.41,
    ("axial", 1000, 1, 150): 0.99, ("axial", 1000, 1, 200): 0.62, ("axial", 1000, 1, 250): 0.41,
    ("vector", 1000, 400, 150): 0.80, ("vector", 1000, 400, 200): 0.51, ("vector", 1000, 400, 250): 0.34,
    ("axial", 1000, 400, 150): 0.33, ("axial", 1000, 400, 200): 0.21, ("axial", 1000, 400, 250): 0.14,
    ("vector", 1000, 600, 150): 0.012, ("vector", 1000, 600, 200): 0.0077, ("vector", 1000, 600, 250): 0.0053,
    ("axial", 1000, 600, 150): 0.0026, ("axial", 1000, 600, 200): 0.0017, ("axial", 1000, 600, 250): 0.0012,
    ("vector", 100, 1, 200): 36.6, ("vector", 500, 1, 200): 4.2,
    ("vector", 2000, 1, 200): 0.045, ("vector", 3000, 1, 200): 0.0058,
}  # fmt: skip


def cross_section(coupling: str, mediator_mass: float, dark_mass: float, cut: float, g_quark: float = 0.25) -> float:
    width = spin_one_total_width(mediator_mass, coupling, dark_mass, 1.0, g_quark)
    signal = SpinOneSignal(TABLE, (float(cut), math.inf))
    return float(signal(mediator_mass, width, coupling == "axial", dark_mass, g_quark, 1.0)[0][0])


@pytest.mark.parametrize(("point", "expected"), INDEPENDENT.items())
def test_cross_sections_agree_with_the_independent_computation_to_two_per_cent(point, expected):
    half_a_digit = 0.5 * 10.0 ** (math.floor(math.log10(expected)) - 1)
    if expected == 36.6:
        half_a_digit = 0.05
    assert abs(cross_section(*point) - expected) < 0.02 * expected + half_a_digit


@pytest.mark.parametrize(
    ("signature", "sqrt_s", "rapidity"),
    [
        ("mono-jet", 13.0, 2.4),
        ("mono-jet", 13.6, 2.4),
        ("mono-jet", 14.0, 2.4),
        ("mono-photon", 13.0, 2.37),
        ("mono-photon", 14.0, 2.37),
    ],
)
def test_table_agrees_with_sampling_the_parton_formula_in_other_variables(signature, sqrt_s, rapidity):
    """Same physics in (x1, x2, cos theta*) instead of rapidities and pT, by quasi-random sampling."""
    pythia8mc = pytest.importorskip("pythia8mc", reason="the extra `tables` is not installed")
    pythia = pythia8mc.Pythia("", False)
    pythia.readString("Print:quiet = on")
    pythia.readString("ProcessLevel:all = off")
    pythia.init()
    density = pythia.getPDFPtr(2212).xf
    table = load_table(signature, sqrt_s)
    node, root_s, cut = 32, 1000.0 * sqrt_s, 200.0
    mass2 = table.virtuality[node] ** 2
    # Partonic energy from the smallest that allows the cut; rapidity of the pair; angle within the cut.
    smallest = (cut + math.sqrt(cut**2 + mass2)) ** 2
    total = np.zeros(2)
    points = qmc.Sobol(3, seed=7).random_base2(13)
    for first, second, third in points:
        log_range = math.log(root_s**2 / smallest)
        s = smallest * math.exp(log_range * first**2)
        boost_range = math.log(root_s**2 / s)
        boost = boost_range * (second - 0.5)
        x1, x2 = math.sqrt(s) / root_s * math.exp(boost), math.sqrt(s) / root_s * math.exp(-boost)
        momentum = (s - mass2) / (2.0 * math.sqrt(s))
        largest_cosine = math.sqrt(1.0 - (cut / momentum) ** 2)
        cosine = largest_cosine * (2.0 * third - 1.0)
        pt2 = momentum**2 * (1.0 - cosine**2)
        jet_rapidity = boost - math.atanh(cosine)
        if abs(jet_rapidity) > rapidity:
            continue
        t, u = -0.5 * (s - mass2) * (1.0 - cosine), -0.5 * (s - mass2) * (1.0 + cosine)
        # Jacobian of ds/s dy dt.
        measure = log_range * 2.0 * first * boost_range * 0.5 * (s - mass2) * 2.0 * largest_cosine
        strong = 0.13 / (1.0 + 0.13 * 23.0 / (12.0 * math.pi) * math.log(math.sqrt(pt2 * (pt2 + mass2)) / 91.1876**2))
        annihilation = (t * t + u * u + 2.0 * s * mass2) / (t * u) * 8.0 / 9.0
        compton1 = -(s * s + t * t + 2.0 * u * mass2) / (s * t) / 3.0
        compton2 = -(s * s + u * u + 2.0 * t * mass2) / (s * u) / 3.0
        gluon1, gluon2 = density(21, x1, pt2), density(21, x2, pt2)
        if signature == "mono-photon":
            strong, compton1, compton2, annihilation = 1.0 / 137.036, 0.0, 0.0, 0.75 * annihilation
        for kind, flavours in enumerate(((2, 4), (1, 3, 5))):
            charge2 = (4.0 / 9.0, 1.0 / 9.0)[kind] if signature == "mono-photon" else 1.0
            for f in flavours:
                q1, a1, q2, a2 = density(f, x1, pt2), density(-f, x1, pt2), density(f, x2, pt2), density(-f, x2, pt2)
                luminosity = (q1 * a2 + a1 * q2) * annihilation
                luminosity += (q1 + a1) * gluon2 * compton1 + (q2 + a2) * gluon1 * compton2
                total[kind] += measure * luminosity * 0.25 * strong * charge2 / s**2
    sampled = total / len(points) * GEV_M2_TO_PB
    tabulated = np.exp(CubicSpline(np.log(table.cut), np.log(table.cross_section[0, node]))(math.log(cut)))
    np.testing.assert_allclose(tabulated, sampled, rtol=0.01)


@pytest.mark.parametrize("coupling", ["vector", "axial"])
def test_a_narrow_mediator_is_production_times_branching_ratio(coupling):
    node = 33
    mass = float(TABLE.virtuality[node])
    edge = float(TABLE.cut[8])
    signal = SpinOneSignal(TABLE, (edge, math.inf))
    width = 1e-6 * mass
    produced = float(TABLE.cross_section[0, node, 8].sum())
    partial = (axial_width if coupling == "axial" else vector_width)(mass, 0.2 * mass, 1.0)
    found = signal(mass, width, coupling == "axial", 0.2 * mass, 1.0, 1.0)[0][0]
    assert found == pytest.approx(produced * partial / width, rel=1e-5)


@pytest.mark.parametrize(("ratio", "deviation"), [(0.06, 0.02), (0.5, 0.21)])
def test_finite_width_departs_from_narrow_scaling_as_computed_independently(ratio, deviation):
    narrow = ABOVE_200(1000.0, 1e-6, False, 1.0, 0.25, 1.0)[0][0] * 1e-6 / (ratio * 1000.0)
    broad = ABOVE_200(1000.0, ratio * 1000.0, False, 1.0, 0.25, 1.0)[0][0]
    assert 1.0 - broad / narrow == pytest.approx(deviation, abs=0.005)


def reference_integral(mass: float, width: float, axial: bool, dark_mass: float) -> float:
    """The same integral by adaptive quadrature over Q, piecewise on both sides of pole and threshold."""
    position = np.arcsinh(TABLE.virtuality / VIRTUALITY_SCALE)
    by_cut = CubicSpline(np.log(TABLE.cut), np.log(TABLE.cross_section[0].sum(axis=-1)), axis=1)
    rate = CubicSpline(position, by_cut(math.log(200.0)))
    partial = axial_width if axial else vector_width
    end = float(TABLE.virtuality[-1])

    def integrand(q: float) -> float:
        tabulated = math.exp(float(rate(math.asinh(q / VIRTUALITY_SCALE))))
        shape = 2.0 * q**2 / (math.pi * ((q * q - mass**2) ** 2 + (mass * width) ** 2))
        return tabulated * shape * partial(q, dark_mass, 1.0)

    breaks = {2.0 * dark_mass, end, *np.geomspace(2.0 * dark_mass, end, 40)}
    for distance in (0.0, *np.geomspace(0.1, 1e10, 34)):
        for sign in (-1.0, 1.0):
            squared = mass**2 + sign * distance * mass * width
            if 4.0 * dark_mass**2 < squared < end**2:
                breaks.add(math.sqrt(squared))
    ordered = sorted(breaks)
    return sum(
        quad(integrand, low, high, epsabs=0.0, epsrel=1e-7, limit=200)[0]
        for low, high in itertools.pairwise(ordered)
        if high > low * (1.0 + 1e-14)
    )


@pytest.mark.parametrize(
    ("mass", "relative_width", "axial", "dark_mass"),
    [
        (30.0, 0.05, False, 3.0),
        (1000.0, 0.06, False, 1.0),
        (1000.0, 1e-7, True, 100.0),
        (1000.0, 0.05, False, 499.9),
        (1000.0, 0.02, True, 500.1),
        (5000.0, 1e-4, False, 10.0),
        (9000.0, 0.3, True, 400.0),
        (20000.0, 0.1, False, 50.0),
        (200.0, 1e-3, True, 1500.0),
    ],
)
def test_quadrature_is_good_to_1e_4_on_and_off_the_mass_shell(mass, relative_width, axial, dark_mass):
    found = ABOVE_200(mass, relative_width * mass, axial, dark_mass, 1.0, 1.0)[0][0]
    assert found == pytest.approx(reference_integral(mass, relative_width * mass, axial, dark_mass), rel=1e-4)


@pytest.mark.parametrize("coupling", ["vector", "axial"])
def test_rate_is_continuous_where_the_mediator_goes_off_shell(coupling):
    """Across 2 m = M the rate falls by orders of magnitude, but it has no jump: neighbours agree ever better."""
    mass = 800.0

    def change(step: float) -> float:
        rates = [
            ABOVE_200(mass, spin_one_total_width(mass, coupling, m, 1.0, 0.25), coupling == "axial", m, 0.25, 1.0)[0][0]
            for m in (0.5 * mass * (1.0 - step), 0.5 * mass * (1.0 + step))
        ]
        return abs(rates[1] / rates[0] - 1.0)

    assert change(0.1) > 0.5
    assert change(1e-5) < 1e-2
    assert change(1e-7) < 1e-3
    assert change(1e-9) < 1e-4


def test_couplings_scale_exactly_at_fixed_width():
    one = ABOVE_200(1500.0, 40.0, True, 200.0, 1.0, 1.0)[0][0]
    assert ABOVE_200(1500.0, 40.0, True, 200.0, 0.1, 0.7)[0][0] == pytest.approx(0.07**2 * one, rel=1e-13)


def test_bins_add_up_and_edges_may_fall_between_the_cuts_of_the_table():
    bins = SpinOneSignal(TABLE, (200.0, 237.0, 415.0, 990.0, math.inf))
    point = (700.0, 30.0, False, 50.0, 0.25, 1.0)
    assert bins(*point)[0].sum() == pytest.approx(ABOVE_200(*point)[0][0], rel=2e-5)
    # Leaving out every other cut bounds the error of interpolation from above (by about 16 times).
    log_cut, log_rate = np.log(TABLE.cut), np.log(TABLE.cross_section[0].sum(axis=-1))
    below_4_tev = TABLE.virtuality < 4000.0
    coarse = CubicSpline(log_cut[::2], log_rate[:, ::2], axis=1)(log_cut[1::2])
    assert np.abs(coarse - log_rate[:, 1::2])[below_4_tev].max() < 1e-3


def test_light_mediators_have_a_smooth_limit_and_heavy_dark_matter_gives_nothing():
    by_cut = CubicSpline(np.log(TABLE.cut), np.log(TABLE.cross_section[0, 0].sum(axis=-1)))
    for mass in (0.01, 0.1, 1.0):
        found = ABOVE_200(mass, 1e-6 * mass, False, 0.1 * mass, 1.0, 1.0)[0][0]
        branching = vector_width(mass, 0.1 * mass, 1.0) / (1e-6 * mass)
        assert found == pytest.approx(math.exp(by_cut(math.log(200.0))) * branching, rel=1e-4)
    assert ABOVE_200(1000.0, 10.0, False, 5200.0, 0.25, 1.0)[0][0] == 0.0
    assert ABOVE_200(1000.0, 10.0, False, 5.0, 0.0, 1.0)[0][0] == 0.0


def test_scale_uncertainty_is_the_spread_of_the_table():
    node = 33
    mass, edge = float(TABLE.virtuality[node]), float(TABLE.cut[8])
    rates = TABLE.cross_section[:, node, 8].sum(axis=-1)
    found = SpinOneSignal(TABLE, (edge, math.inf))(mass, 1e-6 * mass, False, 1.0, 0.25, 1.0)[1][0]
    assert found == pytest.approx(np.abs(np.log(rates[1:] / rates[0])).max(), rel=1e-4)
    assert 0.05 < found < 0.4
