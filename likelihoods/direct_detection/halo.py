"""Velocities of dark matter at the Earth: the truncated Maxwellian and its shared nuisances.

What a rate needs is the mean inverse speed of the particles fast enough to give a recoil,

    eta(v_min) = int_{v > v_min} f(v + v_E) / v d^3v,

which is known in closed form for a Maxwellian that is cut sharply at the escape speed in the rest frame of the Galaxy.
Where an interaction grows with velocity the rate needs instead

    zeta(v_min) = int_{v > v_min} (v^2 - v_min^2) f(v + v_E) / v d^3v = 2 int_{v_min}^inf u eta(u) du,

since v^2 - v_min^2 is the squared velocity across the momentum transfer (derived here; eta's primitives are
elementary). Speeds are in km/s, eta in s/km and zeta in km/s throughout.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numba import njit

from scanfit.errors import PointError
from scanfit.priors import Fixed, FloatArray, LogNormal
from scanfit.space import Parameter


@dataclass(frozen=True)
class Halo:
    """Dark matter around the Earth.

    Parameters
    ----------
    local_density : float
        GeV/cm^3.
    most_probable_speed : float
        v_0 of the Maxwellian, sqrt(2) times its velocity dispersion in one direction, km/s.
    escape_speed : float
        Sharp cut of the Maxwellian in the frame of the Galaxy, km/s.
    earth_speed : float
        Speed of the Earth through the halo, km/s.

    Raises
    ------
    PointError
        Unless all four are positive and finite.
    """

    local_density: float = 0.3
    most_probable_speed: float = 238.0
    escape_speed: float = 544.0
    earth_speed: float = 252.0

    def __post_init__(self) -> None:
        for name, value in vars(self).items():
            if not 0.0 < value < math.inf:
                raise PointError(f"the halo needs a positive, finite {name} (here {value:g})")

    @classmethod
    def from_values(cls, values: Mapping[str, float]) -> Halo:
        """Pick the halo's four nuisances out of all parameter values."""
        return cls(
            values["local_density"],
            values["most_probable_speed"],
            values["escape_speed"],
            values["earth_speed"],
        )

    def mean_inverse_speed(self, minimum_speed: FloatArray) -> FloatArray:
        """Return eta(v_min) in s/km for `minimum_speed` in km/s, of the same shape."""
        speeds = np.asarray(minimum_speed, dtype=float)
        eta = np.empty(speeds.shape)
        _fill_mean_inverse_speed(
            speeds.ravel(), self.most_probable_speed, self.escape_speed, self.earth_speed, eta.reshape(-1)
        )
        return eta

    def mean_transverse_speed(self, minimum_speed: FloatArray) -> FloatArray:
        """Return zeta(v_min) in km/s for `minimum_speed` in km/s, of the same shape."""
        speeds = np.asarray(minimum_speed, dtype=float)
        norm, cut = maxwellian_norm(self.most_probable_speed, self.escape_speed)
        shape = (float(self.most_probable_speed), float(self.escape_speed), float(self.earth_speed), norm, cut)
        return np.array([mean_transverse_speed(speed, *shape) for speed in speeds.ravel()]).reshape(speeds.shape)


HALO_NUISANCES: Final = (
    Parameter(
        "local_density",
        "GeV/cm³",
        r"\rho_0",
        LogNormal(centre=0.4, factor=1.35),
        "nuisance",
        "dark-matter density at the Sun; default spans the range of measurements reviewed in arXiv:2012.11477 "
        "(as remembered); published limits fix it at 0.3 (arXiv:2105.00599)",
    ),
    Parameter(
        "most_probable_speed",
        "km/s",
        "v_0",
        Fixed(value=238.0),
        "nuisance",
        "most probable speed of the Maxwellian halo; default fixed at the convention of arXiv:2105.00599",
    ),
    Parameter(
        "escape_speed",
        "km/s",
        r"v_\mathrm{esc}",
        Fixed(value=544.0),
        "nuisance",
        "escape speed from the Galaxy at the Sun; default fixed at the convention of arXiv:2105.00599",
    ),
    Parameter(
        "earth_speed",
        "km/s",
        r"v_\mathrm{E}",
        Fixed(value=252.0),
        "nuisance",
        "speed of the Earth through the halo; default is the annual mean for the velocities of arXiv:2105.00599",
    ),
)
"""Parameters shared by every term that looks at the local halo. The speeds are fixed unless the run file frees them."""


_SUN: Final = np.array([11.1, 12.2, 7.3])
"""Velocity of the Sun against its surroundings in km/s, galactic coordinates, arXiv:2105.00599 (from memory)."""
_ORBIT: Final = 29.79 * np.array([[0.9931, 0.1170, -0.01032], [-0.0670, 0.4927, -0.8676]])
"""Velocity of the Earth around the Sun in km/s at the spring equinox and a quarter of a year later; Astropart. Phys. 6
(1996) 87 with the axes of arXiv:1312.1355 (from memory)."""
_EQUINOX_DAY: Final = 79.3
_DAYS: Final = 365.25


