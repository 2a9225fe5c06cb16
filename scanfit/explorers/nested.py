"""Nested sampling: posterior and evidence together, on dynesty's static and dynamic samplers."""

from __future__ import annotations

import math
import warnings
from collections.abc import Generator, Iterator, Sequence
from typing import Any, ClassVar, Final, Literal

import dynesty
import numpy as np
from dynesty.dynamicsampler import stopping_function, weight_function
from dynesty.utils import compute_integrals
from pydantic import Field

from scanfit.contracts import Evaluate, Exploration, Explorer, Progress
from scanfit.errors import ScanStopped
from scanfit.explorers.insertion import InsertionRanks
from scanfit.explorers.lockstep import LockstepPool
from scanfit.explorers.proposals import Memory, Proposal, UniformProposal, WatchedPool, chain_proposal, steps_of_walk
from scanfit.priors import FloatArray
from scanfit.validation import Options

_CALLS_PER_ADVANCE: Final = 2000
_ITERATIONS_PER_ADVANCE: Final = 500
_ITERATIONS_PER_RECORD: Final = 50
_ITERATIONS_PER_LOOK: Final = 200
_COST_MAXIMUM: Final = 10.0
"""Calls of uniform draws for one new live point, in lengths of a random walk, that "auto" accepts."""
_LIKELIHOOD_ZERO: Final = -1e299
"""dynesty stands in -1e300 for the log of a likelihood of zero."""
_FRUITLESS_CALLS: Final = 200
"""Calls per live point without a single likelihood above zero after which the search is given up."""
_ENLARGE: Final = 1.25
"""Factor on the volume of the ellipsoids."""
_P_VALUE_MINIMUM: Final = 1e-4
_MEMORY_MAXIMUM: Final = 0.1


class NestedOptions(Options):
    """Options of ``use = "nested"``."""

    mode: Literal["static", "dynamic"] = "static"
    live_points: int = Field(default=500, ge=20)
    width: int = Field(default=32, ge=1)
    """New live points sought at a time: part of the result, unlike the number of workers."""
    proposal: Proposal = "auto"
    """"auto" draws uniformly within ellipsoids until that costs much more than a random walk would, then walks."""
    steps: int | None = Field(default=None, ge=1)
    """Steps of a random walk or number of slices; by default from the dimension."""
    evidence_tolerance: float = Field(default=0.01, gt=0.0)
    effective_samples: int = Field(default=10_000, ge=100)
    """Where the dynamic mode stops adding batches."""
    calls_maximum: int = Field(default=20_000_000, ge=1000)


