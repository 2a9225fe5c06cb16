"""Nuclei, halo, spectra and structure functions against published and independently computed numbers.

Unless another source stands beside it, a reference number comes from a computation made outside this project with the
formulas of Astropart. Phys. 6 (1996) 87 and the inputs stated in the test.
"""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from scanfit.likelihoods.candidate import NucleonCouplings
from scanfit.likelihoods.constants import (
    ATOMIC_MASS_UNIT,
    GEV_M2_TO_CM2,
    NEUTRON_MASS,
    PROTON_MASS,
    SPEED_OF_LIGHT_CM_S,
    SPEED_OF_LIGHT_KM_S,
)
from scanfit.likelihoods.direct_detection.experiment import Experiment
from scanfit.likelihoods.direct_detection.folding import fold
from scanfit.likelihoods.direct_detection.form_factor import helm_form_factor_squared, helm_radius
from scanfit.likelihoods.direct_detection.halo import Halo
from scanfit.likelihoods.direct_detection.isotopes import (
    NATURAL_ABUNDANCES,
    Isotope,
    mass_fractions,
    natural_isotopes,
)
from scanfit.likelihoods.direct_detection.spectrum import differential_rate
from scanfit.likelihoods.direct_detection.spin_dependent import (
    SPIN_EXPECTATIONS,
    XENON,
    SpinExpectation,
    structure_functions,
    zero_momentum_structure,
)

HALO = Halo(local_density=0.3, most_probable_speed=238.0, escape_speed=544.0, earth_speed=252.0)
XENON_129, XENON_131 = Isotope("Xe", 129), Isotope("Xe", 131)


def spin_independent(cross_section: float, mass: float) -> NucleonCouplings:
    """Isospin-symmetric couplings with the given cross section on protons in cm^2."""
    reduced = mass * PROTON_MASS / (mass + PROTON_MASS)
    coupling = math.sqrt(math.pi / 4.0 * cross_section / GEV_M2_TO_CM2) / reduced
    return NucleonCouplings(f_proton=coupling, f_neutron=coupling)


def neutron_spin(cross_section: float, mass: float) -> NucleonCouplings:
    reduced = mass * NEUTRON_MASS / (mass + NEUTRON_MASS)
    return NucleonCouplings(a_neutron=math.sqrt(math.pi / 12.0 * cross_section / GEV_M2_TO_CM2) / reduced)


def window(low: float, high: float, exposure: float = 1.0, target: str = "Xe") -> Experiment:
    """One bin, unit efficiency, perfect resolution."""
    return Experiment.model_validate(
        {
            "title": "a window",
            "source": "none",
            "exposure_tonne_year": exposure,
            "target": {target: 1.0},
            "efficiency": {"energy_kev": (low, high), "value": (1.0, 1.0)},
            "bins": {"intervals_kev": ((low, high),), "background": (0.0,), "observed": (0,)},
        }
    )


# Halo


@pytest.mark.parametrize(
    ("speed", "expected"),
    [
        (0.0, 3.4621579e-3),
        (50.0, 3.3933028e-3),
        (200.0, 2.4629538e-3),
        (292.0, 1.6077005e-3),
        (300.0, 1.5342756e-3),
        (400.0, 7.4103116e-4),
        (600.0, 6.5323355e-5),
        (700.0, 8.2383638e-6),
        (790.0, 1.84080e-8),
    ],
)
def test_velocity_integral_values(speed: float, expected: float) -> None:
    eta = HALO.mean_inverse_speed(np.array([speed]))[0]
    assert eta == pytest.approx(expected, abs=1e-10, rel=2e-6)


