"""Cross sections made to break freeze-out: poles of any width exactly at 2 m, many of them, absurd sizes and masses."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pytest

from scanfit.likelihoods.candidate import Annihilation
from scanfit.likelihoods.relic_abundance.freeze_out import FreezeOut, freeze_out
from scanfit.likelihoods.relic_abundance.thermal_average import average, thermal_nodes
from scanfit.priors import FloatArray
from tests.reference import relic_reference

DEFAULT = "arxiv-1803.01038"


@dataclass(frozen=True)
class Adversary:
    """Constant, poles and square-root thresholds, times a power of the squared velocity."""

    mass: float
    poles: tuple[tuple[float, float], ...]
    thresholds: tuple[float, ...]
    constant: float
    peaks: tuple[float, ...]
    opened: tuple[float, ...]
    wave: int

    def total(self, s: FloatArray) -> FloatArray:
        out = np.full(s.shape, self.constant)
        for (mass, width), peak in zip(self.poles, self.peaks, strict=True):
            out += peak * (mass * width) ** 2 / ((s - mass**2) ** 2 + (mass * width) ** 2)
        for edge, strength in zip(self.thresholds, self.opened, strict=True):
            out += strength * np.sqrt(np.maximum(0.0, 1.0 - edge * edge / s))
        return np.asarray(out * np.maximum(0.0, 1.0 - 4.0 * self.mass**2 / s) ** self.wave)

    @property
    def annihilation(self) -> Annihilation:
        return Annihilation(("bb",), lambda s: self.total(s)[None, :], self.total, self.poles, self.thresholds)


def draw(rng: np.random.Generator, narrowest: float) -> Adversary:
    mass = 10.0 ** rng.uniform(-3.0, 6.0)
    poles: list[tuple[float, float]] = []
    for _ in range(rng.integers(0, 12)):
        place = {
            0: 2.0 * mass,
            1: 2.0 * mass * (1.0 + rng.choice([-1.0, 1.0]) * 10.0 ** rng.uniform(-14.0, -3.0)),
            2: 2.0 * mass * (1.0 + rng.choice([-1.0, 1.0]) * 10.0 ** rng.uniform(-3.0, -0.3)),
            3: mass * 10.0 ** rng.uniform(-2.0, 2.0),
        }[int(rng.integers(0, 4))]
        poles.append((float(place), float(place * 10.0 ** rng.uniform(narrowest, 0.0))))
    if len(poles) > 2:
        poles[1] = poles[0]  # twice the same
        poles[2] = (poles[0][0] * (1.0 + 1e-7), poles[0][1])
    edges = [2.0 * mass * (1.0 + rng.choice([0.0, 10.0 ** rng.uniform(-16.0, 1.5)])) for _ in range(rng.integers(0, 8))]
    size = 10.0 ** rng.uniform(-60.0, 20.0)
    return Adversary(
        mass,
        tuple(poles),
        tuple(float(edge) for edge in edges),
        float(size * 10.0 ** rng.uniform(-20.0, 0.0) * rng.integers(0, 2)),
        tuple((size * 10.0 ** rng.uniform(-10.0, 0.0, len(poles))).tolist()),
        tuple((size * 10.0 ** rng.uniform(-10.0, 0.0, len(edges))).tolist()),
        int(rng.integers(0, 3)),
    )


def relic(mass: float, annihilation: Annihilation) -> FreezeOut:
    return freeze_out(
        mass=mass, degrees_of_freedom=2, self_conjugate=True, annihilation=annihilation, equation_of_state=DEFAULT
    )


@pytest.mark.parametrize("count", [3000, pytest.param(100_000, marks=pytest.mark.soak)])
def test_nothing_breaks_it(count: int) -> None:
    """Finite and positive every time; a doubtful average says so."""
    rng = np.random.default_rng(1)
    for _ in range(count):
        adversary = draw(rng, narrowest=-14.0)
        result = relic(adversary.mass, adversary.annihilation)
        assert 0.0 < result.omega_h2 < math.inf
        assert 1.0 <= result.x_freeze_out < 300.0
        assert result.error < 0.011 or result.flags["thermal_average_uncertain"]


# The reference asks for 1e-10, which rounding of s beside a narrow pole does not always let it have.
@pytest.mark.filterwarnings("ignore::scipy.integrate.IntegrationWarning")
@pytest.mark.parametrize("count", [8, pytest.param(150, marks=pytest.mark.soak)])
def test_its_averages_are_right(count: int) -> None:
    """scipy's quadrature at freeze-out temperatures; below a relative width of 1e-9 rounding of s blurs a pole."""
    rng = np.random.default_rng(5)
    for _ in range(count):
        adversary = draw(rng, narrowest=-9.0)
        poles, edges = np.array(adversary.poles).reshape(-1, 2), np.array(adversary.thresholds)
        nodes, _, error = thermal_nodes(adversary.total, adversary.mass, poles, edges)
        for x in (8.0, 25.0):
            expected = relic_reference.thermal_average(
                lambda s, own=adversary: float(own.total(np.array([s]))[0]),
                adversary.mass,
                x,
                adversary.poles,
                adversary.thresholds,
            )
            assert average(nodes, x) == pytest.approx(expected, rel=max(5e-4, 2.0 * error))


@pytest.mark.parametrize(
    ("poles", "thresholds"),
    [
        (((125.0, 0.0),), ()), (((math.nan, 1.0),), ()), (((125.0, math.nan),), ()), (((math.inf, 1.0),), ()),
        (((-125.0, 1.0),), ()), (((125.0, -1.0),), ()), (((125.0, math.inf),), ()), (((1e300, 1.0),), ()),
        (((125.0, 1e-3),) * 40, ()), ((), (math.nan,)), ((), (math.inf,)), ((), (-3.0,)), ((), (121.0,) * 60),
    ],
)  # fmt: skip
def test_senseless_poles_and_thresholds_do_no_harm(
    poles: tuple[tuple[float, float], ...], thresholds: tuple[float, ...]
) -> None:
    """A model may declare nonsense at the edge of its parameters; what counts is the cross section."""

    def total(s: FloatArray) -> FloatArray:
        return np.full(s.shape, 2e-9)

    plain = relic(60.0, Annihilation(("bb",), lambda s: total(s)[None, :], total))
    odd = relic(60.0, Annihilation(("bb",), lambda s: total(s)[None, :], total, poles, thresholds))
    assert odd.omega_h2 == pytest.approx(plain.omega_h2, rel=1e-4)
