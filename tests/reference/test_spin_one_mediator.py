"""The spin-one mediator against spin sums with explicit Dirac matrices and against published formulas."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import PointError
from scanfit.likelihoods.candidate import Candidate
from scanfit.likelihoods.constants import BOTTOM_MASS, GEV_M2_TO_CM3_S, TOP_MASS
from scanfit.likelihoods.models.spin_one_annihilation import mediator_pairs
from scanfit.likelihoods.models.spin_one_mediator import SpinOneMediatorModel

Coupling = Literal["vector", "axial"]
AXIAL_CHARGES = {"delta_u": 0.84, "delta_d": -0.43, "delta_s": -0.09}


def predict(coupling: Coupling, mediator_mass: float, mass: float, **changes: Any) -> Candidate:
    values = {"g_quark": 0.25, "g_dark": 1.0, "g_lepton": 0.0, **AXIAL_CHARGES, **changes}
    model = SpinOneMediatorModel(SpinOneMediatorModel.Options(coupling=coupling), BuildContext(Path()))
    return model.predict({"mass": mass, "mediator_mass": mediator_mass, **values})


# ---- Spin sums with explicit matrices in the Dirac representation -------------------------------------------------

METRIC = np.diag([1.0, -1.0, -1.0, -1.0])
PAULI = np.array([[[0, 1], [1, 0]], [[0, -1j], [1j, 0]], [[1, 0], [0, -1]]])
GAMMA = np.array(
    [np.kron(np.diag([1, -1]), np.eye(2))] + [np.kron(np.array([[0, 1], [-1, 0]]), sigma) for sigma in PAULI]
)
GAMMA5 = 1j * GAMMA[0] @ GAMMA[1] @ GAMMA[2] @ GAMMA[3]


def slash(momentum: np.ndarray) -> np.ndarray:
    return np.einsum("m,mab->ab", METRIC @ momentum, GAMMA)


def vertices(axial: bool) -> np.ndarray:
    return GAMMA @ GAMMA5 if axial else GAMMA


def bar(matrices: np.ndarray) -> np.ndarray:
    return GAMMA[0] @ np.conj(np.swapaxes(matrices, -1, -2)) @ GAMMA[0]


def momenta(s: float, incoming: float, outgoing: float, cosine: float) -> tuple[np.ndarray, ...]:
    energy = 0.5 * math.sqrt(s)
    p, k = math.sqrt(energy**2 - incoming**2), math.sqrt(energy**2 - outgoing**2)
    direction = k * np.array([math.sqrt(1.0 - cosine**2), 0.0, cosine])
    return (
        np.array([energy, 0.0, 0.0, p]), np.array([energy, 0.0, 0.0, -p]),
        np.array([energy, *direction]), np.array([energy, *-direction]),
    )  # fmt: skip


def fermion_pair_matrix_element(
    s: float, cosine: float, dark: float, fermion: float, mediator: float, width: float, axial: bool
) -> float:
    """Sum over spins of |M|^2 for unit couplings, massive propagator in the unitary gauge."""
    p1, p2, k1, k2 = momenta(s, dark, fermion, cosine)
    vertex, one = vertices(axial), np.eye(4)
    incoming = np.einsum(
        "ab,mbc,cd,nda->mn", slash(p2) - dark * one, vertex, slash(p1) + dark * one, bar(vertex), optimize=True
    )
    outgoing = np.einsum(
        "ab,mbc,cd,nda->mn", slash(k1) + fermion * one, vertex, slash(k2) - fermion * one, bar(vertex), optimize=True
    )
    q = METRIC @ (p1 + p2)
    propagator = -METRIC + np.outer(q, q) / mediator**2
    summed = np.einsum("mn,mr,nt,rt->", incoming, propagator, propagator, outgoing).real
    return float(summed / ((s - mediator**2) ** 2 + (mediator * width) ** 2))


def mediator_pair_matrix_element(s: float, cosine: float, dark: float, mediator: float, axial: bool) -> float:
    """Sum over spins and polarisations of |M|^2 for unit coupling, t- and u-channel."""
    p1, p2, k1, k2 = momenta(s, dark, mediator, cosine)
    vertex, one = vertices(axial), np.eye(4)

    def exchanged(momentum: np.ndarray) -> np.ndarray:
        return (slash(momentum) + dark * one) / (momentum @ METRIC @ momentum - dark**2)

    amplitude = np.einsum("nab,bc,mcd->mnad", vertex, exchanged(p1 - k1), vertex) + np.einsum(
        "mab,bc,ncd->mnad", vertex, exchanged(p1 - k2), vertex
    )
    first, second = (-METRIC + np.outer(METRIC @ k, METRIC @ k) / mediator**2 for k in (k1, k2))
    summed = np.einsum(
        "mr,nt,ab,mnbc,cd,rtda->", first, second, slash(p2) - dark * one, amplitude, slash(p1) + dark * one,
        bar(amplitude), optimize=True,
    )  # fmt: skip
    return float(summed.real)


def sigma_v(s: float, outgoing: float, average_matrix_element: float) -> float:
    """sigma v_rel = beta_f <|M|^2>/(8 pi s), averaged over four spin states and angles (two-body phase space)."""
    return math.sqrt(1.0 - 4.0 * outgoing**2 / s) * average_matrix_element / 4.0 / (8.0 * math.pi * s)


COSINES, WEIGHTS = np.polynomial.legendre.leggauss(40)


@pytest.mark.parametrize("coupling", ["vector", "axial"])
@pytest.mark.parametrize(
    ("mass", "mediator_mass", "root_s"),
    [(100.0, 1000.0, 230.0), (300.0, 900.0, 899.0), (200.0, 250.0, 401.0), (300.0, 1500.0, 2000.0)],
)
def test_fermion_pairs_from_explicit_traces(
    coupling: Coupling, mass: float, mediator_mass: float, root_s: float
) -> None:
    candidate = predict(coupling, mediator_mass, mass, g_quark=0.3, g_dark=0.8, g_lepton=0.1)
    assert candidate.mediator is not None
    s = root_s**2
    rates = dict(zip(candidate.annihilation.channels, candidate.annihilation.sigma_v(np.array([s]))[:, 0], strict=True))
    for channel, fermion, strength in (
        ("bb", BOTTOM_MASS, 3.0 * (0.8 * 0.3) ** 2),
        ("tt", TOP_MASS, 3.0 * (0.8 * 0.3) ** 2),
        ("tautau", 1.77686, (0.8 * 0.1) ** 2),
        ("nunu", 0.0, 1.5 * (0.8 * 0.1) ** 2),
    ):
        if root_s < 2.0 * fermion:
            assert rates[channel] == 0.0
            continue
        elements = [
            fermion_pair_matrix_element(
                s, cosine, mass, fermion, mediator_mass, candidate.mediator.width, coupling == "axial"
            )
            for cosine in COSINES
        ]
        expected = strength * sigma_v(s, fermion, 0.5 * float(WEIGHTS @ elements))
        assert rates[channel] == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("axial", [False, True])
@pytest.mark.parametrize(
    ("mass", "mediator_mass", "root_s"),
    [(100.0, 30.0, 230.0), (100.0, 95.0, 200.1), (50.0, 80.0, 200.0), (300.0, 100.0, 2000.0), (10.0, 9.0, 20.02)],
)
def test_mediator_pairs_from_explicit_traces(axial: bool, mass: float, mediator_mass: float, root_s: float) -> None:
    """Two identical bosons: half the phase space."""
    cosines, weights = np.polynomial.legendre.leggauss(80)
    elements = [mediator_pair_matrix_element(root_s**2, cosine, mass, mediator_mass, axial) for cosine in cosines]
    expected = 0.5 * 0.7**4 * sigma_v(root_s**2, mediator_mass, 0.5 * float(weights @ elements))
    assert mediator_pairs(root_s**2, mass, mediator_mass, 0.7, axial) == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize("axial", [False, True])
def test_mediator_pairs_at_rest(axial: bool) -> None:
    """pi alpha^2/m^2 (1 - r)^(3/2)/(1 - r/2)^2 with r = M^2/m^2 (arXiv:1510.02110 and others, from memory)."""
    mass, g = 100.0, 0.6
    alpha = g**2 / (4.0 * math.pi)
    for mediator_mass in (20.0, 70.0, 99.0):
        r = (mediator_mass / mass) ** 2
        expected = math.pi * alpha**2 / mass**2 * (1.0 - r) ** 1.5 / (1.0 - 0.5 * r) ** 2
        at_rest = mediator_pairs(4.0 * mass**2 * (1.0 + 1e-10), mass, mediator_mass, g, axial)
        assert at_rest == pytest.approx(expected, rel=1e-5)


def test_massless_vector_pairs_are_two_photon_annihilation() -> None:
    """Dirac's formula for e+ e- -> 2 gamma (textbook) with the Lorentz factor of one in the rest frame of the other."""
    mass, g = 1.0, 0.3
    alpha = g**2 / (4.0 * math.pi)
    for lorentz in (1.01, 1.5, 4.0):
        s = 2.0 * mass**2 * (1.0 + lorentz)
        root = math.sqrt(lorentz**2 - 1.0)
        sigma = math.pi * alpha**2 / (mass**2 * (1.0 + lorentz)) * (
            (lorentz**2 + 4.0 * lorentz + 1.0) / (lorentz**2 - 1.0) * math.log(lorentz + root) - (lorentz + 3.0) / root
        )  # fmt: skip
        v_rel = 2.0 * math.sqrt(1.0 - 4.0 * mass**2 / s)
        assert mediator_pairs(s, mass, 1e-5, g, False) == pytest.approx(sigma * v_rel, rel=1e-6)