def earth_speed(day: FloatArray, rotation: float = 238.0) -> FloatArray:
    """Speed of the Earth through the halo in km/s on days of the year (1 January is 1)."""
    phase = 2.0 * math.pi * (np.asarray(day, dtype=float) - _EQUINOX_DAY) / _DAYS
    orbit = np.cos(phase)[..., None] * _ORBIT[0] + np.sin(phase)[..., None] * _ORBIT[1]
    return np.asarray(np.linalg.norm(_SUN + np.array([0.0, rotation, 0.0]) + orbit, axis=-1))


def earth_speed_excess(first_day: int, last_day: int) -> float:
    """Mean speed between two days of the year, both included, minus the annual mean, in km/s.

    A year's end lies in between when the first day is the larger. The rate is taken at the mean speed. Averaged over a
    whole year that is exact to 0.2 % above 15 GeV in xenon with a threshold of 4 keV, too low by 0.7 % at 10 GeV and by
    4 % at 7 GeV, where the rate is steep; over a season the errors are smaller.
    """
    last = last_day + (366 if last_day < first_day else 0)
    during = earth_speed(np.arange(first_day, last + 1, dtype=float))
    year = earth_speed(np.linspace(0.0, _DAYS, 1000, endpoint=False))
    return float(during.mean() - year.mean())


@njit(cache=True, fastmath=False, error_model="numpy")
def maxwellian_norm(most_probable_speed: float, escape_speed: float) -> tuple[float, float]:
    """Fraction N of the uncut Maxwellian inside the escape speed, and the density term of the cut, 2 e^{-z^2}/sqrt(pi).

    With z = v_esc/v_0, N = erf z - 2 z e^{-z^2}/sqrt(pi). Both depend on the halo alone.
    """
    z = escape_speed / most_probable_speed
    cut = 2.0 * math.exp(-z * z) / math.sqrt(math.pi)
    return math.erf(z) - z * cut, cut


@njit(cache=True, fastmath=False, error_model="numpy")
def mean_inverse_speed(
    minimum: float, most_probable: float, escape: float, earth: float, norm: float, cut: float
) -> float:
    """Return eta in s/km at one minimum speed; `norm` and `cut` come from `maxwellian_norm`."""
    if minimum >= escape + earth:
        return 0.0
    if minimum <= earth - escape:
        return 1.0 / earth  # even the slowest particle is fast enough
    below = math.erf((minimum - earth) / most_probable)
    if minimum < escape - earth:
        bracket = math.erf((minimum + earth) / most_probable) - below - 2.0 * earth * cut / most_probable
    else:
        bracket = math.erf(escape / most_probable) - below - (escape + earth - minimum) * cut / most_probable
    return max(bracket, 0.0) / (2.0 * norm * earth)


@njit(cache=True, fastmath=False, error_model="numpy")
def mean_transverse_speed(
    minimum: float, most_probable: float, escape: float, earth: float, norm: float, cut: float
) -> float:
    """Return zeta in km/s at one minimum speed; `norm` and `cut` come from `maxwellian_norm`."""
    end, middle = escape + earth, abs(escape - earth)
    if minimum >= end:
        return 0.0
    slope = cut / most_probable
    total = 0.0
    start = max(minimum, middle)
    for sign, u in ((1.0, end), (-1.0, start)):
        clipped = slope * ((escape + earth) * u * u / 2.0 - u * u * u / 3.0)
        total += sign * (math.erf(escape / most_probable) * u * u / 2.0 - _moment(u, earth, most_probable) - clipped)
    if minimum < middle:
        for sign, u in ((1.0, middle), (-1.0, minimum)):
            if earth > escape:  # every particle is faster than that: eta = 1/v_E
                total += sign * norm * u * u
            else:
                both = _moment(u, -earth, most_probable) - _moment(u, earth, most_probable)
                total += sign * (both - slope * earth * u * u)
    return max(total, 0.0) / (norm * earth)


@njit(cache=True, fastmath=False, error_model="numpy")
def _moment(u: float, centre: float, width: float) -> float:
    """Primitive of u erf((u - centre)/width)."""
    x = (u - centre) / width
    gauss = math.exp(-x * x) / math.sqrt(math.pi)
    return width * width * ((0.5 * x * x - 0.25) * math.erf(x) + 0.5 * x * gauss) + centre * width * (
        x * math.erf(x) + gauss
    )


@njit(cache=True, fastmath=False, error_model="numpy")
def _fill_mean_inverse_speed(
    minimum: FloatArray, most_probable: float, escape: float, earth: float, eta: FloatArray
) -> None:
    norm, cut = maxwellian_norm(most_probable, escape)
    for index in range(minimum.size):
        eta[index] = mean_inverse_speed(minimum[index], most_probable, escape, earth, norm, cut)
