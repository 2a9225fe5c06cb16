"""Angular averages of exchanged propagators against a general-purpose integrator."""

from __future__ import annotations

import math

import pytest
from scipy.integrate import quad

from scanfit.likelihoods.models.crossed_channels import crossed_averages


@pytest.mark.parametrize(
    ("s", "incoming", "outgoing"),
    [
        (5.0, 1.0, 0.5),
        (4.0, 1.0, 0.5),
        (4.0 + 1e-7, 1.0, 0.9),
        (400.0, 1.0, 0.01),
        (5.0, 0.3, 1.0),
        (4.0 + 1e-9, 0.5, 1.0),
    ],
)
def test_averages(s: float, incoming: float, outgoing: float) -> None:
    a = 0.5 * s - outgoing**2
    b = 0.5 * s * math.sqrt(max(0.0, (1.0 - 4.0 * incoming**2 / s) * (1.0 - 4.0 * outgoing**2 / s)))
    for power, value in enumerate(crossed_averages(s, incoming, outgoing), start=1):
        expected = quad(lambda c, n=power: (a**2 - (b * c) ** 2) ** -n, 0.0, 1.0, epsrel=1e-11)[0]
        assert value == pytest.approx(expected, rel=1e-8)


def test_series_meets_logarithm() -> None:
    """Around the switch between the two forms, velocities near 1e-3, nothing jumps."""
    values = [crossed_averages(4.0 * (1.0 + velocity**2), 1.0, 0.2)[0] for velocity in (0.99e-3, 1.01e-3, 1.03e-3)]
    assert values[1] - values[0] == pytest.approx(values[2] - values[1], rel=0.05)
