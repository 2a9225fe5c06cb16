"""Single mediator production at leading order against the event generator and a measured cross section."""

from __future__ import annotations

import math

import numpy as np
import pytest

from scanfit.errors import InputError, PointError
from scanfit.likelihoods.constants import SIN2_THETA_W_MZ, Z_MASS
from scanfit.likelihoods.mono_x.signal import read_arrays
from scanfit.likelihoods.resonance.production import load_production

Z_TO_MUONS = 0.0336
"""Branching fraction; Review of Particle Physics, from memory."""


def z_cross_section() -> float:
    """Cross section of Z -> mu mu in pb for masses from 66 to 116 GeV, from the table: g^2 = g_V^2 + g_A^2."""
    production = load_production(13.0)
    arrays, _ = read_arrays(production.path, ("cross_section", "mass"))
    up, down = (math.exp(np.interp(math.log(Z_MASS), np.log(arrays["mass"]), column))
                for column in np.log(arrays["cross_section"][0].T))  # fmt: skip
    unit = 4.0 * math.pi / 127.9 / (4.0 * SIN2_THETA_W_MZ * (1.0 - SIN2_THETA_W_MZ))
    couplings = [
        unit * ((isospin - 2.0 * charge * SIN2_THETA_W_MZ) ** 2 + isospin**2)
        for isospin, charge in ((0.5, 2.0 / 3.0), (-0.5, -1.0 / 3.0))
    ]
    # Share of a Breit-Wigner of 2.5 GeV in the window.
    window = (math.atan(24.8 / 1.25) + math.atan(25.2 / 1.25)) / math.pi
    return (couplings[0] * up + couplings[1] * down) * Z_TO_MUONS * window


def test_z_bosons_come_as_often_as_from_the_event_generator():
    """pythia8mc 8.317.2, WeakSingleBoson:ffbar2gmZ (Z only), PDF:pSet = 13, 66-116 GeV: 1401.5 +- 6.0 pb.

    1.5 %: the generator's couplings run with the mass, and interpolation in the mass is linear here.
    """
    assert z_cross_section() == pytest.approx(1401.5, rel=0.015)


def test_z_bosons_come_a_little_less_often_than_measured():
    """1981 pb measured per lepton (arXiv:1603.09222, from memory); higher orders add 20 to 40 % (common practice)."""
    assert 1.2 < 1981.0 / z_cross_section() < 1.45


def test_the_spline_holds_between_its_nodes():
    """With every other node left out: 1e-4, of which a sixteenth is left with all of them (fourth-order errors)."""
    from scipy.interpolate import CubicSpline

    production = load_production(13.0)
    arrays, _ = read_arrays(production.path, ("cross_section", "mass"))
    total = np.log(arrays["cross_section"][0].sum(axis=1))
    position = np.log(arrays["mass"] / (13000.0 - arrays["mass"]))
    coarse = CubicSpline(position[::2], total[::2])(position[1::2])
    assert np.abs(coarse - total[1::2]).max() < 1e-4
    for mass, value in zip(arrays["mass"][1:-1], total[1:-1], strict=True):
        assert math.log(production(float(mass))[0]) == pytest.approx(value, abs=1e-9)


def test_heavier_is_rarer_and_more_energy_helps():
    low, high = load_production(13.0), load_production(14.0)
    masses = np.geomspace(100.0, 9000.0, 30)
    rates = np.array([[production(float(mass))[0] for mass in masses] for production in (low, high)])
    assert np.all(np.diff(rates, axis=1) < 0.0)
    assert np.all(np.diff(rates, axis=0) > 0.0)


def test_outside_the_table_is_said():
    with pytest.raises(PointError, match="10500 GeV lies outside the production table, 80 to 10010 GeV"):
        load_production(13.0)(10500.0)
    with pytest.raises(InputError, match=r"known: 13, 13\.6, 14 TeV"):
        load_production(100.0)
