"""How nested sampling finds a new live point above the present likelihood.

Uniform draws within the ellipsoids around the live points are exact where the ellipsoids cover the region above the
likelihood threshold; chains that start at a live point (random walks, slices) leave that to the chain, and are right
only if they forget where they started. `Memory` measures whether they do.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from typing import Any, Literal, TypeVar

import numpy as np
from dynesty.bounding import MultiEllipsoid
from dynesty.internal_samplers import InternalSampler, RSliceSampler, RWalkSampler, SamplerArgument, SamplerReturn

from scanfit.explorers.lockstep import LockstepPool
from scanfit.priors import FloatArray

Proposal = Literal["auto", "uniform", "random-walk", "random-slice"]
ResultT = TypeVar("ResultT")


class UniformProposal(InternalSampler):  # type: ignore[misc]  # the library has no type information
    """Uniform draws within the bound, `width` trials at a time.

    dynesty's own version runs `width` loops, each until it succeeds, which leaves every batch with a long tail of
    evaluations one by one, and draws every trial in Python. Here every batch is full. Trials not used yet wait for the
    next call: one that lies above a later, higher threshold is as uniform above that one.

    Parameters
    ----------
    ndim : int
        Dimension of the cube.
    evaluate : callable
        Log-likelihoods of points, shape ``(n, ndim)`` to ``(n,)``.
    width : int
        Trials in a batch.
    """

    def __init__(self, **given: Any) -> None:
        super().__init__(**given)
        self._evaluate: Callable[[FloatArray], FloatArray] = given["evaluate"]
        self._width: int = given["width"]
        self._waiting: list[tuple[FloatArray, float]] = []
        self._owner: Any = None

    def prepare_sampler(self, *, loglstar: float, seeds: list[Any], nested_sampler: Any, **_: Any) -> list[Any]:
        """One argument of `sample`: dynesty's queue has length 1 with this proposal, which keeps its own."""
        if nested_sampler is not self._owner:  # a new batch of the dynamic mode starts lower down
            self._waiting.clear()
            self._owner = nested_sampler
        return [(float(loglstar), nested_sampler.bound, seeds[0])]

    def sample(self, argument: tuple[float, Any, np.random.Generator]) -> Any:
        """The next trial above the threshold, with the number of trials that it took."""
        threshold, bound, random = argument
        calls = 0
        while True:
            while self._waiting:
                point, log_likelihood = self._waiting.pop()
                calls += 1
                if log_likelihood > threshold:
                    return SamplerReturn(point, point, log_likelihood, calls, [], None, None)
            points = draw_within(bound, self._width, random)
            self._waiting = list(zip(points, self._evaluate(points).tolist(), strict=True))[::-1]


class _RememberBound:
    """Hands the present bound on to `WatchedPool`, which needs it as the frame of the chains."""

    sampler_kwargs: dict[str, Any]

    def prepare_sampler(self, **given: Any) -> list[Any]:
        self.sampler_kwargs["bound"] = given["nested_sampler"].bound
        return super().prepare_sampler(**given)  # type: ignore[misc, no-any-return]  # defined by the sibling class


class RandomWalkProposal(_RememberBound, RWalkSampler):  # type: ignore[misc]  # the library has no type information
    """A chain of random steps, scaled to an acceptance of one half."""


class RandomSliceProposal(_RememberBound, RSliceSampler):  # type: ignore[misc]  # the library has no type information
    """A chain of slices in random directions."""


def steps_of_walk(dimension: int) -> int:
    """Steps after which a random walk has kept less than a tenth of its start on a Gaussian: measured up to 10-d."""
    return 20 + 6 * dimension


def chain_proposal(name: Proposal, steps: int | None, dimension: int) -> Any:
    """A chain of `steps`, or of the default number for this dimension."""
    if name == "random-slice":
        return RandomSliceProposal(ndim=dimension, slices=steps or 3 * dimension)
    return RandomWalkProposal(ndim=dimension, ncdim=dimension, walks=steps or steps_of_walk(dimension))


