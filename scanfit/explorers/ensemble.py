"""Markov chain Monte Carlo with several independent ensembles of walkers, on emcee's moves."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar, Final

import numpy as np
from emcee import State
from emcee.model import Model as MoveModel
from emcee.moves import DEMove, StretchMove
from pydantic import Field

from scanfit.contracts import Evaluate, Exploration, Explorer, Progress
from scanfit.errors import InputError, Problem
from scanfit.explorers.agreement import agreement_p_values, autocorrelation_times, r_hat
from scanfit.explorers.bridge import Evidence, bridge
from scanfit.explorers.global_search import GlobalSearch
from scanfit.explorers.lockstep import LockstepPool
from scanfit.explorers.snooker import SnookerMove
from scanfit.priors import FloatArray
from scanfit.validation import Options

_CALLS_PER_ADVANCE: Final = 4000
_BURN_IN: Final = 0.25
_FEWEST_STEPS: Final = 20
_FIRST_CHECK: Final = 200
_CHECK_GROWTH: Final = 1.15
_BRIDGE_DRAWS: Final = 3000
_P_VALUE_MINIMUM: Final = 1e-3
_LIKELIHOOD: Final = "ln(likelihood)"


class EnsembleOptions(Options):
    """Options of ``use = "ensemble"``."""

    ensembles: int = Field(default=4, ge=2)
    walkers: int | None = Field(default=None, ge=8, multiple_of=2)
    """In each ensemble; by default six for each parameter, at least 24."""
    steps_maximum: int = Field(default=20_000, ge=100)
    autocorrelation_times: float = Field(default=50.0, ge=10.0)
    """Length of the kept chains, in autocorrelation times of the slowest parameter, before the run may end."""
    r_hat: float = Field(default=1.01, gt=1.0)
    """Largest rank-normalised R-hat between the ensembles with which the run may end."""
    search_generations: int = Field(default=200, ge=1)
    """Where the global search for starting places ends at the latest."""
    evidence_points: int = Field(default=4000, ge=0)
    """Calls spent on the evidence at the end; 0 leaves it out."""


@dataclass
class _Ensemble:
    """One ensemble: its random numbers, where its walkers are, and where they have been."""

    random: np.random.RandomState
    state: Any
    chain: list[FloatArray] = field(default_factory=list)
    """One array of shape ``(walkers, dimension + 1)`` for each step; the last column is the log-likelihood."""
    accepted: int = 0


@dataclass(frozen=True)
class _Check:
    """The criteria after some number of steps; arrays hold one number for each parameter and one for the likelihood."""

    steps: int
    calls: int
    kept_steps: int
    times: FloatArray
    r_hat: FloatArray
    p_values: FloatArray


class Ensemble(Explorer):
    """Several independent ensembles of walkers.

    Each ensemble starts from the population of its own global search, so that a mode that one search misses is there
    in another ensemble. Walkers move by differential evolution (Statistics and Computing 16, 239 (2006)), in one step
    of five with the full difference of two walkers, which leads from mode to mode; by snooker steps (ibid. 18, 435
    (2008)); and by stretch moves (Comm. App. Math. Comp. Sci. 5, 65 (2010)). Steps that leave the cube are rejected.

    The first quarter of every chain is dropped as burn-in. The run ends, converged, once for every parameter and for
    the likelihood the kept chains are `autocorrelation_times` long, R-hat between ensembles is at most `r_hat`, and the
    means of the ensembles agree within their own standard errors; or, not converged, after `steps_maximum` steps. The
    evidence then comes from bridge sampling between the ensembles.
    """

    Options: ClassVar[type[Options]] = EnsembleOptions
    name: ClassVar[str] = "ensemble"
    summary: ClassVar[str] = "Markov chain Monte Carlo with independent ensembles of walkers"

    def __init__(self, options: EnsembleOptions) -> None:
        self._options = options
        self._calls = 0
        self._steps = 0
        self._ensembles: list[_Ensemble] = []
        self._checks: list[_Check] = []
        self._next_check = _FIRST_CHECK
        self._converged = self._ended = False
        self._evidence: Evidence | None = None
        self._moves = (DEMove(), DEMove(gamma0=1.0), SnookerMove(), StretchMove())
        self._shares = (0.55, 0.2, 0.1, 0.15)

    def start(self, names: Sequence[str], seed: np.random.SeedSequence, evaluate: Evaluate) -> None:
        options = self._options
        self._names = (*names, _LIKELIHOOD)
        self._dimension = len(names)
        self._evaluate = evaluate
        self._pool = LockstepPool(self._counted)
        self._walkers = options.walkers or max(24, 4 * math.ceil(1.5 * self._dimension))
        if self._walkers < 2 * self._dimension:
            rule = f"at least two walkers for each of {self._dimension} parameters are needed"
            raise InputError([Problem("walkers", rule, options.walkers)])
        searching, moving, bridging = seed.spawn(3)
        self._bridge_seeds = bridging.spawn(2)
        self._move_seeds = moving.spawn(options.ensembles)
        self._search = GlobalSearch(
            self._pool,
            searching.spawn(options.ensembles),
            self._walkers,
            self._dimension,
            options.search_generations,
        )

    def advance(self) -> Progress:
        at_once = self._options.ensembles * self._walkers
        rounds = max(1, _CALLS_PER_ADVANCE // at_once)
        if not self._ensembles:
            self._search.advance(rounds)
            if self._search.finished:
                self._settle()
            return Progress("global search", None, {"calls": float(self._calls), "best": self._search.best})
        rounds = min(rounds, self._next_check - self._steps, self._options.steps_maximum - self._steps)
        list(self._pool.map(lambda ensemble: self._move(ensemble, rounds), self._ensembles))
        self._steps += rounds
        if self._steps == self._next_check or self._steps == self._options.steps_maximum:
            self._checks.append(self._judge())
            self._converged = not self._failures(self._checks[-1])
            self._next_check = math.ceil(_CHECK_GROWTH * self._steps)
        if self._converged or self._steps >= self._options.steps_maximum:
            self._evidence = self._bridge()
            self._ended = True
        return self._progress()

    @property
    def finished(self) -> bool:
        return self._ended

    def result(self) -> Exploration:
        if self._steps < _FEWEST_STEPS:
            points = np.concatenate([ensemble.state.coords for ensemble in self._ensembles] or [self._search.points])
            log_weights = np.full(len(points), -math.log(len(points)))
            verdict = "Not converged: it has not ended; these are the walkers of the global search."
            return Exploration(points, log_weights, False, verdict, history=self._history())
        # A look in between must not change what comes after.
        up_to_date = bool(self._checks) and self._checks[-1].steps == self._steps
        check = self._checks[-1] if up_to_date else self._judge()
        chains = self._kept()
        slowest = float(check.times.max())
        thin = max(1, int(slowest / 2.0)) if math.isfinite(slowest) else 1
        # Taken from the end, and interleaved in time, so that any part of the sample is a fair one.
        thinned = chains[:, ::-1][:, ::thin, :, : self._dimension]
        points = thinned.transpose(1, 0, 2, 3).reshape(-1, self._dimension)
        per_walker = chains.shape[0] * chains.shape[1] * chains.shape[2]
        return Exploration(
            unit_points=points,
            log_weights=np.full(len(points), -math.log(len(points))),
            converged=self._converged,
            verdict=self._verdict(check),
            log_evidence=None if self._evidence is None else self._evidence.log_evidence,
            log_evidence_error=None if self._evidence is None else self._evidence.error,
            diagnostics={
                "ensembles": self._options.ensembles,
                "walkers": self._walkers,
                "steps": self._steps,
                "kept_steps": check.kept_steps,
                "thinning": thin,
                "calls": self._calls,
                "acceptance": self._acceptance(),
                "autocorrelation_time": self._by_name(check.times),
                "r_hat": self._by_name(check.r_hat),
                "agreement_p_value": self._by_name(check.p_values),
                "effective_samples": self._by_name(per_walker / check.times),
                "ensemble_means": [self._by_name(means) for means in chains.mean(axis=(1, 2))],
                "search_generations": self._search.generations,
            },
            history=self._history(),
        )

    def _counted(self, unit_points: FloatArray) -> FloatArray:
        self._calls += len(unit_points)
        return self._evaluate(unit_points)

    def _settle(self) -> None:
        """Turn the populations of the search into ensembles."""
        for seed, (points, log_likelihoods) in zip(self._move_seeds, self._search.populations(), strict=True):
            random = np.random.RandomState(np.random.MT19937(seed))  # emcee's moves want this kind
            self._ensembles.append(_Ensemble(random, State(points, log_prob=log_likelihoods)))

    def _move(self, ensemble: _Ensemble, steps: int) -> None:
        model = MoveModel(None, self._log_densities, map, ensemble.random)
        for _ in range(steps):
            move = self._moves[ensemble.random.choice(len(self._moves), p=self._shares)]
            ensemble.state, accepted = move.propose(model, ensemble.state)
            ensemble.accepted += int(accepted.sum())
            ensemble.chain.append(np.column_stack([ensemble.state.coords, ensemble.state.log_prob]))

    def _log_densities(self, points: FloatArray) -> tuple[FloatArray, None]:
        """Log of the target density, -inf outside the cube, in the form that emcee's moves ask for."""
        densities = np.full(len(points), -np.inf)
        inside = np.all((points >= 0.0) & (points <= 1.0), axis=1)
        if inside.any():
            densities[inside] = self._pool.log_likelihood_many(points[inside])
        return densities, None

    def _kept(self) -> FloatArray:
        """Chains without burn-in, shape ``(ensembles, steps, walkers, dimension + 1)``."""
        dropped = int(_BURN_IN * self._steps)
        return np.array([ensemble.chain[dropped:] for ensemble in self._ensembles])

    def _judge(self) -> _Check:
        chains = self._kept()
        times = autocorrelation_times(chains)
        slowest = float(times.max())
        # R-hat needs no more draws than are nearly independent.
        thin = max(1, int(slowest / 4.0)) if math.isfinite(slowest) else 1
        return _Check(
            steps=self._steps,
            calls=self._calls,
            kept_steps=chains.shape[1],
            times=times,
            r_hat=r_hat(chains[:, ::thin]),
            p_values=agreement_p_values(chains),
        )

    def _bridge(self) -> Evidence | None:
        """The evidence, from one half of the ensembles over the other and the reverse."""
        points, slowest = self._options.evidence_points // 2, float(self._checks[-1].times.max())
        if points == 0 or not math.isfinite(slowest):
            return None
        chains = self._kept()
        halves, found = (chains[::2], chains[1::2]), []
        for number, seed in enumerate(self._bridge_seeds):
            random = np.random.default_rng(seed)
            fitted, draws = (half.reshape(-1, self._dimension + 1) for half in (halves[number], halves[1 - number]))
            independent = len(draws) / slowest
            fitted = fitted[random.permutation(len(fitted))[:_BRIDGE_DRAWS], :-1]
            draws = draws[random.permutation(len(draws))[:_BRIDGE_DRAWS]]
            independent = min(independent, float(len(draws)))
            found.append(
                bridge(fitted, draws[:, :-1], draws[:, -1], independent, self._pool.log_likelihood_many, points, random)
            )
        first, second = found
        return Evidence(
            0.5 * (first.log_evidence + second.log_evidence),
            max(0.5 * math.hypot(first.error, second.error), 0.5 * abs(first.log_evidence - second.log_evidence)),
        )

    def _failures(self, check: _Check) -> list[str]:
        """Which criteria do not hold, and for which parameter."""
        failed = []
        options = self._options
        if not check.kept_steps >= options.autocorrelation_times * check.times.max():
            failed.append(f"the chains are too short for {self._worst(check.times)}")
        if not check.r_hat.max() <= options.r_hat:
            failed.append(f"R-hat is too large for {self._worst(check.r_hat)}")
        if not check.p_values.min() * len(self._names) >= _P_VALUE_MINIMUM:
            failed.append(f"the ensembles disagree on {self._worst(-check.p_values)}")
        return failed

    def _history(self) -> dict[str, FloatArray]:
        return {
            "calls": np.array([float(check.calls) for check in self._checks]),
            "autocorrelation_time": np.array([check.times for check in self._checks]),
            "chain_length": np.array([check.kept_steps / check.times.max() for check in self._checks]),
            "r_hat": np.array([check.r_hat for check in self._checks]),
        }

    def _by_name(self, values: FloatArray) -> dict[str, float | None]:
        """Numbers with the names of the parameters; None where there is none."""
        finite = (value if math.isfinite(value) else None for value in values.tolist())
        return dict(zip(self._names, finite, strict=True))

    def _worst(self, values: FloatArray) -> str:
        return self._names[int(np.argmax(values))]

    def _verdict(self, check: _Check) -> str:
        options = self._options
        text = (
            f"The kept chains are {check.kept_steps / check.times.max():.0f} autocorrelation times of "
            f"{self._worst(check.times)} long (at least {options.autocorrelation_times:g}); R-hat is at most "
            f"{check.r_hat.max():.4f}, for {self._worst(check.r_hat)} (at most {options.r_hat:g}); the means of "
            f"{options.ensembles} ensembles agree with p = {min(1.0, check.p_values.min() * len(self._names)):.2g} "
            f"(at least {_P_VALUE_MINIMUM:g})."
        )
        failed = self._failures(check)
        if not self.finished:
            failed.append("it has not ended")
        elif failed:
            failed.append(f"the maximum of {options.steps_maximum} steps ended it")
        return text if not failed else f"Not converged: {'; '.join(failed)}. {text}"

    def _acceptance(self) -> float:
        moves = self._options.ensembles * self._walkers * self._steps
        return sum(ensemble.accepted for ensemble in self._ensembles) / max(moves, 1)

    def _progress(self) -> Progress:
        numbers = {"calls": float(self._calls), "steps": float(self._steps), "acceptance": self._acceptance()}
        fraction = self._steps / self._options.steps_maximum
        if self._checks:
            check = self._checks[-1]
            length = (1.0 - _BURN_IN) * self._steps / float(check.times.max())
            numbers |= {"autocorrelation_times": length, "r_hat": float(check.r_hat.max())}
            fraction = max(fraction, min(length / self._options.autocorrelation_times, 0.99))
        return Progress("sampling", 1.0 if self._converged else fraction, numbers)
