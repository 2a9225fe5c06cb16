"""Posteriors on the unit cube whose evidence and moments are known from outside the samplers.

Every problem is a log-likelihood of many points at once. Moments are those of the unit cube's coordinates.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.special import gammaln

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Problem:
    """A log-likelihood with its exact answers.

    `mean` and `deviation` are marginal means and standard deviations, shape ``(dimension,)``.
    """

    name: str
    dimension: int
    log_likelihood: Callable[[Array], Array]
    log_evidence: float
    mean: Array
    deviation: Array


def correlated_gaussian(dimension: int, correlation: float = 0.7, deviation: float = 0.05) -> Problem:
    """A normalised Gaussian with equal correlations, 8 deviations or more from the faces: evidence 1 (exact)."""
    mean = np.linspace(0.4, 0.6, dimension)
    covariance = deviation**2 * ((1.0 - correlation) * np.eye(dimension) + correlation)
    precision = np.linalg.inv(covariance)
    constant = -0.5 * (dimension * np.log(2.0 * np.pi) + np.linalg.slogdet(covariance)[1])

    def log_likelihood(points: Array) -> Array:
        away = points - mean
        return np.asarray(constant - 0.5 * np.einsum("ni,ij,nj->n", away, precision, away))

    return Problem(f"gaussian-{dimension}", dimension, log_likelihood, 0.0, mean, np.full(dimension, deviation))


def gaussian_shells(dimension: int) -> Problem:
    """Two shells of radius 2 and width 0.1 at +-3.5 on the first axis of [-6, 6]^d (arXiv:0809.3437).

    Evidence and radial moment by adaptive quadrature of the radial integral; the shells overlap nowhere that matters.
    """
    radius, width, offset, half = 2.0, 0.1, 3.5, 6.0
    centres = np.zeros((2, dimension))
    centres[:, 0] = -offset, offset
    constant = -0.5 * np.log(2.0 * np.pi * width**2)

    def log_likelihood(points: Array) -> Array:
        x = half * (2.0 * points - 1.0)
        distances = np.linalg.norm(x[:, np.newaxis, :] - centres, axis=2)
        exponents = constant - 0.5 * ((distances - radius) / width) ** 2
        return np.asarray(np.logaddexp(exponents[:, 0], exponents[:, 1]))

    def radial(power: int) -> float:
        def density(r: float) -> float:
            return float(r ** (dimension - 1 + power) * np.exp(constant - 0.5 * ((r - radius) / width) ** 2))

        return float(quad(density, radius - 10 * width, radius + 10 * width, epsabs=0.0, epsrel=1e-10)[0])

    # Surface of the unit sphere, 2 pi^(d/2) / Gamma(d/2), times two shells, over the volume of the box.
    log_surface = np.log(2.0) + 0.5 * dimension * np.log(np.pi) - gammaln(0.5 * dimension)
    log_evidence = np.log(2.0) + log_surface + np.log(radial(0)) - dimension * np.log(2.0 * half)
    mean_square = radial(2) / radial(0) / dimension  # of any coordinate about the shell's centre
    deviation = np.full(dimension, np.sqrt(mean_square))
    deviation[0] = np.sqrt(mean_square + offset**2)
    return Problem(
        f"shells-{dimension}",
        dimension,
        log_likelihood,
        float(log_evidence),
        np.full(dimension, 0.5),
        deviation / (2.0 * half),
    )


def rosenbrock_chain(dimension: int, cells: int = 2001) -> Problem:
    """exp(-sum 100 (x_{i+1} - x_i^2)^2 + (1 - x_i)^2) on [-5, 5]^d.

    Evidence and marginals by transfer-matrix quadrature: the chain is summed one variable at a time on a grid, forward
    and backward. The link is a Gaussian in x_{i+1} of width 0.07 about x_i^2; 2001 cells give ln(evidence) to 2e-8.
    """
    half = 5.0
    grid = np.linspace(-half, half, cells)
    spacing = grid[1] - grid[0]
    weight = np.full(cells, spacing)
    weight[[0, -1]] *= 0.5
    link = np.exp(-100.0 * (grid[np.newaxis, :] - grid[:, np.newaxis] ** 2) ** 2 - (1.0 - grid[:, np.newaxis]) ** 2)
    backward = [np.ones(cells)]  # sum over everything after the variable, last variable first
    for _ in range(dimension - 1):
        backward.append(link @ (weight * backward[-1]))
    backward.reverse()
    forward = [np.ones(cells)]  # sum over everything before the variable
    for _ in range(dimension - 1):
        forward.append((weight * forward[-1]) @ link)
    total = float(weight @ backward[0])
    mean, deviation = np.empty(dimension), np.empty(dimension)
    for place in range(dimension):
        density = weight * forward[place] * backward[place] / total
        mean[place] = density @ grid
        deviation[place] = np.sqrt(density @ (grid - mean[place]) ** 2)

    def log_likelihood(points: Array) -> Array:
        x = half * (2.0 * points - 1.0)
        terms = 100.0 * (x[:, 1:] - x[:, :-1] ** 2) ** 2 + (1.0 - x[:, :-1]) ** 2
        return -np.asarray(terms.sum(axis=1))

    return Problem(
        f"rosenbrock-{dimension}",
        dimension,
        log_likelihood,
        float(np.log(total) - dimension * np.log(2.0 * half)),
        0.5 + mean / (2.0 * half),
        deviation / (2.0 * half),
    )


def two_modes(dimension: int, share: float = 0.8, deviation: float = 0.01) -> Problem:
    """Two round Gaussians at 0.25 and 0.75 on every axis, the first with `share` of the weight: evidence 1 (exact)."""
    places = np.array([0.25, 0.75])
    logs = np.log([share, 1.0 - share]) - dimension * np.log(np.sqrt(2.0 * np.pi) * deviation)

    def log_likelihood(points: Array) -> Array:
        squares = np.square(points[:, np.newaxis, :] - places[:, np.newaxis]).sum(axis=2)
        exponents = logs - 0.5 * squares / deviation**2
        return np.asarray(np.logaddexp(exponents[:, 0], exponents[:, 1]))

    mean = share * places[0] + (1.0 - share) * places[1]
    spread = np.sqrt(deviation**2 + share * (1.0 - share) * (places[1] - places[0]) ** 2)
    return Problem(
        f"two-modes-{dimension}", dimension, log_likelihood, 0.0, np.full(dimension, mean), np.full(dimension, spread)
    )