class Nested(Explorer):
    """Nested sampling.

    Live points are drawn from the prior and move up in likelihood, the lowest first, while the prior volume above it
    shrinks by a known factor on average (Bayesian Analysis 1, 833 (2006)). The run ends when the live points can add no
    more than `evidence_tolerance` to ln(evidence); the dynamic mode then adds batches of live points where the
    posterior is, until it has `effective_samples` (arXiv:1704.03459). Measured over seeds, the stated error of
    ln(evidence) is right in the static mode and up to a third too small in the dynamic one.

    The result counts as converged if that rule ended the run, the insertion ranks of the new live points are uniform
    (arXiv:2006.03371), and chains, where chains were used, forgot where they started.

    Points with likelihood zero are live points like any other, all equally low: what they hold of the prior volume is
    counted exactly by their number, and they leave first.
    """

    Options: ClassVar[type[Options]] = NestedOptions
    name: ClassVar[str] = "nested"
    summary: ClassVar[str] = "nested sampling: posterior and evidence"

    def __init__(self, options: NestedOptions) -> None:
        self._options = options
        self._memory = Memory()
        self._calls = self._iterations = 0
        self._found_any = False
        self._ended: Literal["", "tolerance", "calls"] = ""
        self._walking = False
        self._cost = 0
        self._dynamic: Any = None
        """dynesty's dynamic sampler, in the dynamic mode."""
        self._batching = False
        """Whether the dynamic mode's first run is complete."""
        self._current: Any = None
        """The dynesty sampler that holds the live points."""
        self._step: Any = None
        """dynesty's report on the latest iteration of the first run."""
        self._remaining = math.inf
        """What the live points of the first run could still add to ln(evidence)."""
        self._records: list[tuple[float, float, float, float]] = []

    def start(self, names: Sequence[str], seed: np.random.SeedSequence, evaluate: Evaluate) -> None:
        self._dimension = len(names)
        self._evaluate = evaluate
        self._pool = LockstepPool(self._counted)
        sampling, ranking = seed.spawn(2)
        self._random = np.random.default_rng(sampling)
        self._ranks = InsertionRanks(np.random.default_rng(ranking))
        self._run = self._explore()

    def advance(self) -> Progress:
        calls, iterations = self._calls, self._iterations
        with warnings.catch_warnings():
            # What dynesty warns of (plateaus, slow ellipsoids, stopping short) is told by the verdict.
            warnings.filterwarnings("ignore", module=r"dynesty\b")
            for _ in self._run:
                if self._calls >= self._options.calls_maximum:
                    self._ended = "calls"
                    self._run.close()
                    break
                enough = self._calls - calls >= _CALLS_PER_ADVANCE
                if enough or self._iterations - iterations >= _ITERATIONS_PER_ADVANCE:
                    break
        return self._progress()

    @property
    def finished(self) -> bool:
        return self._ended != ""

    def result(self) -> Exploration:
        points, log_likelihoods, log_volumes = self._samples()
        log_weights, log_evidence, variance, information = compute_integrals(logl=log_likelihoods, logvol=log_volumes)
        log_weights = np.where(log_likelihoods > _LIKELIHOOD_ZERO, log_weights - log_evidence[-1], -np.inf)
        weights = np.exp(log_weights)
        effective = float(weights.sum() ** 2 / np.square(weights).sum())
        rolling = self._ranks.p_value_rolling(self._options.live_points)
        p_value = min(1.0, 2.0 * min(self._ranks.p_value(), rolling))
        return Exploration(
            unit_points=points,
            log_weights=log_weights,
            converged=not self._failures(p_value),
            verdict=self._verdict(p_value),
            log_evidence=float(log_evidence[-1]),
            log_evidence_error=float(math.sqrt(max(variance[-1], 0.0))),
            diagnostics={
                "mode": self._options.mode,
                "walking": self._walking or self._options.proposal.startswith("random"),
                "ended_by": self._ended or "not ended",
                "iterations": self._iterations,
                "calls": self._calls,
                "efficiency": self._iterations / max(self._calls, 1),
                "information": float(information[-1]),
                "effective_samples": effective,
                "remaining_log_evidence": self._remaining,
                "insertion_p_value": p_value,
                "chain_memory": self._memory.value,
            },
            history=self._history(),
        )

    def _counted(self, unit_points: FloatArray) -> FloatArray:
        answers = self._evaluate(unit_points)
        self._calls += len(unit_points)
        if not self._found_any:
            self._found_any = bool(np.isfinite(answers).any())
            if not self._found_any and self._calls >= _FRUITLESS_CALLS * self._options.live_points:
                raise ScanStopped(
                    f"nested: none of the first {self._calls} points drawn from the prior has a likelihood above zero; "
                    "narrow the priors or look at one such point"
                )
        return answers

    def _explore(self) -> Generator[None]:
        options = self._options
        uniform = UniformProposal(ndim=self._dimension, evaluate=self._pool.log_likelihood_many, width=options.width)
        chain = chain_proposal(options.proposal, options.steps, self._dimension)
        begin_uniformly = options.proposal in ("auto", "uniform")
        settings = {
            "loglikelihood": self._pool.log_likelihood,
            "prior_transform": _identity,
            "ndim": self._dimension,
            "nlive": options.live_points,
            "sample": uniform if begin_uniformly else chain,
            "queue_size": 1 if begin_uniformly else options.width,
            "bootstrap": 0,  # measured: expansion by bootstrap costs up to ten times the calls on curved posteriors
            "enlarge": _ENLARGE,
            "rstate": self._random,
            "pool": WatchedPool(self._pool, self._memory),
            "use_pool": {"prior_transform": False, "update_bound": False, "stop_function": False},
        }
        if options.mode == "static":
            self._current = dynesty.NestedSampler(**settings)
            if begin_uniformly:
                self._current.internal_sampler = uniform  # before the first ellipsoids, too
            for step in self._current.sample(dlogz=options.evidence_tolerance, save_bounds=False):
                self._take_in(step)
                self._record(step)
                yield
            self._settle_plateau()
        else:
            self._dynamic = dynesty.DynamicNestedSampler(**settings)
            yield from self._explore_dynamically(self._dynamic, uniform if begin_uniformly else None)
        self._ended = "tolerance"

    def _explore_dynamically(self, sampler: Any, uniform: UniformProposal | None) -> Iterator[None]:
        options = self._options
        for step in sampler.sample_initial(nlive=options.live_points, dlogz=options.evidence_tolerance):
            if self._current is None:
                self._current = sampler.sampler
                self._current.save_bounds = False  # they would fill the memory
                self._current.internal_sampler = uniform or self._current.internal_sampler
            if not self._current.added_live:
                self._take_in(step)
                self._record(step)
                yield
        self._settle_plateau()
        self._batching = True
        while not stopping_function(sampler.results, {"target_n_effective": options.effective_samples}):
            for step in sampler.sample_batch(
                nlive_new=options.live_points,
                dlogz=options.evidence_tolerance,
                logl_bounds=weight_function(sampler.results),
                save_bounds=False,
            ):
                if self._current is not sampler.batch_sampler:
                    self._current = sampler.batch_sampler
                    if self._current.unit_cube_sampling and not self._walking:
                        self._current.internal_sampler = uniform or self._current.internal_sampler
                if step.worst >= 0 and not self._current.added_live:
                    self._take_in(step)
                    yield
            sampler.combine_runs()

    def _take_in(self, step: Any) -> None:
        self._ranks.add(self._current.live_logl, step.worst, step.loglstar)
        self._iterations += 1
        self._cost += step.nc
        if self._iterations % _ITERATIONS_PER_LOOK == 0:
            too_much = _COST_MAXIMUM * (self._options.steps or steps_of_walk(self._dimension)) * _ITERATIONS_PER_LOOK
            if self._options.proposal == "auto" and not self._walking and self._cost > too_much:
                self._start_walking()
            self._cost = 0

    def _start_walking(self) -> None:
        """Change from uniform draws to random walks, in the present run and in all batches to come."""
        self._walking = True
        chain = chain_proposal("random-walk", self._options.steps, self._dimension)
        for sampler in (self._current, self._dynamic):
            if sampler is not None:
                sampler.sampling = sampler.internal_sampler = sampler.internal_sampler_next = chain
                sampler.queue_size = self._options.width

    def _record(self, step: Any) -> None:
        self._step = step
        self._remaining = float(np.logaddexp(0.0, self._current.live_logl.max() + step.logvol - step.logz))
        if self._iterations % _ITERATIONS_PER_RECORD == 0:
            self._records.append((self._calls, step.logvol, step.logz, step.loglstar))

    def _settle_plateau(self) -> None:
        if np.ptp(self._current.live_logl) == 0.0:
            self._remaining = 0.0  # live points of equal likelihood hold exactly what they seem to hold

    def _samples(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Points, log-likelihoods and log prior volumes, lowest likelihood first, live points included."""
        if self._batching:
            run = self._dynamic.saved_run
            return np.array(run["u"]), np.array(run["logl"]), np.array(run["logvol"])
        sampler, run = self._current, self._current.saved_run
        count = sampler.nlive
        order = np.argsort(sampler.live_logl, kind="stable")
        start = run["logvol"][-1] if run["logvol"] else sampler.logvol_init
        # The live points share the remaining volume evenly.
        live_volumes = start + np.log1p(-np.arange(1, count + 1) / (count + 1))
        points = np.concatenate([np.array(run["u"]).reshape(-1, self._dimension), sampler.live_u[order]])
        log_likelihoods = np.concatenate([run["logl"], sampler.live_logl[order]])
        return points, log_likelihoods, np.concatenate([run["logvol"], live_volumes])

    def _progress(self) -> Progress:
        numbers = {"calls": float(self._calls), "efficiency": self._iterations / max(self._calls, 1)}
        remaining = self._remaining
        if self._step is not None:
            numbers |= {"log_evidence": float(self._step.logz), "remaining_log_evidence": remaining}
        if self._batching:
            effective = float(self._dynamic.n_effective)
            numbers["effective_samples"] = effective
            return Progress("adding batches", min(1.0, effective / self._options.effective_samples), numbers)
        fraction = None
        if self._step is not None and 0.0 < remaining < math.inf:
            # While the live points dominate, each e-fold of prior volume takes 1 off; afterwards it shrinks by e.
            tolerance = self._options.evidence_tolerance
            to_go = remaining - 1.0 - math.log(tolerance) if remaining > 1.0 else math.log(remaining / tolerance)
            gone = -float(self._step.logvol)
            fraction = gone / (gone + max(to_go, 0.0)) if gone > 0.0 else 0.0
        return Progress("nested sampling", fraction, numbers)

    def _verdict(self, p_value: float) -> str:
        options = self._options
        criteria = [
            f"the live points can add {self._remaining:.2g} to ln(evidence) (at most {options.evidence_tolerance:g})",
            f"insertion ranks are uniform with p = {p_value:.2g} (at least {_P_VALUE_MINIMUM:g})",
        ]
        if self._memory.chains:
            criteria.append(f"chains keep {self._memory.value:.2f} of their start (at most {_MEMORY_MAXIMUM:g})")
        failed = self._failures(p_value)
        text = "; ".join(criteria)
        text = f"{text[0].upper()}{text[1:]}."
        return text if not failed else f"Not converged: {'; '.join(failed)}. {text}"

    def _failures(self, p_value: float) -> list[str]:
        """Which criteria do not hold."""
        failed = []
        if self._ended == "calls":
            failed.append(f"the maximum of {self._options.calls_maximum} calls ended it")
        elif not self._ended:
            failed.append("it has not ended")
        if p_value < _P_VALUE_MINIMUM:
            failed.append("new live points were not drawn uniformly: take more steps, or another proposal")
        if self._memory.value > _MEMORY_MAXIMUM:
            failed.append("the chains are too short: take more steps")
        return failed

    def _history(self) -> dict[str, FloatArray]:
        """Curves over the first run."""
        records = np.array(self._records).reshape(-1, 4)
        iterations = _ITERATIONS_PER_RECORD * np.arange(1, len(records) + 1)
        return {
            "calls": records[:, 0],
            "log_prior_volume": records[:, 1],
            "log_evidence": records[:, 2],
            "log_likelihood": np.where(records[:, 3] > _LIKELIHOOD_ZERO, records[:, 3], -np.inf),
            "efficiency": iterations / np.maximum(records[:, 0], 1.0),
        }


def _identity(unit_point: FloatArray) -> FloatArray:
    return unit_point
