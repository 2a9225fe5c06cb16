"""A cluster under attack: a real Dask scheduler with worker processes on the loopback interface."""

from __future__ import annotations

import logging
import sys
from collections.abc import Callable, Iterator
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scanfit.errors import InputError, ScanfitError
from scanfit.posterior import Posterior, Status
from scanfit.priors import FloatArray
from scanfit.runfile import load_posterior
from scanfit.workers.start import start_workers

distributed = pytest.importorskip("distributed")
Toy = Callable[..., Path]


@pytest.fixture(scope="module")
def cluster() -> Iterator[Any]:
    """A scheduler with two workers that gives up a task as soon as it has taken down one of them."""
    for name in ("distributed.nanny", "distributed.scheduler", "distributed.worker"):
        logging.getLogger(name).setLevel(logging.CRITICAL)
    settings: dict[str, Any] = {"dashboard_address": ":0", "scheduler_kwargs": {"allowed_failures": 0}}
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, host="127.0.0.1", **settings) as cluster:
        yield cluster


@pytest.fixture
def scheduler(cluster: Any) -> str:
    """Address of the scheduler, once the workers that an earlier test took down are back."""
    with distributed.Client(cluster) as client:
        client.wait_for_workers(2, timeout=60)
    return str(cluster.scheduler_address)


def trouble(toy: Toy, how: str) -> Path:
    return toy(("[explore]", f'[terms.trouble]\nuse = "toy.py:Trouble"\nhow = "{how}"\nabove = 0.9\n\n[explore]'))


def points(number: int, *, bad: int) -> FloatArray:
    found = np.random.default_rng(3).uniform(-0.5, 0.5, (number, 3))
    found[bad, 0] = 0.95
    return found


@pytest.mark.parametrize(
    ("how", "limit", "status", "message"),
    [
        ("die", None, Status.FAILED, "took down several cluster workers"),
        ("hang", 2.0, Status.TIMED_OUT, "took longer than 2 s"),
    ],
)
def test_a_bad_point_is_marked_and_the_others_are_kept(
    toy: Toy, scheduler: str, how: str, limit: float | None, status: Status, message: str
) -> None:
    path = trouble(toy, how)
    given = points(10, bad=7)
    with start_workers(partial(load_posterior, path), cluster=scheduler, seconds_per_point_maximum=limit) as workers:
        assert workers.count == 2
        batch = workers.evaluate(given)
    posterior = load_posterior(path)
    good = np.arange(10) != 7
    assert batch.rows[good].tobytes() == posterior.evaluate_many(given[good]).rows.tobytes()
    assert batch.rows[7, posterior.column("status")] == status
    assert batch.rows[7, posterior.column("log_likelihood")] == -np.inf
    (failure,) = batch.failures
    assert (failure.row, failure.message) == (7, message)


def test_two_runs_share_a_cluster(toy: Toy, scheduler: str) -> None:
    wide, narrow = (toy(("sigma = 0.2", f"sigma = {sigma}"), name=f"{sigma}.toml") for sigma in (0.2, 0.1))
    given = points(6, bad=0)
    with (
        start_workers(partial(load_posterior, wide), cluster=scheduler) as one,
        start_workers(partial(load_posterior, narrow), cluster=scheduler) as two,
    ):
        for _ in range(2):
            for workers, path in ((one, wide), (two, narrow)):
                expected = load_posterior(path).evaluate_many(given).rows
                assert workers.evaluate(given).rows.tobytes() == expected.tobytes()


def test_a_posterior_that_cannot_be_built_is_reported_in_words(scheduler: str, tmp_path: Path) -> None:
    build = partial(load_posterior, tmp_path / "missing.toml")
    with start_workers(build, cluster=scheduler) as workers, pytest.raises(ScanfitError, match=r"missing\.toml"):
        workers.evaluate(points(2, bad=0))


def test_a_scheduler_that_does_not_answer_is_named(toy: Toy, monkeypatch: pytest.MonkeyPatch) -> None:
    from scanfit.workers import cluster

    monkeypatch.setattr(cluster, "_PATIENCE", 0.5)
    with pytest.raises(InputError, match=r"compute\.cluster: no Dask scheduler .*'tcp://127\.0\.0\.1:9'"):
        start_workers(partial(load_posterior, toy()), cluster="tcp://127.0.0.1:9")


def test_without_the_packages_the_extra_is_named(toy: Toy, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delitem(sys.modules, "scanfit.workers.cluster", raising=False)
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError, match=r"pip install 'scanfit\[cluster\]'"):
        start_workers(partial(load_posterior, toy()), cluster="local")


def test_what_cannot_be_sent_is_refused_at_once(scheduler: str) -> None:
    lock = logging.getLogger("root").handlers or [logging.StreamHandler()]

    def build() -> Posterior:
        raise RuntimeError(lock)

    with pytest.raises(InputError, match=r"compute\.cluster: .* cannot be sent to a cluster"):
        start_workers(build, cluster=scheduler)
