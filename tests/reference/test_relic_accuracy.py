"""Freeze-out against the slow reference of `relic_reference`: masses, waves, resonances, thresholds, and the models."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.likelihoods.candidate import Annihilation, Candidate
from scanfit.likelihoods.models.scalar_singlet import ScalarSinglet
from scanfit.likelihoods.models.spin_one_mediator import SpinOneMediatorModel
from scanfit.likelihoods.relic_abundance.freeze_out import freeze_out
from tests.reference import relic_reference

RATE = 2e-9
"""<sigma v> in GeV^-2 at x = 22 to which every shape is scaled: about what the observed abundance asks for."""


@dataclass(frozen=True)
class Case:
    """One cross section, as a function of a single number s."""

    label: str
    mass: float
    shape: Callable[[float], float]
    poles: tuple[tuple[float, float], ...] = ()
    thresholds: tuple[float, ...] = ()


def s_wave(mass: float) -> Case:
    return Case(f"s-wave {mass:g}", mass, lambda s: 1.0)


def p_wave(mass: float, s_part: float = 0.0) -> Case:
    return Case(f"p-wave {mass:g} + {s_part:g}", mass, lambda s: s_part + 4.0 * (1.0 - 4.0 * mass**2 / s))


def resonance(mass: float, offset: float, width: float, background: float = 0.0) -> Case:
    """A pole at 2 m (1 + offset) whose width is the fraction `width` of its mass."""
    pole = 2.0 * mass * (1.0 + offset)
    square = (pole * pole * width) ** 2

    def shape(s: float) -> float:
        return background / mass**4 + s / pole**2 / ((s - pole**2) ** 2 + square)

    return Case(f"pole {mass:g} {offset:g} {width:g} + {background:g}", mass, shape, ((pole, width * pole),))


def threshold(mass: float, offset: float, power: float, background: float) -> Case:
    """A channel that opens at sqrt(s) = 2 m (1 + offset) as a power of the velocity."""
    edge = 2.0 * mass * (1.0 + offset)

    def shape(s: float) -> float:
        return background + math.pow(max(0.0, 1.0 - edge**2 / s), power)

    return Case(f"threshold {mass:g} {offset:g} {power:g} + {background:g}", mass, shape, (), (edge,))


def pole_behind_threshold(mass: float, edge_offset: float, pole_offset: float, width: float) -> Case:
    pole, edge = 2.0 * mass * (1.0 + pole_offset), 2.0 * mass * (1.0 + edge_offset)

    def shape(s: float) -> float:
        velocity = math.sqrt(max(0.0, 1.0 - edge**2 / s))
        return (0.01 + velocity) / ((s - pole**2) ** 2 + (pole**2 * width) ** 2)

    label = f"pole {pole_offset:g} {width:g} behind threshold {edge_offset:g}"
    return Case(label, mass, shape, ((pole, width * pole),), (edge,))


def two_poles(mass: float, offsets: tuple[float, float], widths: tuple[float, float]) -> Case:
    poles = tuple((2.0 * mass * (1.0 + o), 2.0 * mass * (1.0 + o) * w) for o, w in zip(offsets, widths, strict=True))

    def shape(s: float) -> float:
        return sum(w / m**3 * m**4 / ((s - m**2) ** 2 + (m * w) ** 2) for m, w in poles)

    return Case(f"two poles {offsets} {widths}", mass, shape, poles)


QUICK = [
    s_wave(10.0),
    p_wave(1e3),
    resonance(100.0, 0.05, 1e-6),
    resonance(30.0, -1e-3, 1e-4),
    resonance(1e3, 1e-3, 1e-5, background=1e-2),
    threshold(78.0, 0.03, 0.5, background=0.01),
]

RESONANCES = (
    (100.0, 1e-5, 1e-6), (100.0, 1e-4, 1e-6), (100.0, 1e-3, 1e-6), (1e3, 0.01, 1e-6), (10.0, 0.2, 1e-6),
    (100.0, 0.3, 1e-5), (1e4, 0.1, 1e-5), (5.0, 0.02, 1e-4), (500.0, 0.1, 1e-3), (62.0, 0.01, 3e-5),
    (100.0, 0.25, 1e-3), (100.0, 0.25, 0.03), (100.0, 0.25, 0.5), (1e5, 0.05, 0.01), (3e3, 0.6, 0.1),
    (100.0, 2.0, 0.2), (100.0, -1e-5, 1e-6), (100.0, -1e-4, 1e-6), (1e3, -1e-3, 1e-5), (20.0, -0.01, 1e-4),
    (100.0, -0.05, 1e-3), (100.0, -0.05, 0.1), (100.0, -0.3, 1e-3), (1e4, -0.02, 0.5), (2.0, -0.1, 0.01),
)  # fmt: skip
"""Mass, offset, width."""

THRESHOLDS = (
    (100.0, 1e-3, 0.5, 0.0), (100.0, 0.01, 1.5, 0.0), (100.0, 0.05, 0.5, 0.0), (100.0, 0.15, 1.5, 0.0),
    (5.0, 0.1, 0.5, 0.001), (1e3, 0.2, 1.5, 1e-4), (100.0, 0.3, 0.5, 1e-4), (1e4, 0.02, 1.5, 0.02),
)  # fmt: skip
"""Mass, offset, power, background."""

THOROUGH = [
    *[s_wave(mass) for mass in (1.0, 3.0, 30.0, 100.0, 1e3, 1e4, 1e5)],
    *[p_wave(mass) for mass in (1.0, 5.0, 30.0, 100.0, 1e4, 1e5)],
    *[p_wave(mass, 0.02) for mass in (2.0, 200.0, 2e4)],
    *[resonance(*numbers) for numbers in RESONANCES],
    *[resonance(100.0, offset, 1e-5, background=0.1) for offset in (0.03, 0.15, -0.02)],
    *[threshold(*numbers) for numbers in THRESHOLDS],
    pole_behind_threshold(100.0, 0.05, 0.06, 1e-4),
    pole_behind_threshold(100.0, 0.06, 0.05, 1e-3),
    pole_behind_threshold(300.0, 0.1, 0.3, 0.05),
    two_poles(100.0, (0.05, 0.051), (1e-5, 1e-4)),
    two_poles(100.0, (-0.01, 0.1), (1e-4, 1e-2)),
]


def compare(case: Case) -> None:
    args = case.poles, case.thresholds
    scale = RATE / relic_reference.thermal_average(case.shape, case.mass, 22.0, *args)

    def sigma_v(s: float) -> float:
        return scale * case.shape(s)

    def total(s: np.ndarray) -> np.ndarray:
        return np.array([sigma_v(value) for value in s.tolist()])

    annihilation = Annihilation(("bb",), lambda s: total(s)[None, :], total, *args)
    result = freeze_out(
        mass=case.mass,
        degrees_of_freedom=2,
        self_conjugate=True,
        annihilation=annihilation,
        equation_of_state="arxiv-1803.01038",
    )
    expected = relic_reference.omega_h2(sigma_v, case.mass, 2.0, *args)
    assert result.error < 1e-3
    assert result.omega_h2 == pytest.approx(expected, rel=result.error)
    assert result.omega_h2 == pytest.approx(expected, rel=2e-4)


@pytest.mark.parametrize("case", QUICK, ids=lambda case: case.label)
def test_against_quadrature_and_stiff_solver(case: Case) -> None:
    compare(case)


@pytest.mark.soak
@pytest.mark.parametrize("case", THOROUGH, ids=lambda case: case.label)
def test_against_quadrature_and_stiff_solver_thoroughly(case: Case) -> None:
    compare(case)


def singlet(mass: float, portal: float) -> Candidate:
    model = ScalarSinglet(ScalarSinglet.Options(), BuildContext(Path()))
    return model.predict({"mass": mass, "portal": portal, "higgs_nucleon_coupling": 0.3})


def mediator(coupling: Literal["vector", "axial"], mass: float, mediator_mass: float) -> Candidate:
    options = SpinOneMediatorModel.Options(coupling=coupling)
    values = {"mass": mass, "mediator_mass": mediator_mass, "g_quark": 0.25, "g_dark": 1.0, "g_lepton": 0.0}
    charges = {"delta_u": 0.84, "delta_d": -0.43, "delta_s": -0.09}
    return SpinOneMediatorModel(options, BuildContext(Path())).predict({**values, **charges})


SINGLETS = ((20.0, 0.3), (58.0, 2e-3), (62.5, 3e-4), (64.0, 0.02), (75.0, 0.05), (121.0, 0.04), (900.0, 0.3))
VECTORS = ((100.0, 1000.0), (480.0, 1000.0), (505.0, 1000.0), (300.0, 250.0))
AXIALS = ((300.0, 1000.0), (160.0, 1000.0), (450.0, 1000.0))

MODEL_POINTS = [
    *[(singlet, point) for point in SINGLETS],
    *[(mediator, ("vector", *point)) for point in VECTORS],
    *[(mediator, ("axial", *point)) for point in AXIALS],
]


@pytest.mark.soak
@pytest.mark.parametrize(("build", "point"), MODEL_POINTS)
def test_models_against_quadrature_and_stiff_solver(build: Callable[..., Candidate], point: tuple[object, ...]) -> None:
    candidate = build(*point)
    pairs = 1.0 if candidate.self_conjugate else 0.5
    total = candidate.annihilation.total

    def sigma_v(s: float) -> float:
        return pairs * float(total(np.array([s]))[0])

    count = candidate.spin_degrees_of_freedom / pairs
    expected = relic_reference.omega_h2(
        sigma_v, candidate.mass, count, candidate.annihilation.poles, candidate.annihilation.thresholds
    )
    assert candidate.relic.omega_h2 == pytest.approx(expected, rel=candidate.relic.error)
    assert candidate.relic.error < 1e-3


def test_enough_cases() -> None:
    """At least sixty points from 1 GeV to 100 TeV, as the accuracy claim says."""
    cases = [*QUICK, *THOROUGH]
    assert len(cases) + len(MODEL_POINTS) >= 60
    assert min(case.mass for case in cases) <= 1.0
    assert max(case.mass for case in cases) >= 1e5