@pytest.mark.parametrize(
    "halo",
    [HALO, Halo(0.3, 220.0, 544.0, 232.0), Halo(0.3, 180.0, 250.0, 300.0), Halo(0.3, 300.0, 450.0, 30.0)],
    ids=["standard", "older", "earth faster than the cut", "slow earth"],
)
def test_velocity_integral_against_direct_integration(halo: Halo) -> None:
    v0, cut, earth = halo.most_probable_speed, halo.escape_speed, halo.earth_speed
    norm = quad(lambda v: 4.0 * math.pi * v * v * math.exp(-((v / v0) ** 2)), 0.0, cut, epsabs=0.0, epsrel=1e-13)[0]

    def over_directions(v: float) -> float:
        """2 pi v int dcos f(|v + v_E|): the azimuth is trivial, the polar angle ends where the halo is cut."""
        last = min(1.0, (cut**2 - v**2 - earth**2) / (2.0 * v * earth))
        if last <= -1.0:
            return 0.0
        inner = quad(
            lambda c: math.exp(-(v * v + earth * earth + 2.0 * v * earth * c) / v0**2),
            -1.0, last, epsabs=0.0, epsrel=1e-13,
        )[0]  # fmt: skip
        return 2.0 * math.pi * v * inner / norm

    kinks = sorted({abs(cut - earth), cut + earth})
    for minimum in (1.0, 60.0, 0.5 * kinks[0], 1.1 * kinks[0], 0.8 * kinks[1]):
        edges = [minimum, *(k for k in kinks if k > minimum)]
        pieces = [quad(over_directions, a, b, epsabs=0.0, epsrel=1e-12)[0] for a, b in pairwise(edges)]
        assert halo.mean_inverse_speed(np.array([minimum]))[0] == pytest.approx(sum(pieces), rel=1e-10)


def test_velocity_integral_ends_at_the_fastest_particle() -> None:
    assert HALO.mean_inverse_speed(np.array([795.999, 796.0, 900.0])).tolist()[1:] == [0.0, 0.0]
    assert HALO.mean_inverse_speed(np.array([795.9]))[0] > 0.0


def test_mean_speed_of_the_exponential_fit() -> None:
    # Astropart. Phys. 6 (1996) 87 fits the rate by R/R0 = c1/c2 = 0.751/0.561 for v_E = 244, v_esc = 600, v_0 = 230
    # (from memory); exact integration gives 0.3 % less. R/R0 = <v> sqrt(pi)/(2 v_0), and <v> = 2 int v eta dv.
    halo = Halo(0.4, 230.0, 600.0, 244.0)
    first = quad(lambda v: 2.0 * v * halo.mean_inverse_speed(np.array([v]))[0], 0.0, 356.0)[0]
    rest = quad(lambda v: 2.0 * v * halo.mean_inverse_speed(np.array([v]))[0], 356.0, 844.0)[0]
    ratio = (first + rest) * math.sqrt(math.pi) / (2.0 * 230.0)
    assert ratio == pytest.approx(0.751 / 0.561, rel=0.005)
    assert ratio == pytest.approx(1.3344, rel=1e-4)


# Nuclei


@pytest.mark.parametrize(
    ("element", "standard_atomic_weight"),
    # Standard atomic weights of the elements, from memory.
    [("Xe", 131.293), ("Ar", 39.948), ("Ge", 72.630), ("Si", 28.085), ("O", 15.999), ("Ca", 40.078), ("W", 183.84),
     ("F", 18.998), ("Na", 22.990), ("I", 126.904)],
)  # fmt: skip
def test_abundances(element: str, standard_atomic_weight: float) -> None:
    shares = NATURAL_ABUNDANCES[element]
    assert sum(shares.values()) == pytest.approx(1.0, abs=2e-5)
    assert sum(a * x for a, x in shares.items()) == pytest.approx(standard_atomic_weight, rel=1.1e-3)


def test_mass_fractions_of_a_compound() -> None:
    # Calcium tungstate from its formula and standard atomic weights (from memory): 14, 64 and 22 % by mass.
    fractions = mass_fractions({"Ca": 1.0, "W": 1.0, "O": 4.0})
    assert sum(fractions.values()) == pytest.approx(1.0, rel=1e-12)
    total = 40.078 + 183.84 + 4 * 15.999
    for element, weight in (("Ca", 40.078), ("W", 183.84), ("O", 4 * 15.999)):
        share = sum(value for isotope, value in fractions.items() if isotope.element == element)
        assert share == pytest.approx(weight / total, rel=2e-3)


