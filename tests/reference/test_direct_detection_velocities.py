"""Suppressed interactions, seasons, tabulated velocities and quenching, against direct integration."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.candidate import NucleonCouplings, SuppressedCouplings
from scanfit.likelihoods.constants import SPEED_OF_LIGHT_KM_S
from scanfit.likelihoods.direct_detection.experiment import Experiment
from scanfit.likelihoods.direct_detection.folding import fold
from scanfit.likelihoods.direct_detection.halo import Halo, earth_speed, earth_speed_excess
from scanfit.likelihoods.direct_detection.isotopes import Isotope
from scanfit.likelihoods.direct_detection.spectrum import differential_rate
from scanfit.likelihoods.direct_detection.term import DirectDetection
from scanfit.likelihoods.direct_detection.velocity_table import velocity_table

DEMO = Path(__file__).parents[2] / "runs" / "demo"
HALO = Halo()


def detector(**changes: object) -> Experiment:
    table: dict[str, object] = {
        "title": "a detector",
        "source": "none",
        "exposure_tonne_year": 1.0,
        "target": {"Xe": 1.0},
        "efficiency": {"energy_kev": (1.0, 60.0), "value": (0.2, 0.9)},
        "resolution": {"noise_kev": 0.4, "stochastic": 0.2},
        "bins": {"intervals_kev": ((4.0, 10.0), (10.0, 40.0)), "background": (0.0, 0.0), "observed": (0, 0)},
    }
    return Experiment.model_validate(table | changes)


def speed_density(halo: Halo, speeds: np.ndarray) -> np.ndarray:
    """Distribution of speeds at the Earth by integrating the truncated Maxwellian over directions, unnormalised."""
    v0, cut, earth = halo.most_probable_speed, halo.escape_speed, halo.earth_speed
    # d cos = x ranges where v^2 + vE^2 + 2 v vE x < vesc^2
    last = np.clip((cut**2 - speeds**2 - earth**2) / (2.0 * np.maximum(speeds, 1e-9) * earth), -1.0, 1.0)
    a = 2.0 * speeds * earth / v0**2
    outer = np.exp(-((speeds - earth) ** 2) / v0**2) - np.exp(-(speeds**2 + earth**2) / v0**2 - a * last)
    return np.where(a > 0.0, speeds**2 * outer / np.maximum(a, 1e-300), 0.0)


@pytest.mark.parametrize(
    "halo", [HALO, Halo(0.3, 220.0, 544.0, 232.0), Halo(0.3, 180.0, 250.0, 300.0)], ids=["standard", "older", "fast"]
)
def test_transverse_velocity_integral(halo: Halo) -> None:
    # int (v^2 - vmin^2) f(v)/v dv over the speed distribution, normalised numerically.
    end, middle = halo.escape_speed + halo.earth_speed, abs(halo.escape_speed - halo.earth_speed)
    everything = np.linspace(0.0, end, 200001)
    norm = np.trapezoid(speed_density(halo, everything), everything)
    for minimum in (1.0, 0.5 * middle, 1.3 * middle, 0.9 * end):
        speeds = np.linspace(minimum, end, 200001)
        expected = np.trapezoid(speed_density(halo, speeds) * (speeds**2 - minimum**2) / speeds, speeds) / norm
        assert halo.mean_transverse_speed(np.array([minimum]))[0] == pytest.approx(expected, rel=1e-6)


SUPPRESSED = {
    "f q": (SuppressedCouplings(f_momentum_proton=1e-8, f_momentum_neutron=2e-8), NucleonCouplings(1e-8, 2e-8), 1),
    "a q": (SuppressedCouplings(a_momentum_neutron=1e-5), NucleonCouplings(a_neutron=1e-5), 1),
    "a q^2": (
        SuppressedCouplings(a_momentum_squared_proton=1e-4, a_momentum_squared_neutron=-2e-4),
        NucleonCouplings(a_proton=1e-4, a_neutron=-2e-4),
        2,
    ),
}


@pytest.mark.parametrize(("suppressed", "plain", "power"), SUPPRESSED.values(), ids=SUPPRESSED)
def test_momentum_suppression_multiplies_the_spectrum(
    suppressed: SuppressedCouplings, plain: NucleonCouplings, power: int
) -> None:
    isotope, energy = Isotope("Xe", 129), np.array([3.0, 10.0, 30.0])
    found = differential_rate(energy, 60.0, NucleonCouplings(suppressed=suppressed), HALO, {"Xe-129": 1.0})
    square = 2.0 * isotope.mass * energy * 1e-6  # GeV^2
    expected = differential_rate(energy, 60.0, plain, HALO, {"Xe-129": 1.0}) * square**power
    np.testing.assert_allclose(found, expected, rtol=1e-12)


def test_velocity_suppression() -> None:
    # d sigma is constant in v for a contact interaction, so v_perp^2/c^2 goes under the integral of f/v.
    energy, mass = np.array([5.0]), 60.0
    suppressed = SuppressedCouplings(f_velocity_proton=1e-6, f_velocity_neutron=1e-6)
    found = differential_rate(energy, mass, NucleonCouplings(suppressed=suppressed), HALO, {"Xe-131": 1.0})[0]
    plain = differential_rate(energy, mass, NucleonCouplings(1e-6, 1e-6), HALO, {"Xe-131": 1.0})[0]
    nuclear = Isotope("Xe", 131).mass
    minimum = SPEED_OF_LIGHT_KM_S * math.sqrt(nuclear * 5e-6 / 2.0) * (mass + nuclear) / (mass * nuclear)
    speeds = np.linspace(minimum, 796.0, 40001)
    density = speed_density(HALO, speeds) / speeds
    average = np.trapezoid(density * (speeds**2 - minimum**2), speeds) / np.trapezoid(density, speeds)
    assert found / plain == pytest.approx(average / SPEED_OF_LIGHT_KM_S**2, rel=1e-5)


@pytest.mark.parametrize(
    "suppressed",
    [
        SuppressedCouplings(f_momentum_proton=1e-8, f_momentum_neutron=2e-8),
        SuppressedCouplings(f_velocity_proton=1e-6, f_velocity_neutron=-1e-6),
        SuppressedCouplings(a_momentum_neutron=1e-5, a_velocity_neutron=3e-3),
        SuppressedCouplings(a_momentum_squared_proton=1e-3, a_momentum_squared_neutron=2e-3),
    ],
)
def test_suppressed_counts_are_the_folded_spectrum(suppressed: SuppressedCouplings) -> None:
    nucleon = NucleonCouplings(suppressed=suppressed)
    flat = detector(resolution={}, efficiency={"energy_kev": (1.0, 60.0), "value": (1.0, 1.0)})
    found = fold(flat).counts(60.0, nucleon, HALO)
    for index, (low, high) in enumerate(flat.intervals_kev):
        energy = np.linspace(low, high, 8001)
        expected = np.trapezoid(differential_rate(energy, 60.0, nucleon, HALO, {"Xe": 1.0}), energy)
        assert expected > 0.0
        assert found[index] == pytest.approx(expected, rel=1e-4)


def test_suppressed_adds_to_plain() -> None:
    response = fold(detector())
    suppressed = SuppressedCouplings(f_momentum_proton=1e-8, a_velocity_neutron=1e-3)
    plain = NucleonCouplings(1e-9, 1e-9, 0.0, 1e-6)
    both = NucleonCouplings(1e-9, 1e-9, 0.0, 1e-6, suppressed)
    parts = response.counts(60.0, plain, HALO) + response.counts(60.0, NucleonCouplings(suppressed=suppressed), HALO)
    np.testing.assert_allclose(response.counts(60.0, both, HALO), parts, rtol=1e-12)


# Seasons


def test_earth_through_the_year() -> None:
    # Computed independently from the velocities of arXiv:2105.00599: mean 252.1, lowest 237.4, highest 266.4 km/s.
    speeds = earth_speed(np.linspace(0.0, 365.25, 5000))
    assert speeds.mean() == pytest.approx(252.1, abs=0.1)
    assert speeds.min() == pytest.approx(237.4, abs=0.15)
    assert speeds.max() == pytest.approx(266.4, abs=0.15)
    # The maximum falls on 2 June, day 152.5 (common practice for the standard halo).
    assert 365.25 * np.argmax(speeds) / 5000 == pytest.approx(152.0, abs=3.0)


def test_days_of_data_taking_move_the_rate() -> None:
    summer, winter = (detector(observing_days=days) for days in ((122, 182), (335, 365)))
    assert summer.extra_earth_speed() == pytest.approx(earth_speed_excess(122, 182))
    assert summer.extra_earth_speed() > 11.0
    assert winter.extra_earth_speed() < -10.0
    assert detector(observing_days=(1, 365)).extra_earth_speed() == pytest.approx(0.0, abs=0.1)
    # A wrap over New Year is winter too.
    assert earth_speed_excess(320, 20) < -11.0
    nucleon = NucleonCouplings(1e-9, 1e-9)
    mean, hot, cold = (fold(e).counts(30.0, nucleon, HALO).sum() for e in (detector(), summer, winter))
    assert cold < mean < hot
    # Day by day against the mean speed: the rate is straight enough.
    days = np.arange(122, 183)
    daily = [
        fold(detector()).counts(30.0, nucleon, Halo(earth_speed=252.0 + float(extra))).sum()
        for extra in (earth_speed(days) - earth_speed(np.linspace(0.0, 365.25, 1000)).mean())[::10]
    ]
    assert np.mean(daily) == pytest.approx(hot, rel=5e-3)


# Tabulated velocities


def test_table_of_the_maxwellian_is_the_maxwellian() -> None:
    speeds = np.linspace(0.0, 796.0, 1600)
    table = velocity_table(speeds, speed_density(HALO, speeds))
    nucleon = NucleonCouplings(1e-9, 1e-9, 0.0, 1e-6, SuppressedCouplings(f_velocity_proton=1e-5))
    for mass in (12.0, 60.0, 600.0):
        closed = fold(detector()).counts(mass, nucleon, HALO)
        np.testing.assert_allclose(fold(detector(), velocities=table).counts(mass, nucleon, HALO), closed, rtol=2e-4)


def test_a_stream_has_one_speed() -> None:
    # All particles at v: eta is 1/v up to v and zero beyond.
    table = velocity_table(np.array([299.9, 300.0, 300.1]), np.array([0.0, 1.0, 0.0]))
    grid = np.arange(table.integrals.shape[1]) * table.step
    np.testing.assert_allclose(table.integrals[0][grid < 299.8], 1.0 / 300.0, rtol=1e-4)
    np.testing.assert_allclose(table.integrals[1][grid < 299.0], 300.0 - grid[grid < 299.0] ** 2 / 300.0, rtol=2e-2)


def test_term_with_a_table(tmp_path: Path) -> None:
    speeds = np.linspace(0.0, 796.0, 800)
    lines = [f"{v:.6g}, {d:.6e}" for v, d in zip(speeds, speed_density(HALO, speeds), strict=True)]
    (tmp_path / "speeds.csv").write_text("speed,density\n" + "\n".join(lines), encoding="utf-8")
    (tmp_path / "x.toml").write_text((DEMO / "corrie_xenon.toml").read_text(encoding="utf-8"), encoding="utf-8")
    options = DirectDetection.Options(data="x.toml", velocities="speeds.csv")
    term = DirectDetection(options, BuildContext(tmp_path))
    assert [parameter.name for parameter in term.nuisances] == ["local_density"]
    assert len(term.data_files) == 2
    (tmp_path / "speeds.csv").write_text("10, 1\n5, 1\n", encoding="utf-8")
    with pytest.raises(InputError, match="speeds must ascend"):
        DirectDetection(options, BuildContext(tmp_path))


# Quenching


def test_lindhard_factor() -> None:
    # Formula of Astropart. Phys. 6 (1996) 87 at 10 keV in germanium with k = 0.157, written out once more (from
    # memory). Measured values lie near 0.25 there (common practice).
    factor = detector(
        target={"Ge": 1.0}, quenching={"lindhard_k": 0.157},
        bins={"intervals_kev": ((2.0, 10.0),), "background": (0.0,), "observed": (0,)},
    ).visible_energy(np.array([10.0]))[0] / 10.0  # fmt: skip
    scaled = 11.5 * 32.0 ** (-7.0 / 3.0) * 10.0
    g = 3.0 * scaled**0.15 + 0.7 * scaled**0.6 + scaled
    assert factor == pytest.approx(0.157 * g / (1.0 + 0.157 * g), rel=1e-12)
    assert factor == pytest.approx(0.25, abs=0.03)


def test_constant_quenching_rescales_the_bins() -> None:
    quenched = detector(
        quenching={"energy_kev": (0.5, 100.0), "factor": (0.25, 0.25)}, resolution={},
        bins={"intervals_kev": ((1.0, 2.5), (2.5, 10.0)), "background": (0.0, 0.0), "observed": (0, 0)},
    )  # fmt: skip
    nucleon = NucleonCouplings(1e-9, 1e-9)
    plain = fold(detector(resolution={})).counts(50.0, nucleon, HALO)
    np.testing.assert_allclose(fold(quenched).counts(50.0, nucleon, HALO), plain, rtol=1e-5)


def test_true_energy_inverts_visible_energy() -> None:
    experiment = detector(
        target={"Ge": 1.0}, quenching={"lindhard_k": 0.157},
        bins={"intervals_kev": ((2.0, 10.0),), "background": (0.0,), "observed": (0,)},
    )  # fmt: skip
    energy = np.array([0.3, 2.0, 17.0, 55.0])
    np.testing.assert_allclose(experiment.true_energy(experiment.visible_energy(energy)), energy, rtol=1e-12)
