"""Photons per annihilation: the shipped table, its interpolation, and the closed forms that need no table.

The table holds N(> x), the mean number of photons per annihilation with energy above x m, for twelve final
states on a grid of masses; `tables/make_photon_spectra.py` makes it and says how. Between its points N(> x)
runs through a monotone cubic in ln x and a straight line in ln m, so counts in any energy range are never
negative.

How good N(> x) is. *Simulation*, median over masses of the stored standard errors, in per cent at x = 0.001, 0.2, 0.3
and 0.5: light and charm quarks 0.3, 1, 1.5, 3; bottom 0.2, 1.6, 3, 6; gluons 0.2, 2.4, 4, 9; tops 0.2, 3.3, 5, 11;
WW, ZZ, hh, Zh 0.2, 2 to 3, 3 to 4, 5 to 7; leptons 0.6, 0.7, 0.9, 1.4 or less. Above 10 TeV and next to thresholds
they are two to three times larger. *Interpolation and all*, on eighteen masses kept out of the table: at most 2.5 %
for 1e-5 < x < 0.05 and 4.5 % at x = 0.1; above, deviations of up to 8 % at x = 0.2 (Zh at 115 GeV 10 %, hh at
160 GeV 16 %) are 1.4 times what the errors of table and check together explain. So the aim of 5 % is met up to
x = 0.1; up to x = 0.5 the stored errors meet it for leptons, light and charm quarks only. Of the photons of bottom
quarks one in forty lies above x = 0.1, one in three hundred above 0.2. Checks: tests/reference/test_gamma_spectra.py.

Between the kinematic threshold of a channel and the first simulated mass (bb: 4.18 to 5.5 GeV, heavy bosons and
tops: 0.3 % above threshold) the spectrum of the first simulated mass is used in x. Below threshold a channel
makes no photons. Down and strange quarks take the spectrum of up quarks.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache, cached_property
from importlib.resources import files
from typing import Any, Final

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.interpolate import PchipInterpolator

from scanfit.errors import PointError
from scanfit.priors import FloatArray

from .. import tables
from ..constants import (
    BOTTOM_MASS,
    FINE_STRUCTURE,
    HIGGS_MASS,
    TAU_MASS,
    TOP_MASS,
    W_MASS,
    Z_MASS,
)

TABLE_CHANNELS: Final = ("uu", "cc", "bb", "tt", "gg", "ee", "mumu", "tautau", "WW", "ZZ", "hh", "Zh")
TABLE_COLUMN: Final[Mapping[str, int]] = {
    **{name: column for column, name in enumerate(TABLE_CHANNELS)},
    "dd": 0,
    "ss": 0,
}
"""Column of the table by name of the final state."""
PHOTONLESS: Final = frozenset({"nunu", "dark"})
LINE: Final = "gammagamma"
LINE_PHOTONS: Final = 2.0
THRESHOLDS: Final[Mapping[str, float]] = {
    "bb": BOTTOM_MASS, "tt": TOP_MASS, "tautau": TAU_MASS, "WW": W_MASS, "ZZ": Z_MASS, "hh": HIGGS_MASS,
    "Zh": 0.5 * (Z_MASS + HIGGS_MASS),
}  # fmt: skip
"""Dark-matter mass in GeV below which a channel makes no photons; the others are open wherever the table reaches."""


@dataclass(frozen=True)
class PhotonTable:
    """The table as the kernels want it.

    Parameters
    ----------
    ln_x : ndarray, shape (n_x,)
        Uniform grid of ln(E/m), ending at 0.
    ln_mass : ndarray, shape (n_channels, n_masses)
        Simulated masses (ln of GeV) per channel, ascending; rows are padded with their last value.
    rows : ndarray of int, shape (n_channels,)
        Number of masses per channel.
    ln_threshold : ndarray, shape (n_channels,)
        Where a channel opens.
    above, slope : ndarray, shape (n_channels, n_masses, n_x)
        N(> x) and its derivative with respect to ln x, limited so that the cubic between them is monotone.
    metadata : mapping
        How the table was made.
    """

    ln_x: FloatArray
    ln_mass: FloatArray
    rows: NDArray[np.int64]
    ln_threshold: FloatArray
    above: FloatArray
    slope: FloatArray
    metadata: Mapping[str, Any]

    @cached_property
    def mass_range(self) -> tuple[float, float]:
        """Lowest and highest mass in GeV."""
        return float(np.exp(self.ln_mass.min())), float(np.exp(self.ln_mass.max()))

    def photons_above(self, weights: FloatArray, mass: float, energies: FloatArray) -> FloatArray:
        """Photons per annihilation above each energy, summed over channels.

        Parameters
        ----------
        weights : ndarray, shape (n_channels,)
            Weight of each of `TABLE_CHANNELS`: branching fractions, or cross sections.
        mass : float
            GeV.
        energies : ndarray, shape (n,)
            GeV. Photons below 1e-6 of the mass are not in the table and count as absent.

        Returns
        -------
        ndarray, shape (n,)

        Raises
        ------
        PointError
            If the mass lies outside the table and any weight is not zero.
        """
        low, high = self.mass_range
        if not low * (1.0 - 1e-9) <= mass <= high * (1.0 + 1e-9):
            if not weights.any():
                return np.zeros_like(energies)
            raise PointError(
                f"photon spectra are tabulated for masses from {low:g} to {high:g} GeV, not for {mass:.6g} GeV"
            )
        return photons_above(  # type: ignore[no-any-return]  # numba has no types
            np.log(energies / mass), math.log(mass), weights, self.ln_x, self.ln_mass, self.rows, self.ln_threshold,
            self.above, self.slope,
        )  # fmt: skip


@cache
def photon_table() -> PhotonTable:
    """The table shipped with the package, read once."""
    with files(tables).joinpath("photon_spectra.npz").open("rb") as file:
        return build_table(dict(np.load(file)))


def build_table(arrays: Mapping[str, NDArray[Any]]) -> PhotonTable:
    """Turn the arrays of the file into cumulative spectra."""
    ln_x = np.asarray(arrays["log10_x_edges"], dtype=float) * math.log(10.0)
    rows = np.array([arrays[f"{name}_mass"].size for name in TABLE_CHANNELS])
    shape = (len(TABLE_CHANNELS), int(rows.max()))
    ln_mass = np.zeros(shape)
    above, slope = np.zeros((*shape, ln_x.size)), np.zeros((*shape, ln_x.size))
    for column, name in enumerate(TABLE_CHANNELS):
        masses = np.log(np.asarray(arrays[f"{name}_mass"], dtype=float))
        ln_mass[column] = masses[-1]
        ln_mass[column, : masses.size] = masses
        photons = np.asarray(arrays[f"{name}_photons"], dtype=float)
        counted = above[column, : masses.size]
        counted[:, :-1] = photons[:, ::-1].cumsum(axis=1)[:, ::-1]
        slope[column, : masses.size] = PchipInterpolator(ln_x, counted, axis=1).derivative()(ln_x)
    thresholds = np.log([THRESHOLDS.get(name, 1e-3) for name in TABLE_CHANNELS])
    return PhotonTable(ln_x, ln_mass, rows, thresholds, above, slope, json.loads(str(arrays["metadata"])))


@njit(cache=True, fastmath=False, error_model="numpy")
def photons_above(  # type: ignore[no-untyped-def]
    ln_x_wanted, ln_m, weights, ln_x, ln_mass, rows, ln_threshold, above, slope
):
    """Weighted sum of N(> x) over channels; arguments as in `PhotonTable`, `ln_x_wanted` = ln(E/m), shape (n,)."""
    size = ln_x.size
    value, tangent = np.zeros(size), np.zeros(size)
    for c in range(weights.size):
        if weights[c] == 0.0 or ln_m < ln_threshold[c]:
            continue
        k = min(max(np.searchsorted(ln_mass[c, : rows[c]], ln_m) - 1, 0), rows[c] - 2)
        t = min(max((ln_m - ln_mass[c, k]) / (ln_mass[c, k + 1] - ln_mass[c, k]), 0.0), 1.0)
        low, high = weights[c] * (1.0 - t), weights[c] * t
        for i in range(size):
            value[i] += low * above[c, k, i] + high * above[c, k + 1, i]
            tangent[i] += low * slope[c, k, i] + high * slope[c, k + 1, i]
    step = (ln_x[-1] - ln_x[0]) / (size - 1)
    result = np.zeros(ln_x_wanted.size)
    for i in range(ln_x_wanted.size):
        position = (ln_x_wanted[i] - ln_x[0]) / step
        if position >= size - 1:
            continue
        if position <= 0.0:
            result[i] = value[0]
            continue
        k = int(position)
        t = position - k
        u = 1.0 - t
        result[i] = (
            u * u * ((1.0 + 2.0 * t) * value[k] + t * step * tangent[k])
            + t * t * ((3.0 - 2.0 * t) * value[k + 1] - u * step * tangent[k + 1])
        )  # fmt: skip
    return result


def final_state_radiation(x: FloatArray, mass: float, lepton_mass: float) -> FloatArray:
    """dN/dx of photons radiated by a pair of light leptons, to leading logarithm.

    (alpha/pi) (1 + (1-x)^2)/x [ln(4 m^2 (1-x)/m_l^2) - 1], the textbook collinear radiator for both leptons;
    zero where the logarithm would be negative. No table is needed for it, and it checks the one for ee and
    mumu.
    """
    logarithm = np.log(np.maximum(4.0 * mass**2 * (1.0 - x) / lepton_mass**2, 1.0)) - 1.0
    return FINE_STRUCTURE / math.pi * (1.0 + (1.0 - x) ** 2) / x * np.maximum(logarithm, 0.0)


def box_edges(mass: float, mediator_mass: float) -> tuple[float, float]:
    """Energies in GeV between which the four photons of chi chi -> phi phi -> 4 gamma are spread evenly."""
    if mediator_mass >= mass:
        raise ValueError("the mediator must be lighter than the candidate")
    spread = math.sqrt(1.0 - (mediator_mass / mass) ** 2)
    return 0.5 * mass * (1.0 - spread), 0.5 * mass * (1.0 + spread)
