"""Velocities of dark matter at the Earth: the truncated Maxwellian and its shared nuisances.

What a rate needs is the mean inverse speed of the particles fast enough to give a recoil,

    eta(v_min) = int_{v > v_min} f(v + v_E) / v d^3v,

which is known in closed form for a Maxwellian that is cut sharply at the escape speed in the rest frame of the Galaxy.
Speeds are in km/s and eta in s/km throughout.
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
def _fill_mean_inverse_speed(
    minimum: FloatArray, most_probable: float, escape: float, earth: float, eta: FloatArray
) -> None:
    norm, cut = maxwellian_norm(most_probable, escape)
    for index in range(minimum.size):
        eta[index] = mean_inverse_speed(minimum[index], most_probable, escape, earth, norm, cut)
