"""Whoever evaluates the points, the rows are the same: the contract of every kind of worker."""

from __future__ import annotations

import os
import shutil
import signal
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from scanfit.posterior import Posterior, Status
from scanfit.priors import FloatArray
from scanfit.runfile import load_posterior
from scanfit.workers.contract import Build, Workers
from scanfit.workers.processes import ProcessWorkers
from scanfit.workers.start import start_workers

TOY = Path(__file__).parents[1] / "toy"


def process_numbers(workers: Workers) -> list[int]:
    """Of the processes that evaluate; none for workers in this one."""
    if isinstance(workers, ProcessWorkers):
        return list(workers.process_numbers)
    client = getattr(workers, "_client", None)
    return [] if client is None else list(client.run(os.getpid).values())


@dataclass(frozen=True)
class Case:
    start: Callable[[Build], Workers]
    count: int


CASES = {
    "serial": Case(partial(start_workers, count=1), 1),
    "one process": Case(partial(start_workers, count=1, seconds_per_point_maximum=60.0), 1),
    "two processes": Case(partial(start_workers, count=2), 2),
    "four processes": Case(partial(start_workers, count=4), 4),
    "cluster of two": Case(partial(start_workers, count=2, cluster="local"), 2),
}


@pytest.fixture(scope="module")
def run_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The toy with a term that raises where x > 0.5."""
    folder = tmp_path_factory.mktemp("toy")
    shutil.copy(TOY / "toy.py", folder)
    text = (TOY / "toy.toml").read_text() + '\n[terms.trouble]\nuse = "toy.py:Trouble"\nhow = "raise"\n'
    (folder / "toy.toml").write_text(text)
    return folder / "toy.toml"


@pytest.fixture(scope="module")
def posterior(run_file: Path) -> Posterior:
    return load_posterior(run_file)


@pytest.fixture(scope="module", params=CASES)
def case(request: pytest.FixtureRequest) -> Case:
    return CASES[request.param]


@pytest.fixture(scope="module")
def workers(case: Case, run_file: Path) -> Iterator[Workers]:
    if "cluster" in case.start.keywords:  # type: ignore[attr-defined]  # every start is a partial
        pytest.importorskip("distributed")
    with case.start(partial(load_posterior, run_file)) as started:
        yield started


def points(number: int, seed: int = 1) -> FloatArray:
    return np.random.default_rng(seed).uniform(-1.2, 1.2, (number, 3))


@pytest.mark.parametrize("number", [0, 1, 2, 7, 200])
def test_rows_are_those_of_the_posterior_in_order(workers: Workers, posterior: Posterior, number: int) -> None:
    given = points(number, seed=number)
    expected = posterior.evaluate_many(given)
    batch = workers.evaluate(given)
    assert batch.rows.tobytes() == expected.rows.tobytes()
    assert batch.rows.shape == (number, len(posterior.columns))


def test_failures_are_carried_with_their_place(workers: Workers, posterior: Posterior) -> None:
    given = points(60)
    batch = workers.evaluate(given)
    assert batch.failures == posterior.evaluate_many(given).failures
    assert len(batch.failures) > 3
    assert {failure.culprit for failure in batch.failures} == {"terms.trouble"}
    for failure in batch.failures:
        assert batch.rows[failure.row, posterior.column("status")] == Status.FAILED
        assert batch.rows[failure.row, posterior.column("log_likelihood")] == -np.inf


def test_the_given_points_may_be_a_view(workers: Workers, posterior: Posterior) -> None:
    given = np.asfortranarray(points(20))[::2]
    assert workers.evaluate(given).rows.tobytes() == posterior.evaluate_many(given).rows.tobytes()


def test_the_number_of_workers_is_known(workers: Workers, case: Case) -> None:
    assert workers.count == case.count


def test_a_killed_worker_changes_nothing(workers: Workers, posterior: Posterior) -> None:
    victims = process_numbers(workers)
    if not victims:
        pytest.skip("it evaluates in this process")
    os.kill(victims[0], signal.SIGKILL)
    given = points(100, seed=2)
    assert workers.evaluate(given).rows.tobytes() == posterior.evaluate_many(given).rows.tobytes()
    deadline = time.monotonic() + 20.0
    while workers.restarts == 0 and time.monotonic() < deadline:
        time.sleep(0.1)
        workers.evaluate(given)
    assert workers.restarts == 1


@pytest.mark.parametrize("name", ["serial", "two processes", "cluster of two"])
def test_closing_twice_is_harmless_and_ends_everything(name: str, run_file: Path) -> None:
    if "cluster" in name:
        pytest.importorskip("distributed")
    workers = CASES[name].start(partial(load_posterior, run_file))
    workers.evaluate(points(4))
    numbers = process_numbers(workers)
    workers.close()
    workers.close()
    with pytest.raises(ValueError, match="closed"):
        workers.evaluate(points(1))
    for number in numbers:
        assert not Path(f"/proc/{number}").exists()
