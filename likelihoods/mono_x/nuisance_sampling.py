"""Compiled kernel that integrates over the nuisances of `SimplifiedLikelihood` where no expansion holds."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from numba import njit

from scanfit.priors import FloatArray

from .nuisance_removal import cost, derivatives, expectations, factorise, solve_upper

SAMPLED_WIDTH: Final = 1.25
"""Width of the sampling density around the peak, over that of the Gaussian approximation."""
SAMPLED_PRIOR: Final = 0.25
"""Share of points drawn from the nuisances' own density: it bounds the weights where a background is held at zero."""


@njit(cache=True, error_model="numpy")
def sampled_volume(
    observed: FloatArray,
    signal: FloatArray,
    spread: FloatArray,
    constant: FloatArray,
    slope: FloatArray,
    curvature: FloatArray,
    lower: FloatArray,
    peak: FloatArray,
    nodes: FloatArray,
) -> tuple[float, float]:
    """Integrate exp(-f) over the normalised density of z by importance sampling on fixed points.

    Parameters
    ----------
    observed, signal, spread, constant, slope, curvature, lower : ndarray
        As for `maximise`.
    peak : ndarray, shape (n + 1,)
        Where f is smallest.
    nodes : ndarray, shape (n_nodes, n + 1)
        Quasi-random standard normal variates. The first `SAMPLED_PRIOR` of them are taken as they are, the others are
        moved to the peak and stretched; all are weighted with the density of the mixture.

    Returns
    -------
    log_volume : float
        ln of the integral of exp(f(peak) - f), with the normalised density of z.
    effective : float
        Effective number of points.
    """
    n = observed.size
    now = np.empty((4, n))
    gradient, hessian = np.empty(n + 1), np.empty((n + 1, n + 1))
    expectations(signal, spread, constant, slope, curvature, lower, peak, now)
    lowest = cost(observed, now, peak)
    # Where a background is held at zero the likelihood bends sharply at its peak, and is flat beside it.
    now[2] = 0.0
    derivatives(observed, spread, lower, peak, now, False, gradient, hessian)
    factorise(hessian)
    log_determinant = 0.0
    for k in range(n + 1):
        log_determinant += math.log(hessian[k, k] / SAMPLED_WIDTH)
    from_prior = int(SAMPLED_PRIOR * nodes.shape[0])
    z, step = np.empty(n + 1), np.empty(n + 1)
    total = squares = 0.0
    for index in range(nodes.shape[0]):
        if index < from_prior:
            z[:] = nodes[index]
        else:
            step[:] = nodes[index]
            solve_upper(hessian, step)
            for k in range(n + 1):
                z[k] = peak[k] + SAMPLED_WIDTH * step[k]
        distance = length = 0.0
        for k in range(n + 1):
            along = 0.0
            for m in range(k, n + 1):
                along += hessian[m, k] * (z[m] - peak[m])
            distance += along**2
            length += z[k] ** 2
        expectations(signal, spread, constant, slope, curvature, lower, z, now)
        # Both sampling densities relative to that of z, which is part of the cost.
        near = math.exp(min(log_determinant - 0.5 * distance / SAMPLED_WIDTH**2 + 0.5 * length, 700.0))
        weight = math.exp(lowest - cost(observed, now, z) + 0.5 * length) / (
            SAMPLED_PRIOR + (1.0 - SAMPLED_PRIOR) * near
        )
        total += weight
        squares += weight**2
    return math.log(total / nodes.shape[0]), total**2 / squares