def test_massless_limit_is_muon_pair_production() -> None:
    """4 pi alpha^2/(3 s) (textbook) for unit charges far above all masses and the mediator pole."""
    candidate = predict("vector", 1.0, 1.0, g_quark=0.0, g_dark=0.1, g_lepton=0.1)
    s = np.array([1e8])
    muons = candidate.annihilation.sigma_v(s)[candidate.annihilation.channels.index("mumu"), 0]
    pairs = mediator_pairs(1e8, 1.0, 1.0, 0.1, False)
    # A mediator of 1 GeV decays into e, mu and 3/2 neutrinos: the muons' share of its pairs comes off again.
    muons -= pairs / 3.5
    alpha = 0.01 / (4.0 * math.pi)
    assert muons / 2.0 == pytest.approx(4.0 * math.pi * alpha**2 / 3e8, rel=2e-3)


def test_annihilation_today() -> None:
    """Independent computation: vector (M, m) = (1000, 100) GeV 3.767e-26, axial (1000, 300) 8.47e-27 cm^3/s."""
    assert predict("vector", 1000.0, 100.0).sigma_v_today == pytest.approx(3.767e-26, rel=1e-3)
    assert predict("axial", 1000.0, 300.0).sigma_v_today == pytest.approx(8.47e-27, rel=1e-3)