class Memory:
    """How much of a chain's start is left in its end.

    In the frame of the ellipsoid that holds the start, where live points have mean zero, this is the regression
    coefficient of the end on the start: 1 for a chain that did not move, 0 for one that forgot. A chain that cannot
    reach another mode, but moves freely within its own, has memory 0 where each mode has an ellipsoid.
    """

    def __init__(self) -> None:
        self.chains = 0
        self._together = 0.0
        self._start = 0.0

    def add(self, bound: MultiEllipsoid, starts: FloatArray, ends: FloatArray) -> None:
        """Count chains with `starts` and `ends`, both of shape ``(n, dimension)``."""
        away = starts[:, np.newaxis, :] - bound.ctrs
        nearest = np.einsum("nei,eij,nej->ne", away, bound.ams, away).argmin(axis=1)
        centres, metrics = bound.ctrs[nearest], bound.ams[nearest]
        self._together += float(np.einsum("ni,nij,nj->", starts - centres, metrics, ends - centres))
        self._start += float(np.einsum("ni,nij,nj->", starts - centres, metrics, starts - centres))
        self.chains += len(starts)

    @property
    def value(self) -> float:
        """The coefficient over all chains so far; 0 if there were none."""
        return self._together / self._start if self._start > 0.0 else 0.0


class WatchedPool:
    """A lockstep pool for dynesty that also measures the memory of its chains."""

    def __init__(self, pool: LockstepPool, memory: Memory) -> None:
        self._pool = pool
        self._memory = memory

    def map(self, function: Callable[[Any], ResultT], arguments: Iterable[Any]) -> Iterator[ResultT]:
        """Apply `function` to all `arguments`, in lockstep; see `LockstepPool.map`."""
        arguments = list(arguments)
        first = arguments[0]
        chained = isinstance(first, SamplerArgument) and isinstance(first.kwargs.get("bound"), MultiEllipsoid)
        starts = np.array([argument.u for argument in arguments]) if chained else None
        results = list(self._pool.map(function, arguments))
        if starts is not None:
            self._memory.add(first.kwargs["bound"], starts, np.array([result.u for result in results]))  # type: ignore[attr-defined]  # SamplerReturn
        return iter(results)


def draw_within(bound: Any, count: int, random: np.random.Generator) -> FloatArray:
    """Uniform draws from the part of a bound that lies in the unit cube.

    Parameters
    ----------
    bound : MultiEllipsoid
        Union of ellipsoids, or any other dynesty bound.
    count : int
        Number of points.
    random : Generator
        Source of all randomness.

    Returns
    -------
    ndarray, shape (count, dimension)
    """
    found: list[FloatArray] = []
    lacking = count
    while lacking > 0:
        if isinstance(bound, MultiEllipsoid):
            trials = _draw_from_union(bound, 2 * lacking, random)
        else:
            trials = bound.samples(lacking, rstate=random)
        trials = trials[np.all((trials > 0.0) & (trials < 1.0), axis=1)][:lacking]
        found.append(trials)
        lacking -= len(trials)
    return np.concatenate(found)


def _draw_from_union(bound: MultiEllipsoid, count: int, random: np.random.Generator) -> FloatArray:
    """Up to `count` uniform draws; a point within q ellipsoids is kept with probability 1/q (arXiv:0809.3437)."""
    dimension = bound.ctrs.shape[1]
    share = np.exp(bound.logvol_ells - bound.logvol_ells.max())
    chosen = random.choice(len(share), size=count, p=share / share.sum())
    direction = random.standard_normal((count, dimension))
    radius = random.random(count) ** (1.0 / dimension) / np.linalg.norm(direction, axis=1)
    axes = np.array([ellipsoid.axes for ellipsoid in bound.ells])
    points = bound.ctrs[chosen] + np.einsum("nij,nj->ni", axes[chosen], direction * radius[:, np.newaxis])
    if len(share) == 1:
        return np.asarray(points)
    away = points[:, np.newaxis, :] - bound.ctrs
    holders = (np.einsum("nei,eij,nej->ne", away, bound.ams, away) < 1.0).sum(axis=1)
    kept: FloatArray = points[random.random(count) * np.maximum(holders, 1) < 1.0]
    return kept
