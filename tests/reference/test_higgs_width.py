"""Width of the Higgs boson against published calculations, closed forms and a general-purpose integrator."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import quad

from scanfit.likelihoods.constants import FERMI_CONSTANT, HIGGS_MASS, TOP_MASS, W_MASS, W_WIDTH, Z_MASS, Z_WIDTH
from scanfit.likelihoods.higgs_width import (
    BOTTOM_POLE_MASS,
    HIGGS_CHANNELS,
    TREE_LEVEL_FROM,
    higgs_partial_widths,
    higgs_width_on_shell,
    higgs_width_table,
    off_shell_pair_width,
    on_shell_pair_width,
    total_width,
)
from scanfit.likelihoods.running import alpha_s, running_masses

# Total width against mass, both in GeV, as in arXiv:1307.1347, from memory.
PUBLISHED = {
    100.0: 2.46e-3, 120.0: 3.47e-3, 125.0: 4.07e-3, 130.0: 4.87e-3, 140.0: 8.12e-3, 150.0: 0.0173, 160.0: 0.0831,
    170.0: 0.380, 180.0: 0.631, 190.0: 1.04, 200.0: 1.43, 250.0: 4.04, 300.0: 8.43,
}  # fmt: skip


@pytest.fixture(scope="module")
def gauss_legendre() -> tuple[np.ndarray, np.ndarray]:
    nodes, weights = np.polynomial.legendre.leggauss(20)
    return 0.5 * (nodes + 1.0), 0.5 * weights


@pytest.mark.parametrize("mass", sorted(PUBLISHED))
def test_total_width(mass: float) -> None:
    """Within 8 % low and 2 % high: electroweak corrections, worth up to 7 % near the W threshold, are left out."""
    ratio = sum(higgs_partial_widths(mass).values()) / PUBLISHED[mass]
    assert 0.92 < ratio < 1.02
    if mass <= 130.0:
        assert ratio == pytest.approx(1.0, abs=0.015)


@pytest.mark.parametrize(
    ("channel", "fraction", "tolerance"),
    [("bb", 0.58, 0.03), ("WW", 0.215, 0.04), ("gg", 0.082, 0.08), ("tautau", 0.063, 0.03), ("cc", 0.029, 0.03),
     ("ZZ", 0.026, 0.03), ("gammagamma", 0.00227, 0.04), ("mumu", 0.000218, 0.05)],
)  # fmt: skip
def test_branching_fractions_at_125(channel: str, fraction: float, tolerance: float) -> None:
    """Branching ratios at 125 GeV of arXiv:1307.1347, from memory."""
    widths = higgs_partial_widths(125.0)
    assert widths[channel] / sum(widths.values()) == pytest.approx(fraction, rel=tolerance)


def test_one_boson_off_shell_against_the_closed_form(gauss_legendre: tuple[np.ndarray, np.ndarray]) -> None:
    """Phys. Rev. D 30, 248 (1984), as printed in hep-ph/0503172, from memory: h -> W W* into massless fermions.

    It holds for one W of negligible width; the tree-level width into nine massless pairs is 3 G_F M^3/(2 sqrt2 pi).
    """
    tree = 3.0 * FERMI_CONSTANT * W_MASS**3 / (2.0 * math.sqrt(2.0) * math.pi)
    for root_s in (100.0, 120.0, 140.0, 150.0):
        x = (W_MASS / root_s) ** 2
        shape = (
            3.0 * (1.0 - 8.0 * x + 20.0 * x**2) / math.sqrt(4.0 * x - 1.0) * math.acos((3.0 * x - 1.0) / (2.0 * x**1.5))
            - (1.0 - x) / (2.0 * x) * (2.0 - 13.0 * x + 47.0 * x**2)
            - 1.5 * (1.0 - 6.0 * x + 4.0 * x**2) * math.log(x)
        )
        closed = 3.0 * FERMI_CONSTANT**2 * W_MASS**4 / (16.0 * math.pi**3) * root_s * shape
        width = 1e-4 * tree
        assert off_shell_pair_width(root_s, W_MASS, width, 2.0, *gauss_legendre) / 1e-4 == pytest.approx(
            closed, rel=2e-3
        )


def test_narrow_bosons_above_threshold(gauss_legendre: tuple[np.ndarray, np.ndarray]) -> None:
    for root_s in (170.0, 200.0, 400.0):
        narrow = off_shell_pair_width(root_s, W_MASS, 1e-3, 2.0, *gauss_legendre)
        assert narrow == pytest.approx(on_shell_pair_width(root_s, W_MASS, 2.0), rel=1e-3)


@pytest.mark.parametrize("root_s", [90.0, 125.0, 161.0, 250.0])
def test_both_bosons_off_shell_against_an_integrator(
    root_s: float, gauss_legendre: tuple[np.ndarray, np.ndarray]
) -> None:
    """The double Breit-Wigner integral over both virtualities, by nested adaptive quadrature split at the Z mass."""
    mass, width = Z_MASS, Z_WIDTH

    def breit_wigner(q: float) -> float:
        return 2.0 * q * mass * width / ((q**2 - mass**2) ** 2 + (mass * width) ** 2) / math.pi

    def integral(function: Callable[[float], float], top: float) -> float:
        edges = [0.0, *(edge for edge in (mass - width, mass, mass + width) if edge < top), top]
        return sum(quad(function, a, b, epsrel=1e-6, limit=200)[0] for a, b in itertools.pairwise(edges))

    def matrix_element(first: float, second: float) -> float:
        a, b = (first / root_s) ** 2, (second / root_s) ** 2
        kinematic = max(0.0, (1.0 - a - b) ** 2 - 4.0 * a * b)
        return math.sqrt(kinematic) * (kinematic + 12.0 * a * b)

    def inner(first: float) -> float:
        return integral(lambda second: breit_wigner(second) * matrix_element(first, second), root_s - first)

    total = integral(lambda first: breit_wigner(first) * inner(first), root_s)
    expected = FERMI_CONSTANT * root_s**3 / (16.0 * math.sqrt(2.0) * math.pi) * total
    assert off_shell_pair_width(root_s, mass, width, 1.0, *gauss_legendre) == pytest.approx(expected, rel=1e-5)


def test_interpolation(gauss_legendre: tuple[np.ndarray, np.ndarray]) -> None:
    """Between the table's nodes, W and Z pairs agree with the integral to 1e-5, also at the thresholds."""
    for root_s in (20.0003, 91.307, 125.25, 160.11, 161.37, 182.4, 203.21, 255.55):
        widths = higgs_partial_widths(root_s)
        for channel, mass, width, species in (("WW", W_MASS, W_WIDTH, 2.0), ("ZZ", Z_MASS, Z_WIDTH, 1.0)):
            direct = off_shell_pair_width(root_s, mass, width, species, *gauss_legendre)
            assert widths[channel] == pytest.approx(direct, rel=1e-5)


