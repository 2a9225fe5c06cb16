"""Coherent neutrino scattering against published and independently computed numbers."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad

from scanfit.contracts import BuildContext
from scanfit.likelihoods.candidate import Annihilation, Candidate, CosmologyOptions, NucleonCouplings
from scanfit.likelihoods.constants import FERMI_CONSTANT, GEV_M2_TO_CM2, SIN2_THETA_W_LOW
from scanfit.likelihoods.direct_detection.halo import Halo
from scanfit.likelihoods.direct_detection.isotopes import Isotope
from scanfit.likelihoods.direct_detection.neutrinos import boron8_density, neutrino_rate, weak_charge
from scanfit.likelihoods.direct_detection.sensitivity import FLOOR, couplings_of
from scanfit.likelihoods.direct_detection.spectrum import differential_rate
from scanfit.likelihoods.direct_detection.term import DirectDetection

VALUES = {"local_density": 0.3, "most_probable_speed": 238.0, "escape_speed": 544.0, "earth_speed": 252.0}
XENON = {"Xe": 1.0}


def events_above(threshold: float, sin2_weak: float = SIN2_THETA_W_LOW, end: float = 6.0) -> float:
    """Boron-8 events per tonne-year in xenon."""
    energy = np.geomspace(threshold, end, 8001)
    return float(np.trapezoid(neutrino_rate(energy, XENON, "boron-8", sin2_weak), energy))


def test_boron8_moments() -> None:
    # Phys. Rev. C 54 (1996) 411: mean 6.735 MeV, mean square 52.70 MeV^2 (of its table, computed independently).
    energy = np.linspace(0.0, 16.0, 16001)
    density = boron8_density(energy)
    assert np.trapezoid(density, energy) == pytest.approx(1.0, abs=1e-4)
    assert np.trapezoid(density * energy, energy) == pytest.approx(6.735, rel=1e-4)
    assert np.trapezoid(density * energy**2, energy) == pytest.approx(52.70, rel=1e-4)


@pytest.mark.parametrize(
    ("threshold", "events", "tolerance"),
    # Computed independently at 5.25e6 /cm^2/s; the last number is known to two digits.
    [(0.5, 300.6, 0.005), (1.0, 92.0, 0.005), (1.5, 23.8, 0.005), (2.0, 4.6, 0.01), (3.0, 0.031, 0.03)],
)
def test_boron8_events_in_xenon(threshold: float, events: float, tolerance: float) -> None:
    assert events_above(threshold) == pytest.approx(events, rel=tolerance)


@pytest.mark.parametrize(
    ("sin2_weak", "cross_section", "total"), [(0.2312, 1.17e-39, 889.0), (0.2387, 1.22e-39, 928.0)]
)
def test_cross_section_per_nucleus(sin2_weak: float, cross_section: float, total: float) -> None:
    # arXiv:2408.02877 measures (1.1 +0.8 -0.5)e-39 cm^2 (its abstract); the values are an independent computation.
    nuclei = 1e6 / 131.29 * 6.02214076e23  # in a tonne; standard atomic weight of xenon from memory
    found = events_above(1e-5, sin2_weak)
    assert found == pytest.approx(total, rel=3e-3)
    assert found / (nuclei * 5.25e6 * 3.15576e7) == pytest.approx(cross_section, rel=5e-3)
    assert 0.6e-39 < cross_section < 1.9e-39


def test_rate_against_integration_over_neutrino_energies() -> None:
    # Argon-40 at 2 keV, straight from the cross section; form factor as published in Astropart. Phys. 6 (1996) 87.
    from scanfit.likelihoods.direct_detection.form_factor import helm_form_factor_squared

    argon, recoil = Isotope("Ar", 40), 2e-6  # GeV
    charge = 22.0 - (1.0 - 4.0 * SIN2_THETA_W_LOW) * 18.0
    assert weak_charge(argon) == pytest.approx(charge)

    def integrand(energy: float) -> float:
        mass = argon.mass
        cross_section = FERMI_CONSTANT**2 * mass / (4.0 * math.pi) * charge**2
        cross_section *= 1.0 - mass * recoil / (2.0 * (energy * 1e-3) ** 2)
        return float(boron8_density(np.array([energy]))[0]) * cross_section

    lowest = 0.5 * (recoil + math.sqrt(recoil * (recoil + 2.0 * argon.mass))) * 1e3
    per_nucleus = quad(integrand, lowest, 16.0, limit=200)[0] * GEV_M2_TO_CM2 * 1e-6  # cm^2 per keV
    per_nucleus *= helm_form_factor_squared(np.array([2.0]), argon)[0]
    nuclei = 1e6 / (argon.mass * 1.78266192e-24)
    expected = 5.25e6 * nuclei * per_nucleus * 365.25 * 86400.0
    assert neutrino_rate(np.array([2.0]), {"Ar-40": 1.0}, "boron-8")[0] == pytest.approx(expected, rel=1e-4)


def test_boron8_looks_like_a_light_particle() -> None:
    # arXiv:1307.5458 (from memory): in xenon like 6 GeV and 4.4e-45 cm^2, with 220 and 232 km/s; least squares above
    # 0.5 keV, computed independently, give 5.9 GeV and 4.5e-45 cm^2.
    older = Halo(0.3, 220.0, 544.0, 232.0)
    energy = np.linspace(0.5, 4.0, 200)
    neutrinos = neutrino_rate(energy, XENON, "boron-8")
    best = (math.inf, 0.0, 0.0)
    for mass in np.arange(5.0, 7.01, 0.05):
        unit = differential_rate(energy, float(mass), couplings_of("si", float(mass), 1e-45), older, XENON)
        strength = float(unit @ neutrinos / (unit @ unit))
        best = min(best, (float(np.sum((strength * unit - neutrinos) ** 2)), float(mass), strength * 1e-45))
    assert best[1] == pytest.approx(5.9, abs=0.15)
    assert best[2] == pytest.approx(4.5e-45, rel=0.05)


def test_rough_sources_have_their_order_of_magnitude() -> None:
    # arXiv:1802.06039, table of expected backgrounds (from memory): 0.46 atmospheric and 0.05 supernova neutrinos in
    # 15.3 tonne-years at half acceptance between 6 and 30 keV. The sources here are approximations: within a factor of
    # three.
    energy = np.geomspace(6.0, 30.0, 2001)
    for source, published in (("atmospheric", 0.46), ("supernovae", 0.05)):
        found = np.trapezoid(neutrino_rate(energy, XENON, source), energy) * 15.3 * 0.5  # type: ignore[arg-type]
        assert published / 3.0 < found < published * 3.0, source
    # hep reaches recoils up to 2 E^2/(M + 2 E) with E = 18.77 MeV: 5.8 keV in xenon.
    assert neutrino_rate(np.array([4.0, 6.0]), {"Xe-131": 1.0}, "hep")[1] == 0.0
    assert neutrino_rate(np.array([4.0]), XENON, "hep")[0] > 10.0 * neutrino_rate(np.array([4.0]), XENON, "boron-8")[0]


DETECTOR = """
title = "low threshold"
source = "none"
planned = {planned}
exposure_tonne_year = {exposure}
target = {{ Xe = 1 }}
neutrinos = ["boron-8"]
[efficiency]
energy_kev = [0.7, 10.0]
value = [1.0, 1.0]
[bins]
intervals_kev = [[0.7, 1.0], [1.0, 2.0], [2.0, 10.0]]
background = [0.1, 0.1, 0.1]
{observed}
"""


def detector(folder: Path, exposure: float = 1.0, observed: str = "") -> DirectDetection:
    text = DETECTOR.format(exposure=exposure, planned="false" if observed else "true", observed=observed)
    (folder / "low.toml").write_text(text, encoding="utf-8")
    return DirectDetection(DirectDetection.Options(data="low.toml"), BuildContext(folder))


def candidate(cross_section: float, mass: float) -> Candidate:
    nothing = np.zeros((0, 1))
    return Candidate(
        mass=mass,
        self_conjugate=True,
        spin_degrees_of_freedom=1,
        annihilation=Annihilation((), lambda s: nothing, lambda s: nothing[0]),
        nucleon=couplings_of("si", mass, cross_section) if cross_section else NucleonCouplings(),
        cosmology=CosmologyOptions(underabundant="assume-all"),
    )


def test_flux_is_a_shared_nuisance(tmp_path: Path) -> None:
    term = detector(tmp_path, observed="observed = [80, 92, 5]")
    flux = next(parameter for parameter in term.nuisances if parameter.name == "boron8_flux")
    assert flux.prior is not None
    assert flux.prior.median == pytest.approx(5.25)
    # The same events follow from the flux and, without it, from an equivalent background: Poisson by hand.
    at = [events_above(t) for t in (0.7, 1.0, 2.0)]
    bins = [at[0] - at[1], at[1] - at[2], at[2]]
    for strength in (4.0, 5.25, 6.0):
        expected = [0.1 + n * strength / 5.25 for n in bins]
        reference = sum(n * math.log(m) - m - math.lgamma(n + 1.0) for n, m in zip((80, 92, 5), expected, strict=True))
        found = term.loglike(candidate(0.0, 6.0), {**VALUES, "boron8_flux": strength})
        assert found == pytest.approx(reference, abs=0.01)


def test_neutrinos_weaken_the_limit_where_they_look_alike(tmp_path: Path) -> None:
    # Ten times the exposure gains almost a factor ten without neutrinos, but little at 6 GeV where the floor is.
    small = detector(tmp_path, 1.0).expected(candidate(0.0, 6.0), {**VALUES, "boron8_flux": 5.25})
    large = detector(tmp_path, 100.0).expected(candidate(0.0, 6.0), {**VALUES, "boron8_flux": 5.25})
    from scanfit.likelihoods.direct_detection.sensitivity import limits, yields

    masses = np.array([6.0, 60.0])
    gains = []
    found = [
        limits(t._data.neutrinos_in_background(), yields(t._data.response, "si", masses, Halo()), 0.90, "flat-prior")
        for t in (small, large)
    ]
    gains = found[0] / found[1]
    assert gains[0] < 12.0
    assert gains[1] > 1.5 * gains[0]


def test_floor_of_an_exposure(tmp_path: Path) -> None:
    # Without any background but neutrinos, one tonne-year from 0.7 keV excludes at 6 GeV what boron-8 looks like, and
    # at 40 GeV, where hardly a neutrino comes, what gives 2.3 events.
    found = detector(tmp_path, 1.0).limit_curve(FLOOR, points=10, pseudo_experiments=15, rng=np.random.default_rng(1))
    assert found.observed is None
    assert found.bands is not None
    median = np.exp(np.interp(np.log([6.0, 40.0]), np.log(found.x_values), np.log(found.bands[:, 2])))
    assert 4.4e-45 / 20.0 < median[0] < 4.4e-45
    energy = np.linspace(0.7, 10.0, 2001)
    spectrum = differential_rate(energy, 40.0, couplings_of("si", 40.0, 1e-47), Halo(), XENON)
    background_free = 2.3026 * 1e-47 / np.trapezoid(spectrum, energy)
    assert background_free < median[1] < 2.5 * background_free
