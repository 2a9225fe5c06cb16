"""A tabulated distribution of dark-matter speeds at the Earth, in place of the Maxwellian.

The file has two columns, speed in km/s in the frame of the Earth and density per km/s; lines that begin with # and one
header line are skipped. Densities are joined by straight lines, vanish outside the table and are normalised to one.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from .columns import read_columns

_POINTS: Final = 4001


@dataclass(frozen=True)
class VelocityTable:
    """Velocity integrals on a uniform grid of minimum speeds from zero.

    Parameters
    ----------
    integrals : ndarray, shape (2, n)
        eta in s/km and zeta in km/s, see `halo`.
    step : float
        Spacing of the grid in km/s.
    """

    integrals: FloatArray
    step: float


def velocity_table(speeds: FloatArray, densities: FloatArray) -> VelocityTable:
    """Integrate a speed distribution.

    Parameters
    ----------
    speeds : ndarray, shape (n,)
        km/s in the frame of the Earth, not negative, ascending.
    densities : ndarray, shape (n,)
        Of particles per speed; any normalisation.
    """
    grid = np.linspace(0.0, float(speeds[-1]), _POINTS)
    step = float(grid[1])
    middle = grid[:-1] + 0.5 * step  # midpoints: the integrand f/v is never asked at zero speed
    mass = np.interp(middle, speeds, densities, left=0.0, right=0.0) * step
    mass /= mass.sum()
    eta = _above(mass / middle)
    zeta = _above(mass * middle) - grid**2 * eta
    return VelocityTable(np.vstack([eta, np.maximum(zeta, 0.0)]), step)


def read_velocity_table(path: Path) -> VelocityTable:
    """Read a table from a file.

    Raises
    ------
    InputError
        If it cannot be read, speeds do not ascend from zero or above, or densities are negative or all zero.
    """
    speeds, densities = (np.array(column) for column in read_columns(path, "velocities", "speed and density"))
    rule = None
    if speeds.size < 2 or speeds[0] < 0.0 or np.any(np.diff(speeds) <= 0.0):
        rule = "speeds must ascend, from zero or above, in two lines at least"
    elif not np.all(np.isfinite(densities)) or densities.min() < 0.0 or densities.max() == 0.0:
        rule = "densities must be finite and not negative, and not all zero"
    if rule:
        raise InputError([Problem("velocities", rule)], str(path))
    return velocity_table(speeds, densities)


def _above(parts: FloatArray) -> FloatArray:
    """Sum of all parts above each grid point."""
    return np.concatenate([np.cumsum(parts[::-1])[::-1], [0.0]])
