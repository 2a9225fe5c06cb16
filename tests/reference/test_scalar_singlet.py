"""The scalar singlet against published formulas and fits and against independent computations."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import brentq

from scanfit.contracts import BuildContext
from scanfit.errors import PointError
from scanfit.likelihoods.candidate import Candidate
from scanfit.likelihoods.constants import GEV_M2_TO_CM3_S, HIGGS_MASS, HIGGS_VEV
from scanfit.likelihoods.higgs_width import higgs_width_on_shell
from scanfit.likelihoods.models.higgs_portal_annihilation import higgs_pairs
from scanfit.likelihoods.models.scalar_singlet import ScalarSinglet, higgs_to_singlets_width


def predict(mass: float, portal: float, coupling: float = 0.30) -> Candidate:
    model = ScalarSinglet(ScalarSinglet.Options(), BuildContext(Path()))
    return model.predict({"mass": mass, "portal": portal, "higgs_nucleon_coupling": coupling})


# mass, portal that gives Omega h^2 = 0.12, sigma_SI in cm^2 at f_N = 0.30, BR(h -> SS), sigma v at rest in cm^3/s:
# an independent computation with m_h = 125.25 GeV and a simpler Higgs width.
RELIC_LINE = [
    (50.0, 0.1132, 4.35e-44, 0.902, 1.37e-26),
    (55.0, 6.66e-3, 1.25e-46, 0.025, 1.25e-28),
    (60.0, 6.90e-4, 1.13e-48, 1.6e-4, 1.2e-29),
    (62.0, 2.75e-4, 1.68e-49, 1.3e-5, 3.4e-29),
    (65.0, 0.0318, 2.05e-45, 0.0, 3.6e-26),
    (100.0, 0.0366, 1.16e-45, 0.0, 2.2e-26),
    (200.0, 0.0589, 7.6e-46, 0.0, 2.2e-26),
    (500.0, 0.1512, 8.0e-46, 0.0, 2.3e-26),
    (1000.0, 0.3085, 8.4e-46, 0.0, 2.2e-26),
    (3000.0, 0.9204, 8.3e-46, 0.0, 2.2e-26),
]


@pytest.mark.parametrize(("mass", "portal", "sigma_si", "branching", "sigma_v"), RELIC_LINE)
def test_relic_line(mass: float, portal: float, sigma_si: float, branching: float, sigma_v: float) -> None:
    candidate = predict(mass, portal)
    assert candidate.nucleon_cross_sections()["sigma_si_proton"] == pytest.approx(sigma_si, rel=0.01)
    assert candidate.own_quantities["branching_higgs_invisible"] == pytest.approx(branching, rel=0.05)
    assert candidate.sigma_v_today == pytest.approx(sigma_v, rel=0.035)
    assert candidate.omega_h2 == pytest.approx(0.12, rel=0.015)


@pytest.mark.parametrize("mass", [200.0, 400.0, 700.0, 1000.0])
def test_published_relic_line_at_large_mass(mass: float) -> None:
    """log10 lambda = -3.63 + 1.04 log10(m_S/GeV) (arXiv:1210.4196, from memory); three digits allow 1 to 2 %.

    Freeze-out, thermal average, Higgs pairs and all conversions at once.
    """
    published = 10.0 ** (-3.63 + 1.04 * math.log10(mass))

    def excess(log_portal: float) -> float:
        return math.log(predict(mass, math.exp(log_portal)).omega_h2 / 0.12)

    portal = math.exp(brentq(excess, math.log(0.5 * published), math.log(2.0 * published), xtol=1e-4))
    assert portal == pytest.approx(published, rel=0.02)


def test_heavy_limit() -> None:
    """lambda^2/(16 pi m^2), four Goldstone degrees of freedom; W : Z : h = 2 : 1 : 1."""
    mass, portal = 1e5, 0.01
    candidate = predict(mass, portal)
    assert candidate.sigma_v_today == pytest.approx(portal**2 / (16.0 * math.pi * mass**2) * GEV_M2_TO_CM3_S, rel=1e-3)
    shares = dict(
        zip(candidate.annihilation.channels, candidate.sigma_v_channels / candidate.sigma_v_today, strict=True)
    )
    assert shares["WW"] == pytest.approx(0.5, rel=1e-3)
    assert shares["ZZ"] == pytest.approx(0.25, rel=1e-3)
    assert shares["hh"] == pytest.approx(0.25, rel=1e-3)


@pytest.mark.parametrize(
    ("mass", "portal", "root_s"),
    [(200.0, 0.06, 400.001), (200.0, 3.0, 430.0), (80.0, 0.5, 300.0), (130.0, 1.0, 260.2), (1000.0, 2.0, 5000.0)],
)
def test_higgs_pairs_by_quadrature(mass: float, portal: float, root_s: float) -> None:
    """The tree amplitude with explicit t and u, integrated over the angle by a general-purpose integrator."""
    s = root_s**2
    p, k = math.sqrt(0.25 * s - mass**2), math.sqrt(0.25 * s - HIGGS_MASS**2)

    def squared(cosine: float) -> float:
        t = mass**2 + HIGGS_MASS**2 - 0.5 * s + 2.0 * p * k * cosine
        u = mass**2 + HIGGS_MASS**2 - 0.5 * s - 2.0 * p * k * cosine
        cubic = 3.0 * HIGGS_MASS**2 / (s - HIGGS_MASS**2)
        exchange = portal * HIGGS_VEV**2 * (1.0 / (t - mass**2) + 1.0 / (u - mass**2))
        return (portal * (1.0 + cubic + exchange)) ** 2

    # sigma v_rel = (1/2) (1/(2 E_1 2 E_2)) |k|/(4 pi sqrt(s)) <|M|^2>: two identical bosons, two-body phase space
    average = 0.5 * quad(squared, -1.0, 1.0, epsrel=1e-10)[0]
    expected = 0.5 / s * k / (4.0 * math.pi * root_s) * average
    assert higgs_pairs(s, mass, portal) == pytest.approx(expected, rel=1e-8)


def test_contact_and_exchange_interfere_destructively() -> None:
    """With all mass from the Higgs field, lambda v^2 = 2 m_S^2, a heavy pair at rest has M/lambda = 1 - 2 (by hand)."""
    mass = 2e4
    portal = 2.0 * mass**2 / HIGGS_VEV**2
    s = 4.0 * mass**2 * (1.0 + 1e-9)
    assert higgs_pairs(s, mass, portal) == pytest.approx(portal**2 / (16.0 * math.pi * s), rel=1e-3)


def test_invisible_width() -> None:
    """Largest portal for BR < 0.107 with Gamma_SM = 4.07 MeV: 0.01013 at 10 GeV to 0.0188 at 60 GeV (independent)."""
    for mass, portal in ((10.0, 0.01013), (40.0, 0.01147), (50.0, 0.01297), (60.0, 0.0188)):
        invisible = higgs_to_singlets_width(mass, portal)
        assert invisible / (invisible + 4.07e-3) == pytest.approx(0.107, rel=0.01)
        assert predict(mass, portal).higgs_invisible_width == invisible
    assert higgs_to_singlets_width(0.5 * HIGGS_MASS, 1.0) == 0.0


def test_resonance_is_the_narrow_width_formula() -> None:
    """On the pole sigma v_rel = 16 pi/(s beta) B_SS B_SM, for two identical spinless particles (Breit-Wigner)."""
    mass, portal = 62.0, 0.01
    candidate = predict(mass, portal)
    assert candidate.higgs_invisible_width is not None
    standard = higgs_width_on_shell()
    total = standard + candidate.higgs_invisible_width
    s = HIGGS_MASS**2
    beta = math.sqrt(1.0 - 4.0 * mass**2 / s)
    # sigma = 4 pi/p^2 B_in B_out, doubled for identical particles in the entrance channel; p = sqrt(s) beta/2.
    sigma = 2.0 * 4.0 * math.pi / (0.25 * s * beta**2) * candidate.higgs_invisible_width * standard / total**2
    assert candidate.annihilation.total(np.array([s]))[0] == pytest.approx(sigma * 2.0 * beta, rel=1e-4)
    assert candidate.annihilation.poles == ((HIGGS_MASS, pytest.approx(total)),)


def test_channels_add_up() -> None:
    for mass in (2.0, 20.0, 62.0, 140.0, 1000.0):
        annihilation = predict(mass, 0.1).annihilation
        s = 4.0 * mass**2 * (1.0 + np.geomspace(1e-9, 1e3, 300))
        by_channel, total = annihilation.sigma_v(s), annihilation.total(s)
        assert by_channel.shape == (len(annihilation.channels), 300)
        assert np.all(by_channel >= 0.0)
        np.testing.assert_allclose(by_channel.sum(axis=0), total, rtol=1e-9)
        assert np.isfinite(annihilation.total(np.array([4.0 * mass**2])))[0]


def test_w_pairs_open_below_threshold() -> None:
    """At 70 to 80 GeV, off-shell W pairs carry most of the rate (arXiv:1306.4710)."""
    for mass in (75.0, 79.0):
        candidate = predict(mass, 0.05)
        share = candidate.sigma_v_channels[candidate.annihilation.channels.index("WW")] / candidate.sigma_v_today
        assert share > 0.5


def test_sign_of_the_portal() -> None:
    """Only Higgs pairs know the sign."""
    plus, minus = predict(70.0, 0.2), predict(70.0, -0.2)
    np.testing.assert_allclose(plus.sigma_v_channels, minus.sigma_v_channels, rtol=1e-12)
    assert predict(300.0, -0.5).sigma_v_today > predict(300.0, 0.5).sigma_v_today


@pytest.mark.parametrize(
    ("flag", "quiet", "raised"),
    [
        ("strong_coupling", (1e4, 12.5), (1e4, -12.6)),
        ("negative_bare_mass", (100.0, 0.32), (100.0, 0.34)),
        ("hadronic_regime", (6.1, 0.01), (5.9, 0.01)),
    ],
)
def test_flags(flag: str, quiet: tuple[float, float], raised: tuple[float, float]) -> None:
    assert not predict(*quiet).own_flags[flag]
    assert predict(*raised).own_flags[flag]


def test_points_without_meaning() -> None:
    for mass, portal in ((1.9, 0.1), (100.0, 0.0), (math.nan, 0.1)):
        with pytest.raises(PointError):
            predict(mass, portal)


def test_default_prior_of_the_nucleon_coupling() -> None:
    """f_N = 0.308(18), arXiv:1708.02245."""
    nuisance = next(parameter for parameter in ScalarSinglet.parameters if parameter.kind == "nuisance")
    assert nuisance.prior is not None
    assert nuisance.prior.median == pytest.approx(0.308, rel=1e-9)
