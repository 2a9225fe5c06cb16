"""Every registered explorer, whatever its method: deterministic, resumable by replay, honest, and JSON-ready."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from importlib.metadata import EntryPoint, entry_points

import numpy as np
import pytest

from scanfit.contracts import Exploration, Explorer
from scanfit.errors import InputError, ScanStopped
from scanfit.validation import Options, check

NAMES = ("first", "second", "third")


def log_likelihood(points: np.ndarray) -> np.ndarray:
    """A Gaussian in two directions, nothing about the third, and a corner that is impossible."""
    away = (points[:, :2] - [0.4, 0.6]) / [0.05, 0.1]
    return np.where(points.min(axis=1) < 0.01, -np.inf, -0.5 * np.square(away).sum(axis=1))


class Evaluation:
    """Counts batches, keeps every point and can stop after some number of calls, as a signal would."""

    def __init__(
        self,
        split: int = 0,
        stop_after: float = np.inf,
        log_likelihood: Callable[[np.ndarray], np.ndarray] = log_likelihood,
    ) -> None:
        self.points: list[np.ndarray] = []
        self.calls = 0
        self._split = split
        self._log_likelihood = log_likelihood
        self._stop_after = stop_after

    def __call__(self, unit_points: np.ndarray) -> np.ndarray:
        assert unit_points.ndim == 2
        assert unit_points.shape[1] == len(NAMES)
        assert len(unit_points) > 0
        assert unit_points.min() >= 0.0
        assert unit_points.max() <= 1.0
        self.calls += len(unit_points)
        if self.calls > self._stop_after:
            raise ScanStopped("stopped by the test")
        self.points.extend(unit_points.copy())
        width = self._split or len(unit_points)
        parts = [unit_points[first : first + width] for first in range(0, len(unit_points), width)]
        return np.concatenate([self._log_likelihood(part) for part in parts])


def registered() -> Iterator[EntryPoint]:
    yield from sorted(entry_points(group="scanfit.explorers"), key=lambda point: point.name)


@pytest.fixture(params=registered(), ids=lambda point: point.name)
def kind(request: pytest.FixtureRequest) -> type[Explorer]:
    found = request.param.load()
    assert issubclass(found, Explorer)
    assert found.name == request.param.name
    return found  # type: ignore[no-any-return]  # checked above


def quick(kind: type[Explorer]) -> Options:
    """Options that end in a second; an explorer not listed here runs with its defaults."""
    shorter = {
        "nested": {"live_points": 60},
        "ensemble": {"steps_maximum": 250, "evidence_points": 200},
    }
    return check(kind.Options, shorter.get(kind.name, {}))


def run(kind: type[Explorer], evaluate: Evaluation, seed: int = 1) -> Exploration:
    explorer = kind(quick(kind))
    explorer.start(NAMES, np.random.SeedSequence(seed), evaluate)
    while not explorer.finished:
        explorer.advance()
    return explorer.result()


def as_bytes(found: Exploration) -> bytes:
    numbers = (found.log_evidence, found.log_evidence_error, found.converged, found.verdict, dict(found.diagnostics))
    curves = b"".join(name.encode() + curve.tobytes() for name, curve in sorted(found.history.items()))
    return found.unit_points.tobytes() + found.log_weights.tobytes() + curves + repr(numbers).encode()


def test_result_is_well_formed(kind: type[Explorer]) -> None:
    found = run(kind, Evaluation())
    count = len(found.unit_points)
    assert found.unit_points.shape == (count, len(NAMES))
    assert found.log_weights.shape == (count,)
    assert np.exp(found.log_weights).sum() == pytest.approx(1.0, abs=1e-6)
    assert np.all(np.isneginf(found.log_weights) | np.isfinite(log_likelihood(found.unit_points)))
    assert found.verdict.endswith(".")
    json.dumps(dict(found.diagnostics), allow_nan=False)
    lengths = {len(curve) for curve in found.history.values()}
    assert len(lengths) == 1
    assert np.all(np.diff(found.history["calls"]) >= 0)
    assert (found.log_evidence is None) == (found.log_evidence_error is None)


def test_same_seed_gives_the_same_bytes_however_batches_are_split(kind: type[Explorer]) -> None:
    whole, pieces = Evaluation(), Evaluation(split=7)
    assert as_bytes(run(kind, whole)) == as_bytes(run(kind, pieces))
    assert np.array_equal(whole.points, pieces.points)


def test_global_random_state_is_neither_used_nor_changed(kind: type[Explorer]) -> None:
    np.random.seed(3)  # noqa: NPY002 - the state that must be left alone
    before = np.random.get_state()[1].copy()  # type: ignore[index]  # noqa: NPY002 - as above
    first = run(kind, Evaluation())
    assert np.array_equal(before, np.random.get_state()[1])  # type: ignore[index]  # noqa: NPY002 - as above
    np.random.seed(4)  # noqa: NPY002 - as above
    assert as_bytes(first) == as_bytes(run(kind, Evaluation()))


def test_another_seed_gives_another_run(kind: type[Explorer]) -> None:
    assert as_bytes(run(kind, Evaluation(), seed=1)) != as_bytes(run(kind, Evaluation(), seed=2))


def test_two_explorers_side_by_side_do_not_disturb_each_other(kind: type[Explorer]) -> None:
    alone = as_bytes(run(kind, Evaluation()))
    pair = [kind(quick(kind)) for _ in range(2)]
    for explorer in pair:
        explorer.start(NAMES, np.random.SeedSequence(1), Evaluation())
    while not all(explorer.finished for explorer in pair):
        for explorer in pair:
            if not explorer.finished:
                explorer.advance()
    assert [as_bytes(explorer.result()) for explorer in pair] == [alone, alone]


def test_result_midway_is_honest_and_changes_nothing(kind: type[Explorer]) -> None:
    undisturbed = as_bytes(run(kind, Evaluation()))
    explorer = kind(quick(kind))
    explorer.start(NAMES, np.random.SeedSequence(1), Evaluation())
    midway = 0
    while not explorer.finished:
        progress = explorer.advance()
        assert progress.phase
        assert progress.fraction is None or 0.0 <= progress.fraction <= 1.0
        found = explorer.result()
        assert np.exp(found.log_weights).sum() == pytest.approx(1.0, abs=1e-6)
        if not explorer.finished:
            midway += 1
            assert not found.converged
            assert "not" in found.verdict.lower()
    assert midway > 0
    assert as_bytes(explorer.result()) == undisturbed


def test_a_stop_passes_through_quietly_and_a_replay_makes_the_same_calls(
    kind: type[Explorer], capfd: pytest.CaptureFixture[str]
) -> None:
    whole, stopped = Evaluation(), Evaluation(stop_after=1500)
    run(kind, whole)
    assert whole.calls > 1500
    with pytest.raises(ScanStopped, match="stopped by the test"):
        run(kind, stopped)
    assert np.array_equal(whole.points[: len(stopped.points)], stopped.points)
    assert capfd.readouterr() == ("", "")


def test_a_cube_without_likelihood_ends_with_a_reason(kind: type[Explorer]) -> None:
    nothing = Evaluation(log_likelihood=lambda points: np.full(len(points), -np.inf))
    with pytest.raises(ScanStopped, match="likelihood above zero"):
        run(kind, nothing)


def test_a_constant_likelihood_gives_the_prior_back(kind: type[Explorer]) -> None:
    found = run(kind, Evaluation(log_likelihood=lambda points: np.full(len(points), -7.0)))
    mean = np.exp(found.log_weights) @ found.unit_points
    assert mean == pytest.approx([0.5, 0.5, 0.5], abs=0.15)
    if found.log_evidence is not None and found.log_evidence_error is not None:
        assert found.log_evidence == pytest.approx(-7.0, abs=max(0.02, 5.0 * found.log_evidence_error))
        assert found.log_evidence_error < 0.3


def test_unknown_options_are_refused_by_name(kind: type[Explorer]) -> None:
    with pytest.raises(InputError, match="unknown key"):
        check(kind.Options, {"no_such_option": 1})
