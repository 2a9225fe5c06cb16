"""Controls: a wrong answer, and a sampler made wrong on purpose, must be caught."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import known_problems as known
import numpy as np
import pytest
from dynesty.bounding import MultiEllipsoid
from emcee.moves import StretchMove
from known_explorations import effective_samples, explore, pulls

from scanfit.explorers import proposals
from scanfit.explorers.ensemble import Ensemble, EnsembleOptions
from scanfit.explorers.nested import Nested


@pytest.mark.parametrize("kind", [Nested, Ensemble], ids=lambda kind: kind.name)
def test_a_slightly_wrong_truth_is_caught(kind: type[Nested] | type[Ensemble]) -> None:
    problem = known.correlated_gaussian(2)
    found = explore(kind, problem, 1, {})
    assert found.log_evidence_error is not None
    error = effective_samples(found) ** -0.5
    wrong = replace(
        problem,
        mean=problem.mean + 7.0 * error * problem.deviation,
        deviation=problem.deviation * (1.0 + 7.0 * error),
        log_evidence=problem.log_evidence + 7.0 * found.log_evidence_error,
    )
    assert min(pulls(found, wrong).values()) > 4.5
    assert max(pulls(found, problem).values()) < 4.5


def test_walks_that_are_too_short_are_caught() -> None:
    problem = known.correlated_gaussian(10)
    short = explore(Nested, problem, 1, {"live_points": 60, "proposal": "random-walk", "steps": 8})
    assert short.diagnostics["ended_by"] == "tolerance"
    assert not short.converged
    assert "chains are too short" in short.verdict
    long = explore(Nested, problem, 1, {"live_points": 60, "proposal": "random-walk"})
    assert long.converged, long.verdict


def test_draws_that_leave_out_part_of_the_ellipsoids_are_caught(monkeypatch: pytest.MonkeyPatch) -> None:
    right = proposals.draw_within

    def central(bound: Any, count: int, random: np.random.Generator) -> np.ndarray:
        """Leaves out the outermost fifth of every ellipsoid's radius."""
        kept = np.empty((0, 5))
        while len(kept) < count:
            points = right(bound, count, random)
            if isinstance(bound, MultiEllipsoid):
                away = points[:, np.newaxis, :] - bound.ctrs
                points = points[np.einsum("nei,eij,nej->ne", away, bound.ams, away).min(axis=1) < 0.8**2]
            kept = np.concatenate([kept, points])
        return kept[:count]

    monkeypatch.setattr(proposals, "draw_within", central)
    problem = known.correlated_gaussian(5)
    found = explore(Nested, problem, 1, {"live_points": 300})
    assert pulls(found, problem)["log_evidence"] > 4.5  # it would indeed have been wrong
    assert found.diagnostics["ended_by"] == "tolerance"
    assert not found.converged
    assert "not drawn uniformly" in found.verdict


class NoJumps(Ensemble):
    """Only stretch moves, which do not lead from one narrow mode to another."""

    def __init__(self, options: EnsembleOptions) -> None:
        super().__init__(options)
        self._moves = (StretchMove(),)
        self._shares = (1.0,)


def test_ensembles_stuck_with_wrong_weights_of_modes_are_caught() -> None:
    problem = known.two_modes(2, deviation=0.02)
    stuck = explore(NoJumps, problem, 1, {"steps_maximum": 1500})
    assert not stuck.converged
    assert "disagree" in stuck.verdict or "R-hat" in stuck.verdict.split(". ")[0]
    free = explore(Ensemble, problem, 1, {})
    assert free.converged, free.verdict
    assert max(pulls(free, problem).values()) < 4.5
    assert pulls(stuck, problem)["mean"] > 4.5  # it would indeed have been wrong


def test_a_maximum_that_is_too_low_is_said() -> None:
    problem = known.correlated_gaussian(5)
    few_steps = explore(Ensemble, problem, 1, {"steps_maximum": 100, "evidence_points": 0})
    assert not few_steps.converged
    assert "the chains are too short for x" in few_steps.verdict
    assert "the maximum of 100 steps ended it" in few_steps.verdict
    few_calls = explore(Nested, problem, 1, {"calls_maximum": 2000, "live_points": 100})
    assert not few_calls.converged
    assert "the maximum of 2000 calls ended it" in few_calls.verdict