def test_isotopes_add_up_to_the_element() -> None:
    energy = np.geomspace(0.5, 60.0, 7)
    couplings = NucleonCouplings(1e-9, -7e-10, 1e-6, -3e-6)
    parts = sum(
        share * differential_rate(energy, 50.0, couplings, HALO, {isotope.name: 1.0})
        for isotope, share in mass_fractions({"Xe": 1.0}).items()
    )
    np.testing.assert_allclose(differential_rate(energy, 50.0, couplings, HALO, {"Xe": 1.0}), parts, rtol=1e-12)


@pytest.mark.parametrize(
    ("mass_number", "radius", "values"),
    [
        (131, 5.83645, {1: 0.95322, 5: 0.78486, 10: 0.61159, 20: 0.36224, 30: 0.20604, 50: 0.05573}),
        (129, 5.80554, {10: 0.61926}),
        (73, 4.77431, {10: 0.82748}),
        (40, 3.89669, {10: 0.92880}),
    ],
)
def test_form_factor(mass_number: int, radius: float, values: dict[int, float]) -> None:
    element = {131: "Xe", 129: "Xe", 73: "Ge", 40: "Ar"}[mass_number]
    assert helm_radius(mass_number) == pytest.approx(radius, abs=1e-5)
    found = helm_form_factor_squared(np.array(list(values), dtype=float), Isotope(element, mass_number))
    np.testing.assert_allclose(found, list(values.values()), rtol=1e-4)


def test_form_factor_is_one_at_rest_and_has_its_first_zero() -> None:
    assert helm_form_factor_squared(np.array([0.0]), XENON_131)[0] == 1.0
    energy = np.linspace(60.0, 120.0, 6001)
    assert energy[helm_form_factor_squared(energy, XENON_131).argmin()] == pytest.approx(94.6, abs=0.1)


# Spin-independent rates


@pytest.mark.parametrize(
    ("mass", "wide", "narrow"),
    [(10.0, 2.8716, 0.0480), (30.0, 4.1519, 2.0299), (40.0, 3.9968, 2.2972), (100.0, 2.4081, 1.6001)],
)
def test_events_in_xenon(mass: float, wide: float, narrow: float) -> None:
    # sigma_p = 1e-47 cm^2, one tonne-year, 0.01-100 and 5-40 keV.
    couplings = spin_independent(1e-47, mass)
    assert fold(window(0.01, 100.0)).counts(mass, couplings, HALO)[0] == pytest.approx(wide, rel=5e-3)
    assert fold(window(5.0, 40.0)).counts(mass, couplings, HALO)[0] == pytest.approx(narrow, rel=5e-3)


def test_spectrum_in_xenon() -> None:
    energy = np.array([1.0, 5.0, 10.0, 20.0, 30.0, 50.0])
    rate = differential_rate(energy, 100.0, spin_independent(1e-45, 100.0), HALO, {"Xe": 1.0})
    np.testing.assert_allclose(rate, [15.515, 12.026, 8.6718, 4.3713, 2.1002, 0.39705], rtol=5e-4)


@pytest.mark.parametrize("mass", [20.0, 100.0])
def test_unit_rate_of_a_halo_at_rest(mass: float) -> None:
    # Astropart. Phys. 6 (1996) 87: R0 = 540/(A M_D) and 503/(M_D M_T) events/(kg d) for 1 pb on the nucleus, 0.4
    # GeV/cm^3 and 230 km/s (from memory), and dR/dE = R0/(E0 r) at E = 0 for an Earth at rest without escape speed.
    fluorine = Isotope("F", 19)
    reduced = mass * fluorine.mass / (mass + fluorine.mass)
    on_nucleus = math.sqrt(math.pi / 4.0 * 1e-36 / GEV_M2_TO_CM2) / reduced
    couplings = NucleonCouplings(f_proton=on_nucleus / 9.0)
    halo = Halo(local_density=0.4, most_probable_speed=230.0, escape_speed=5000.0, earth_speed=1e-3)
    at_zero = differential_rate(np.array([1e-9]), mass, couplings, halo, {"F": 1.0})[0] / 1000.0 / 365.25
    energy = 0.5 * mass * (230.0 / SPEED_OF_LIGHT_KM_S) ** 2 / 1e-6
    transfer = 4.0 * mass * fluorine.mass / (mass + fluorine.mass) ** 2
    unit_rate = at_zero * energy * transfer
    assert unit_rate == pytest.approx(540.0 / (19.0 * mass), rel=1e-3)
    assert unit_rate == pytest.approx(503.0 / (mass * fluorine.mass), rel=1.5e-3)