def test_continuity_and_tree_level_regime() -> None:
    """No step at 300 GeV; above, W, Z and top pairs at tree level are all but 0.2 % of the width."""
    table = higgs_width_table()
    below, above = total_width(TREE_LEVEL_FROM * (1 - 1e-9), table), total_width(TREE_LEVEL_FROM * (1 + 1e-9), table)
    assert above == pytest.approx(below, rel=1e-6)
    for root_s in (300.001, 350.0, 1000.0, 1e5):
        tree = on_shell_pair_width(root_s, W_MASS, 2.0) + on_shell_pair_width(root_s, Z_MASS, 1.0)
        if root_s > 2.0 * TOP_MASS:
            beta = math.sqrt(1.0 - 4.0 * (TOP_MASS / root_s) ** 2)
            tree += 3.0 * FERMI_CONSTANT * root_s * TOP_MASS**2 * beta**3 / (4.0 * math.sqrt(2.0) * math.pi)
        assert total_width(root_s, table) == pytest.approx(tree, rel=2e-3)


def test_channels_add_up_and_open_at_their_thresholds() -> None:
    table = higgs_width_table()
    for root_s in np.geomspace(4.0, 3000.0, 57).tolist():
        widths = higgs_partial_widths(root_s)
        assert tuple(widths) == HIGGS_CHANNELS
        assert sum(widths.values()) == pytest.approx(total_width(root_s, table), rel=1e-9)
        assert (widths["bb"] > 0.0) == (root_s > 2.0 * BOTTOM_POLE_MASS)
        assert (widths["tt"] > 0.0) == (root_s > 2.0 * TOP_MASS)
    assert higgs_width_on_shell() == pytest.approx(total_width(HIGGS_MASS, table), rel=1e-12)


def test_equivalence_theorem() -> None:
    """Far above threshold the W to Z ratio is 2: the Goldstone bosons share one coupling."""
    widths = higgs_partial_widths(1e5)
    assert widths["WW"] / widths["ZZ"] == pytest.approx(2.0, rel=1e-4)


def test_running() -> None:
    """Values of the literature, from memory: alpha_s(m_tau) near 0.32, alpha_s(m_b) = 0.2268, m_b(m_h) = 2.79 GeV,
    m_b(M_Z) = 2.85(3) GeV, m_c(m_h) = 0.612 GeV, m_c(3 GeV) = 0.986(13) GeV.
    """
    strong = alpha_s(np.array([1.777, 4.18, 91.1876]))
    assert strong[0] == pytest.approx(0.32, rel=0.03)
    assert strong[1] == pytest.approx(0.2268, rel=0.02)
    assert strong[2] == pytest.approx(0.1179, rel=1e-9)
    bottom, charm = running_masses(np.array([125.0, 91.1876, 4.18, 3.0]))
    assert bottom[0] == pytest.approx(2.79, rel=0.005)
    assert bottom[1] == pytest.approx(2.85, abs=0.03)
    assert bottom[2] == pytest.approx(4.18, rel=1e-9)
    assert charm[0] == pytest.approx(0.612, rel=0.02)
    assert charm[3] == pytest.approx(0.986, abs=0.02)


def test_running_is_independent_of_the_order_of_scales() -> None:
    scales = np.array([91.1876, 3.0, 250.0, 4.18, 10.0])
    together = alpha_s(scales)
    alone = [float(alpha_s(np.array([scale]))[0]) for scale in scales]
    np.testing.assert_allclose(together, alone, rtol=1e-8)


def test_lowest_virtuality() -> None:
    with pytest.raises(ValueError, match="at least 4 GeV"):
        higgs_partial_widths(3.9)
    with pytest.raises(ValueError, match="at least 4 GeV"):
        higgs_partial_widths(math.nan)
