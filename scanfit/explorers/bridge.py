"""Evidence from posterior draws by bridge sampling (Statistica Sinica 6, 831 (1996); tutorial arXiv:1703.05984).

A density that can be both drawn from and written down is laid over one part of the draws; the evidence is the ratio of
normalisations between it and the posterior, estimated from its own draws and the other part of the posterior's.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.special import logsumexp

from scanfit.contracts import Evaluate
from scanfit.priors import FloatArray

_KERNELS_MAXIMUM: Final = 300
_WIDENING: Final = 1.5
_ITERATIONS: Final = 200


class KernelMixture:
    """An equal mixture of Gaussians, each as wide and as oriented as the draws around its centre.

    Parameters
    ----------
    draws : ndarray, shape (n, dimension)
        What to lay it over.
    random : Generator
        Chooses the centres.
    """

    def __init__(self, draws: FloatArray, random: np.random.Generator) -> None:
        count, dimension = draws.shape
        kernels = min(_KERNELS_MAXIMUM, count)
        neighbours = min(count, max(4 * dimension, 8 * count // kernels))
        whole = np.atleast_2d(np.cov(draws.T))
        whiten = np.linalg.inv(np.linalg.cholesky(whole))
        white = draws @ whiten.T
        self.centres = draws[random.permutation(count)[:kernels]]
        self._roots = np.empty((kernels, dimension, dimension))
        for kernel, centre in enumerate(self.centres @ whiten.T):
            squares = np.square(white - centre).sum(axis=1)
            near = draws[np.argpartition(squares, neighbours - 1)[:neighbours]] - self.centres[kernel]
            local = near.T @ near / neighbours + 1e-6 * whole
            self._roots[kernel] = _WIDENING * np.linalg.cholesky(local)
        self._inverse_roots = np.linalg.inv(self._roots)
        logs = np.log(np.diagonal(self._roots, axis1=1, axis2=2)).sum(axis=1)
        self._log_norms = -logs - 0.5 * dimension * np.log(2.0 * np.pi) - np.log(kernels)

    def draw(self, count: int, random: np.random.Generator) -> FloatArray:
        """Draws, shape ``(count, dimension)``; they may lie outside the cube."""
        kernels = random.integers(len(self.centres), size=count)
        noise = random.standard_normal((count, self.centres.shape[1]))
        return np.asarray(self.centres[kernels] + np.einsum("nij,nj->ni", self._roots[kernels], noise))

    def log_density(self, points: FloatArray) -> FloatArray:
        """Log of the density, shape ``(n, dimension)`` to ``(n,)``."""
        logs = np.full(len(points), -np.inf)
        for centre, inverse_root, log_norm in zip(self.centres, self._inverse_roots, self._log_norms, strict=True):
            squares = np.square((points - centre) @ inverse_root.T).sum(axis=1)
            logs = np.logaddexp(logs, log_norm - 0.5 * squares)
        return logs


@dataclass(frozen=True)
class Evidence:
    """Log of the evidence and its standard error."""

    log_evidence: float
    error: float


def bridge(
    fitted: FloatArray,
    draws: FloatArray,
    log_likelihoods: FloatArray,
    independent: float,
    evaluate: Evaluate,
    points: int,
    random: np.random.Generator,
) -> Evidence:
    """Estimate the evidence.

    Parameters
    ----------
    fitted : ndarray, shape (m, dimension)
        Posterior draws over which the mixture is laid.
    draws : ndarray, shape (n, dimension)
        Other posterior draws.
    log_likelihoods : ndarray, shape (n,)
        Of `draws`.
    independent : float
        To how many independent ones the `draws` amount.
    evaluate : Evaluate
        Log-likelihoods of points of the cube.
    points : int
        Draws of the mixture, of which those in the cube are evaluated.
    random : Generator
        Source of all randomness.

    Returns
    -------
    Evidence
        With the error of arXiv:1703.05984, appendix A, for this mixture and these draws.
    """
    mixture = KernelMixture(fitted, random)
    trials = mixture.draw(points, random)
    inside = np.all((trials >= 0.0) & (trials <= 1.0), axis=1)
    trial_likelihoods = np.full(points, -np.inf)
    trial_likelihoods[inside] = evaluate(trials[inside])
    at_draws = log_likelihoods - mixture.log_density(draws)  # log of posterior over mixture, unnormalised
    at_trials = trial_likelihoods - mixture.log_density(trials)
    log_share, log_rest = np.log(independent / (independent + points)), np.log(points / (independent + points))
    log_evidence = float(np.median(at_draws))
    for _ in range(_ITERATIONS):
        upper = at_trials - np.logaddexp(log_share + at_trials, log_rest + log_evidence)
        lower = -np.logaddexp(log_share + at_draws, log_rest + log_evidence)
        before = log_evidence
        log_evidence = float(_log_mean(upper) - _log_mean(lower))
        if abs(log_evidence - before) < 1e-10:
            break
    variance = _relative_variance(upper) / points + _relative_variance(lower) / independent
    return Evidence(log_evidence, float(np.sqrt(variance)))


def _log_mean(logs: FloatArray) -> float:
    return float(logsumexp(logs) - np.log(len(logs)))


def _relative_variance(logs: FloatArray) -> float:
    """Variance over squared mean of positive numbers given by their logs."""
    values = np.exp(logs - logs.max())
    return float(values.var() / values.mean() ** 2)