@pytest.mark.parametrize(
    ("paper", "exposure", "low", "high", "mass", "published", "ratio"),
    # What a bare count of 2.303 events at unit efficiency makes of published limits. The last column was computed
    # independently; that it runs from 0.7 upwards is the physics of backgrounds, discrimination and fluctuations that
    # a bare count leaves out, not an error of the rate. Limits of the first, third and fourth line are in the
    # abstracts; everything else is from memory.
    [
        ("PRL 119, 181301", 1.042 * 34.2 / 365.25, 5.0, 40.0, 35.0, 7.7e-47, 0.72),
        ("PRL 121, 111302", 1.3 * 278.8 / 365.25, 4.9, 40.9, 30.0, 4.1e-47, 3.6),
        ("PRL 131, 041002", 5.5 * 60.0 / 365.25, 5.0, 55.0, 36.0, 9.2e-48, 0.81),
        ("arXiv:2410.17036", 4.2, 5.0, 55.0, 40.0, 2.2e-48, 0.93),
    ],
)  # fmt: skip
def test_bare_counting_against_published_limits(
    paper: str, exposure: float, low: float, high: float, mass: float, published: float, ratio: float
) -> None:
    events = fold(window(low, high, exposure)).counts(mass, spin_independent(1e-47, mass), HALO)[0]
    assert published / (1e-47 * math.log(10.0) / events) == pytest.approx(ratio, rel=0.03), paper


# Spin-dependent rates


def test_free_nucleon_has_unit_normalisation() -> None:
    # sigma = 12 mu^2 a^2/pi needs S(0) = 3/(2 pi) for a lone proton.
    assert zero_momentum_structure(SpinExpectation(0.5, 0.5, 0.0)).sum() == pytest.approx(3.0 / (2.0 * math.pi))


@pytest.mark.parametrize(
    ("isotope", "spins", "neutron", "proton"),
    # One-body spin expectation values, and S_n(0), S_p(0), of arXiv:1304.7684 (from memory).
    [
        (XENON_129, SpinExpectation(0.5, 0.010, 0.329), 0.16373, 0.0043965),
        (XENON_131, SpinExpectation(1.5, -0.009, -0.272), 0.12511, 0.0033509),
    ],
)
def test_xenon_structure_at_rest(isotope: Isotope, spins: SpinExpectation, neutron: float, proton: float) -> None:
    isoscalar, mixed, isovector = structure_functions(np.array([0.0]), isotope)[:, 0]
    assert isoscalar == pytest.approx(zero_momentum_structure(spins)[0], rel=3e-3)
    assert isoscalar - mixed + isovector == pytest.approx(neutron, rel=1e-4)
    assert isoscalar + mixed + isovector == pytest.approx(proton, rel=1e-4)


@pytest.mark.parametrize("isotope", [XENON_129, XENON_131])
def test_xenon_structure_is_positive_for_all_amplitudes(isotope: Isotope) -> None:
    # A quadratic form that is a sum of squared matrix elements; one wrong digit in a coefficient breaks it.
    length = XENON[isotope.name].oscillator_length / 0.1973269804
    energy = np.linspace(0.0, 5.0, 2001)[1:-1] * 2.0 / length**2 / (2.0 * isotope.mass) / 1e-6
    isoscalar, mixed, isovector = structure_functions(energy, isotope)
    assert np.all(4.0 * isoscalar * isovector - mixed**2 >= 0.0)
    assert np.all(isoscalar > 0.0)


@pytest.mark.parametrize("name", SPIN_EXPECTATIONS)
def test_one_body_structure_is_positive_and_falls(name: str) -> None:
    element, _, number = name.partition("-")
    values = structure_functions(np.array([0.0, 5.0, 10.0]), Isotope(element, int(number)))
    assert np.all(np.diff(values[0]) < 0.0)
    # One-body currents make the form a perfect square.
    np.testing.assert_allclose(4.0 * values[0] * values[2], values[1] ** 2, rtol=1e-10)


