"""Find where the likelihood is high, several times independently: starting places for ensembles of walkers.

Differential evolution (J. Global Optimization 11, 341 (1997)), scheme rand/1/bin with a scale factor drawn anew for
every trial. A search is not driven to the maximum: it ends once its whole population lies within reach of its best
point, so that the population still spreads over what it found.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from scanfit.errors import ScanStopped
from scanfit.explorers.lockstep import LockstepPool
from scanfit.priors import FloatArray

_CROSSOVER: Final = 0.9
_SCALE: Final = (0.4, 1.0)
_RECRUITING_ROUNDS: Final = 30


@dataclass
class _Search:
    """One population, shape ``(size, dimension)``, with its log-likelihoods."""

    random: np.random.Generator
    points: FloatArray
    log_likelihoods: FloatArray


class GlobalSearch:
    """Several independent searches of the unit cube, in lockstep.

    Parameters
    ----------
    pool : LockstepPool
        Evaluates likelihoods.
    seeds : sequence of SeedSequence
        One for each search.
    size : int
        Points in each population; at least 4.
    dimension : int
        Dimension of the cube.
    generations_maximum : int
        Where a search ends that has not gathered its population.
    """

    def __init__(
        self,
        pool: LockstepPool,
        seeds: Sequence[np.random.SeedSequence],
        size: int,
        dimension: int,
        generations_maximum: int,
    ) -> None:
        self._pool = pool
        self._seeds = seeds
        self._shape = (size, dimension)
        self._generations_maximum = generations_maximum
        self._searches: list[_Search] = []
        self.generations = 0
        self.depth = 10.0 + 2.0 * dimension
        """Populations are gathered within this of the best log-likelihood; a posterior lies about dimension/2 below."""

    @property
    def finished(self) -> bool:
        """Whether every population is gathered, or the maximum of generations reached."""
        if self.generations >= self._generations_maximum:
            return True
        return self.generations > 0 and not any(self._scattered(search) for search in self._searches)

    @property
    def best(self) -> float:
        """Highest log-likelihood found."""
        return float(max(search.log_likelihoods.max() for search in self._searches))

    @property
    def points(self) -> FloatArray:
        """All populations, shape ``(searches * size, dimension)``."""
        return np.concatenate([search.points for search in self._searches])

    def advance(self, generations: int) -> None:
        """Evolve all populations by at most so many generations."""
        for _ in range(generations):
            if self.finished:
                return
            if self.generations == 0:
                self._searches = list(self._pool.map(self._begin, self._seeds))
            else:
                list(self._pool.map(self._evolve, [search for search in self._searches if self._scattered(search)]))
            self.generations += 1

    def populations(self) -> list[tuple[FloatArray, FloatArray]]:
        """Starting points, shape ``(size, dimension)``, and their log-likelihoods, for each search.

        Every population keeps what it found within `depth` of the best of all searches; places of other points are
        filled by recruits from such points of all searches.

        Raises
        ------
        ScanStopped
            If no point with a likelihood above zero was found.
        """
        best = self.best
        if best == -np.inf:
            tried = self.generations * self._shape[0] * len(self._searches)
            raise ScanStopped(
                f"ensemble: none of {tried} points tried by the global search has a likelihood above zero; "
                "narrow the priors or look at one such point"
            )
        good = self.points[np.concatenate([search.log_likelihoods for search in self._searches]) >= best - self.depth]
        list(self._pool.map(lambda search: self._recruit(search, good, best - self.depth), self._searches))
        return [(search.points, search.log_likelihoods) for search in self._searches]

    def _scattered(self, search: _Search) -> bool:
        """Whether part of the population is still out of reach of its best point."""
        best = search.log_likelihoods.max()
        return bool(best == -np.inf or search.log_likelihoods.min() < best - self.depth)

    def _begin(self, seed: np.random.SeedSequence) -> _Search:
        random = np.random.default_rng(seed)
        size, dimension = self._shape
        # A Latin hypercube: every parameter's range is covered evenly.
        points = (np.argsort(random.random((dimension, size)), axis=1).T + random.random((size, dimension))) / size
        return _Search(random, points, self._pool.log_likelihood_many(points))

    def _evolve(self, search: _Search) -> None:
        random, points = search.random, search.points
        size, dimension = points.shape
        others = np.argsort(random.random((size, size - 1)), axis=1)[:, :3]
        others += others >= np.arange(size)[:, np.newaxis]  # three others, none of them oneself
        scale = random.uniform(*_SCALE, (size, 1))
        mutants = points[others[:, 0]] + scale * (points[others[:, 1]] - points[others[:, 2]])
        crossed = random.random((size, dimension)) < _CROSSOVER
        crossed[np.arange(size), random.integers(dimension, size=size)] = True
        trials = reflected(np.where(crossed, mutants, points))
        found = self._pool.log_likelihood_many(trials)
        better = found >= search.log_likelihoods
        search.points = np.where(better[:, np.newaxis], trials, points)
        search.log_likelihoods = np.where(better, found, search.log_likelihoods)

    def _recruit(self, search: _Search, good: FloatArray, threshold: float) -> None:
        random = search.random
        for attempt in range(_RECRUITING_ROUNDS):
            places = np.flatnonzero(search.log_likelihoods < threshold)
            if len(places) == 0:
                return
            chosen = random.integers(len(good), size=(3, len(places)))
            # Ever closer to a good point, so that the last rounds succeed wherever the likelihood is continuous.
            scale = 0.5 ** (attempt + 1)
            noise = 1e-3 * scale * random.standard_normal((len(places), good.shape[1]))
            trials = reflected(good[chosen[0]] + scale * (good[chosen[1]] - good[chosen[2]]) + noise)
            found = self._pool.log_likelihood_many(trials)
            better = found > search.log_likelihoods[places]
            search.points[places[better]] = trials[better]
            search.log_likelihoods[places[better]] = found[better]


def reflected(points: FloatArray) -> FloatArray:
    """Points folded back into the unit cube at its faces."""
    folded = np.mod(np.abs(points), 2.0)
    return np.where(folded > 1.0, 2.0 - folded, folded)