def test_axial_s_wave_vanishes_on_resonance() -> None:
    """At s = M^2 the longitudinal part, which alone makes the s-wave, is gone."""
    for mass, suppression in ((499.99, 1e-6), (450.0, None)):
        candidate = predict("axial", 1000.0, mass)
        assert candidate.mediator is not None
        beta = math.sqrt(1.0 - (TOP_MASS / mass) ** 2)
        pole = (4.0 * mass**2 - 1e6) ** 2 + (1000.0 * candidate.mediator.width) ** 2
        s_wave = 3.0 * 0.0625 * TOP_MASS**2 * beta / (2.0 * math.pi * pole) * GEV_M2_TO_CM3_S
        factor = (1.0 - 4.0 * mass**2 / 1e6) ** 2
        tt = candidate.sigma_v_channels[candidate.annihilation.channels.index("tt")]
        if suppression is None:
            assert tt == pytest.approx(s_wave * factor, rel=1e-3)
        else:
            assert tt < suppression * s_wave


@pytest.mark.parametrize(
    ("coupling", "mediator_mass", "mass", "omega_h2"),
    [("vector", 1000.0, 100.0, 0.1383), ("axial", 1000.0, 300.0, 0.1914)],
)
def test_relic_abundance(coupling: Coupling, mediator_mass: float, mass: float, omega_h2: float) -> None:
    """Independent computation with an adaptive integration of the Boltzmann equation."""
    assert predict(coupling, mediator_mass, mass).omega_h2 == pytest.approx(omega_h2, rel=5e-3)


def test_vector_scattering() -> None:
    """arXiv:1603.04156, from memory: 6.9e-41 cm^2 (g_dark g_quark/.25)^2 (1 TeV/M)^4 (mu/GeV)^2; computed: 6.97e-41."""
    sections = predict("vector", 1000.0, 1e5).nucleon_cross_sections()
    mu = 1e5 * 0.93827209 / (1e5 + 0.93827209)
    assert sections["sigma_si_proton"] == pytest.approx(6.97e-41 * mu**2, rel=1e-3)
    assert sections["sigma_si_proton"] == pytest.approx(6.9e-41 * mu**2, rel=0.015)
    assert sections["sigma_sd_proton"] == 0.0
    assert sections["sigma_si_neutron"] == pytest.approx(sections["sigma_si_proton"], rel=5e-3)