def test_spin_dependent_events_against_direct_integration() -> None:
    # dR/dE with (4 pi/3) (mu_A/mu_n)^2 sigma_n S_n/(2J+1) in place of sigma_A F^2, integrated from scratch.
    mass, cross_section = 60.0, 1e-41
    reduced_nucleon = mass * NEUTRON_MASS / (mass + NEUTRON_MASS)
    expected = 0.0
    for isotope, share in mass_fractions({"Xe": 1.0}).items():
        if isotope not in (XENON_129, XENON_131):
            continue
        nuclear_mass = isotope.mass_number * ATOMIC_MASS_UNIT
        reduced = mass * nuclear_mass / (mass + nuclear_mass)
        spin = XENON[isotope.name].spin

        def rate(
            energy: float, isotope: Isotope = isotope, nuclear_mass: float = nuclear_mass,
            reduced: float = reduced, spin: float = spin,
        ) -> float:  # fmt: skip
            isoscalar, mixed, isovector = structure_functions(np.array([energy]), isotope)[:, 0]
            neutron = isoscalar - mixed + isovector
            sigma = 4.0 * math.pi / 3.0 * (reduced / reduced_nucleon) ** 2 * cross_section * neutron / (2 * spin + 1)
            speed = SPEED_OF_LIGHT_KM_S * math.sqrt(nuclear_mass * energy * 1e-6 / 2.0) / reduced
            eta = HALO.mean_inverse_speed(np.array([speed]))[0] / 1e5  # s/cm
            flux = 0.3 / mass * sigma * eta * SPEED_OF_LIGHT_CM_S**2
            return float(flux * nuclear_mass / (2.0 * reduced**2) * 1e-6)  # per nucleus, second and keV

        nuclei_per_tonne = 1e6 / (nuclear_mass * 1.78266192e-24)
        integral = quad(rate, 5.0, 20.0)[0] + quad(rate, 20.0, 55.0)[0]
        expected += share * nuclei_per_tonne * 365.25 * 86400.0 * integral
    found = fold(window(5.0, 55.0)).counts(mass, neutron_spin(cross_section, mass), HALO)[0]
    assert found == pytest.approx(expected, rel=1e-4)


def test_proton_neutron_interference_can_cancel() -> None:
    # Opposite signs of a_p and a_n change the rate: in xenon S_p/S_n is 3 %, the mixed term some 30 %.
    response = fold(window(5.0, 40.0))
    alone = response.counts(50.0, NucleonCouplings(a_neutron=1e-6), HALO)[0]
    proton = response.counts(50.0, NucleonCouplings(a_proton=1e-6), HALO)[0]
    plus = response.counts(50.0, NucleonCouplings(a_proton=1e-6, a_neutron=1e-6), HALO)[0]
    minus = response.counts(50.0, NucleonCouplings(a_proton=-1e-6, a_neutron=1e-6), HALO)[0]
    assert plus + minus == pytest.approx(2.0 * (alone + proton), rel=1e-9)
    assert abs(plus - minus) > 0.2 * alone


def test_spin_dependent_and_spin_independent_limits_of_one_search_agree() -> None:
    # arXiv:1902.03234 excludes 6.3e-42 cm^2 on neutrons at 30 GeV with the data of PRL 121, 111302, which excludes
    # 4.1e-47 cm^2 spin-independent there (both from memory). The same count is excluded, so the ratio is near one.
    response = fold(window(4.9, 40.9))
    ratio = (
        response.counts(30.0, neutron_spin(6.3e-42, 30.0), HALO)[0]
        / response.counts(30.0, spin_independent(4.1e-47, 30.0), HALO)[0]
    )
    assert ratio == pytest.approx(0.91, rel=0.03)


def test_natural_isotopes_are_ordered() -> None:
    assert [isotope.mass_number for isotope in natural_isotopes("Xe")] == [124, 126, 128, 129, 130, 131, 132, 134, 136]
