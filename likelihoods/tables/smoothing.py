"""Smooth counts over a grid of masses and energies where single bins hold too few events.

The logarithm of the expected counts is taken to vary slowly: second differences along the masses and third differences
along log energy are normal with variances that the counts themselves choose, by the marginal likelihood in Laplace's
approximation (the method of penalised likelihoods, Stat. Sci. 11 (1996) 89). Masses count by their place in the grid,
which is dense where spectra change fast.
"""

from __future__ import annotations

import itertools
import math
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_factor, cho_solve

Array = NDArray[np.float64]
STIFFNESS_OF_MASS: Final = tuple(10.0 ** np.arange(-1.0, 5.1, 1.0))
STIFFNESS_OF_ENERGY: Final = tuple(10.0 ** np.arange(-1.0, 5.1, 1.0))
_ORDER_OF_MASS: Final = 2
_ORDER_OF_ENERGY: Final = 3
_UPDATES: Final = 60


def smooth(counts: Array, events: Array) -> tuple[Array, Array, tuple[float, float]]:
    """Smoothed mean counts per event.

    Parameters
    ----------
    counts : ndarray, shape (n_masses, n_bins)
        Counts, Poisson distributed to good approximation.
    events : ndarray, shape (n_masses,)
        Events that they come from.

    Returns
    -------
    rate : ndarray, shape (n_masses, n_bins)
        Counts per event.
    covariance : ndarray, shape (n_masses, n_bins, n_bins)
        Of the rates of one mass.
    stiffness : tuple of float
        Inverse variances of the differences along mass and energy that were chosen.
    """
    found = [(*_fit(counts, events, pair), pair) for pair in itertools.product(STIFFNESS_OF_MASS, STIFFNESS_OF_ENERGY)]
    _, log_rate, covariance, pair = max(found, key=lambda fit: fit[0])
    rate = np.exp(log_rate)
    size = counts.shape[1]
    blocks = np.array([covariance[k : k + size, k : k + size] for k in range(0, counts.size, size)])
    return rate, blocks * rate[:, :, None] * rate[:, None, :], pair


def _fit(counts: Array, events: Array, stiffness: tuple[float, float]) -> tuple[float, Array, Array]:
    """Log marginal likelihood up to a constant, log rates, and their covariance over all bins."""
    penalty, log_determinant = _penalty(counts.shape, stiffness)
    exposure = np.repeat(events, counts.shape[1])
    flat = counts.ravel()
    log_rate = np.log((flat + 0.5) / (exposure + 1.0))

    def value(at: Array) -> float:
        return float(flat @ at - exposure @ np.exp(at) - 0.5 * at @ penalty @ at)

    best = value(log_rate)
    for _ in range(_UPDATES):
        expected = exposure * np.exp(log_rate)
        factor = cho_factor(penalty + np.diag(expected + 1e-9))
        step = cho_solve(factor, flat - expected - penalty @ log_rate)
        size = 1.0
        while (tried := value(log_rate + size * step)) < best - 1e-9 and size > 1e-4:
            size *= 0.5
        log_rate = log_rate + size * step
        if tried - best < 1e-6:
            break
        best = tried
    hessian = penalty + np.diag(exposure * np.exp(log_rate) + 1e-9)
    factor = cho_factor(hessian)
    evidence = value(log_rate) + 0.5 * log_determinant - float(np.log(np.diag(factor[0])).sum())
    return evidence, log_rate.reshape(counts.shape), cho_solve(factor, np.eye(flat.size))


def _penalty(shape: tuple[int, ...], stiffness: tuple[float, float]) -> tuple[Array, float]:
    """Matrix of the penalty and the logarithm of its determinant outside its null space."""
    along = [
        np.diff(np.eye(size), order, axis=0)
        for size, order in zip(shape, (_ORDER_OF_MASS, _ORDER_OF_ENERGY), strict=True)
    ]
    by_mass, by_energy = (
        strength * difference.T @ difference for strength, difference in zip(stiffness, along, strict=True)
    )
    matrix = np.kron(by_mass, np.eye(shape[1])) + np.kron(np.eye(shape[0]), by_energy)
    values = np.add.outer(np.linalg.eigvalsh(by_mass), np.linalg.eigvalsh(by_energy)).ravel()
    values = np.sort(values)[_ORDER_OF_MASS * _ORDER_OF_ENERGY :]
    return matrix, math.fsum(np.log(values))
