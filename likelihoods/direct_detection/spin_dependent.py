"""Nuclear structure functions of spin-dependent scattering.

For amplitudes a_p and a_n on nucleons, a_0 = a_p + a_n, a_1 = a_p - a_n, a nucleus of spin J responds with

    S(q) = a_0^2 S_00(q) + a_0 a_1 S_01(q) + a_1^2 S_11(q),      sigma_A F^2 = 16 mu_A^2 S(q) / (2 J + 1),

so that interference between protons and neutrons is kept. A free nucleon has S(0) = 3 a^2/(2 pi), which gives back
sigma = 12 mu^2 a^2/pi.

Xenon: S_ij(u) = e^{-u} sum_k c_k u^k with u = (q b)^2/2, chiral one- and two-body currents, arXiv:1304.7684. The
coefficients are quoted from memory, and their being the lower edge of the published band is a recollection, not a
reading. What the tests can prove independently: S is positive for every pair of amplitudes, and S_00(0) follows from
the published spin expectation values. Above u = 5 (some 300 keV in xenon) the polynomials mean nothing and S is zero.

Other nuclei: the zero-momentum values follow from one-body spin expectation values <S_p>, <S_n> (collected in
hep-ph/0406218; from memory) and fall off as a thin shell, S(q) = S(0) j_0(q r)^2 with r = A^(1/3) fm (Astropart. Phys.
6 (1996) 87), held at 0.047 over the first dip as that paper advises. This is good to some ten per cent at best.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

from scanfit.priors import FloatArray

from ..constants import HBAR_C_GEV_FM
from .isotopes import Isotope

LARGEST_ARGUMENT: Final = 5.0
"""Largest u = (q b)^2/2 at which the xenon polynomials are used."""


@dataclass(frozen=True)
class PolynomialStructure:
    """Structure functions e^{-u} sum_k c_k u^k of one nucleus; `coefficients` are (S_00, S_01, S_11), each c_0..c_9."""

    spin: float
    oscillator_length: float
    coefficients: tuple[tuple[float, ...], ...]


@dataclass(frozen=True)
class SpinExpectation:
    """Spin J of a nucleus and the expectation values of its protons' and neutrons' spins."""

    spin: float
    protons: float
    neutrons: float


XENON: Final[Mapping[str, PolynomialStructure]] = {
    "Xe-129": PolynomialStructure(
        spin=0.5,
        oscillator_length=2.2853,
        coefficients=(
            (0.054731, -0.146897, 0.182479, -0.128112, 0.0539978,
             -0.0133335, 0.00190579, -1.48373e-4, 5.11732e-6, -2.06597e-8),
            (-0.0796645, 0.231997, -0.304198, 0.222024, -0.096693,
             0.0251835, -0.00392356, 3.53343e-4, -1.65058e-5, 2.88576e-7),
            (0.02933, -0.0905396, 0.122783, -0.0912046, 0.0401076,
             -0.010598, 0.00168737, -1.56768e-4, 7.69202e-6, -1.48874e-7),
        ),
    ),
    "Xe-131": PolynomialStructure(
        spin=1.5,
        oscillator_length=2.2905,
        coefficients=(
            (0.0417857, -0.111132, 0.171306, -0.132481, 0.0630161,
             -0.0177684, 0.00282192, -2.32247e-4, 7.81471e-6, 1.25984e-9),
            (-0.0608808, 0.181473, -0.272533, 0.211776, -0.0985956,
             0.027438, -0.0044424, 3.97619e-4, -1.74758e-5, 2.55979e-7),
            (0.022446, -0.0733931, 0.110509, -0.0868752, 0.0405399,
             -0.0113544, 0.00187572, -1.75285e-4, 8.40043e-6, -1.53632e-7),
        ),
    ),
}  # fmt: skip

SPIN_EXPECTATIONS: Final[Mapping[str, SpinExpectation]] = {
    "F-19": SpinExpectation(0.5, 0.4751, -0.0087),
    "Na-23": SpinExpectation(1.5, 0.2477, 0.0198),
    "Si-29": SpinExpectation(0.5, -0.0019, 0.1334),
    "Ge-73": SpinExpectation(4.5, 0.030, 0.378),
    "I-127": SpinExpectation(2.5, 0.309, 0.075),
}


def nuclear_spin(isotope: Isotope) -> float:
    """Spin J of the nuclei described here; zero where this module knows no spin structure."""
    known = XENON.get(isotope.name) or SPIN_EXPECTATIONS.get(isotope.name)
    return known.spin if known else 0.0


def lacks_structure(isotope: Isotope) -> bool:
    """Whether the nucleus has an odd number of nucleons, hence spin, but no structure functions here."""
    return isotope.mass_number % 2 == 1 and nuclear_spin(isotope) == 0.0


def structure_functions(energy: FloatArray, isotope: Isotope) -> FloatArray:
    """Structure functions (S_00, S_01, S_11), dimensionless.

    Parameters
    ----------
    energy : ndarray, shape (n,)
        Recoil energies in keV.
    isotope : Isotope
        The nucleus that recoils.

    Returns
    -------
    ndarray, shape (3, n)
        Zero for a nucleus without (known) spin.
    """
    momentum = isotope.momentum_transfer(energy) / HBAR_C_GEV_FM
    if isotope.name in XENON:
        xenon = XENON[isotope.name]
        u = 0.5 * (momentum * xenon.oscillator_length) ** 2
        inside = np.minimum(u, LARGEST_ARGUMENT)
        polynomials = [np.polynomial.polynomial.polyval(inside, c) for c in xenon.coefficients]
        return np.asarray(np.where(u <= LARGEST_ARGUMENT, np.exp(-inside) * np.array(polynomials), 0.0))
    if isotope.name in SPIN_EXPECTATIONS:
        values = zero_momentum_structure(SPIN_EXPECTATIONS[isotope.name])
        return values[:, None] * _thin_shell(momentum * isotope.mass_number ** (1.0 / 3.0))[None, :]
    return np.zeros((3, np.size(energy)))


def zero_momentum_structure(nucleus: SpinExpectation) -> FloatArray:
    """Return (S_00, S_01, S_11) at q = 0 from one-body spins.

    They are (2J+1)(J+1)/(4 pi J) times (Sp+Sn)^2, 2 (Sp+Sn)(Sp-Sn) and (Sp-Sn)^2.
    """
    j, protons, neutrons = nucleus.spin, nucleus.protons, nucleus.neutrons
    isoscalar, isovector = protons + neutrons, protons - neutrons
    prefactor = (2.0 * j + 1.0) * (j + 1.0) / (4.0 * math.pi * j)
    return prefactor * np.array([isoscalar**2, 2.0 * isoscalar * isovector, isovector**2])


def _thin_shell(argument: FloatArray) -> FloatArray:
    shell = np.sinc(argument / math.pi) ** 2
    in_dip = (argument > 2.55) & (argument < 4.5)
    return np.where(in_dip, 0.047, shell)