def test_axial_scattering() -> None:
    """arXiv:1603.04156, from memory: 2.4e-42 cm^2 with the same scaling and axial charges that sum to 0.32."""
    sections = predict("axial", 1000.0, 1e5).nucleon_cross_sections()
    mu = 1e5 * 0.93956542 / (1e5 + 0.93956542)
    assert sections["sigma_sd_neutron"] == pytest.approx(2.4e-42 * mu**2, rel=0.01)
    assert sections["sigma_si_neutron"] == 0.0
    doubled = predict("axial", 1000.0, 1e5, delta_u=1.16).nucleon_cross_sections()
    assert doubled["sigma_sd_neutron"] == pytest.approx(4.0 * sections["sigma_sd_neutron"], rel=1e-12)


def test_axial_charges_are_nuisances_of_the_axial_model_alone() -> None:
    names = {
        coupling: [
            parameter.name
            for parameter in SpinOneMediatorModel(
                SpinOneMediatorModel.Options(coupling=coupling), BuildContext(Path())
            ).parameters
        ]
        for coupling in ("vector", "axial")
    }
    assert names["vector"] == ["mass", "mediator_mass", "g_quark", "g_dark", "g_lepton", "equation_of_state_shift"]
    assert names["axial"] == [*names["vector"], *AXIAL_CHARGES]


@pytest.mark.parametrize("coupling", ["vector", "axial"])
@pytest.mark.parametrize("mediator_mass", [1.5, 30.0, 199.0, 1000.0])
def test_channels_add_up(coupling: Coupling, mediator_mass: float) -> None:
    annihilation = predict(coupling, mediator_mass, 100.0, g_lepton=0.1).annihilation
    s = 4e4 * (1.0 + np.geomspace(1e-9, 1e3, 200))
    by_channel, total = annihilation.sigma_v(s), annihilation.total(s)
    assert by_channel.shape == (len(annihilation.channels), 200)
    assert np.all(by_channel >= 0.0)
    np.testing.assert_allclose(by_channel.sum(axis=0), total, rtol=1e-12)
    assert np.isfinite(annihilation.total(np.array([4e4])))[0]


def test_own_quantities() -> None:
    """Benchmark of arXiv:1603.04156 at M = 1 TeV, m = 1 GeV (computed independently), and neutrinos as invisible."""
    own = predict("vector", 1000.0, 1.0).own_quantities
    assert own["mediator_width_ratio"] == pytest.approx(0.05634, rel=1e-3)
    assert own["branching_invisible"] == pytest.approx(0.4708, rel=1e-3)
    leptonic = predict("vector", 100.0, 1e3, g_quark=0.0, g_lepton=0.1).own_quantities
    assert leptonic["branching_invisible"] == pytest.approx(1.5 / 4.5, rel=1e-3)


@pytest.mark.parametrize(
    ("flag", "quiet", "raised"),
    [
        ("strong_coupling", {"g_dark": 3.5}, {"g_dark": 3.6}),
        ("broad_mediator", {"g_quark": 0.7}, {"g_quark": 1.6}),
        ("axial_unitarity", {"mass": 1250.0}, {"mass": 1260.0}),
        ("mediator_pairs", {"mass": 999.0}, {"mass": 2000.0}),
        ("long_range_force", {"mass": 1.2e4}, {"mass": 1.3e4}),
        ("hadronic_regime", {"mass": 1.1}, {"mass": 0.9}),
    ],
)
def test_flags(flag: str, quiet: dict[str, float], raised: dict[str, float]) -> None:
    base = {"mass": 100.0, "mediator_mass": 1000.0}
    assert not predict("axial", **{**base, **quiet}).own_flags[flag]  # type: ignore[arg-type]
    assert predict("axial", **{**base, **raised}).own_flags[flag]  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "values",
    [{"mass": 0.0}, {"mediator_mass": -1.0}, {"g_dark": 0.0}, {"g_quark": 0.0}, {"mediator_mass": 0.004}],
)
def test_points_without_meaning(values: dict[str, float]) -> None:
    with pytest.raises(PointError):
        predict("vector", **{"mass": 100.0, "mediator_mass": 1000.0, **values})  # type: ignore[arg-type]
