"""Worker processes under attack: points that kill, hang or cannot be built, and signals from outside."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from scanfit.errors import InputError, ScanfitError
from scanfit.posterior import Posterior, Status
from scanfit.priors import FloatArray
from scanfit.runfile import load_posterior
from scanfit.workers.processes import ProcessWorkers
from scanfit.workers.serial import SerialWorkers
from scanfit.workers.start import start_workers

Toy = Callable[..., Path]


def trouble(toy: Toy, how: str, above: float = 0.9, milliseconds: float = 0.0) -> Path:
    term = f'[terms.trouble]\nuse = "toy.py:Trouble"\nhow = "{how}"\nabove = {above}\n\n[explore]'
    return toy(("[explore]", term), ("sigma = 0.2", f"sigma = 0.2\nmilliseconds = {milliseconds}"))


def points(number: int, *, bad: tuple[int, ...] = ()) -> FloatArray:
    """Points with x < 0.5, except `bad` ones with x = 0.95."""
    found = np.random.default_rng(3).uniform(-0.5, 0.5, (number, 3))
    found[list(bad), 0] = 0.95
    return found


def harmless(path: Path, given: FloatArray) -> FloatArray:
    """Rows of points that do not get as far as the trouble."""
    return load_posterior(path).evaluate_many(given).rows


@contextmanager
def killing(workers: ProcessWorkers, every: float, times: int) -> Iterator[list[int]]:
    """Kill one of the workers at regular times; give the list of those killed."""
    killed: list[int] = []
    end = threading.Event()

    def kill() -> None:
        dice = np.random.default_rng(4)
        while len(killed) < times and not end.wait(every):
            number = int(dice.choice(workers.process_numbers))
            os.kill(number, signal.SIGKILL)
            killed.append(number)

    thread = threading.Thread(target=kill)
    thread.start()
    try:
        yield killed
    finally:
        end.set()
        thread.join()


def test_workers_killed_in_the_middle_change_nothing(toy: Toy) -> None:
    path = toy(("sigma = 0.2", "sigma = 0.2\nmilliseconds = 10.0"))
    given = points(150)
    with ProcessWorkers(partial(load_posterior, path), 2) as workers:
        workers.evaluate(given[:2])
        with killing(workers, every=0.3, times=2) as killed:
            batch = workers.evaluate(given)
        assert killed, "the batch ended before a worker was killed: the test proves nothing"
        assert batch.rows.tobytes() == harmless(path, given).tobytes()
        assert not batch.failures
        assert workers.restarts >= 1


def test_a_point_that_kills_its_worker_is_marked_and_the_others_are_kept(toy: Toy) -> None:
    path = trouble(toy, "die")
    given = points(40, bad=(17,))
    with ProcessWorkers(partial(load_posterior, path), 2) as workers:
        batch = workers.evaluate(given)
        again = workers.evaluate(given[:10])
        assert workers.restarts == 3
    posterior = load_posterior(path)
    good = np.arange(40) != 17
    assert batch.rows[good].tobytes() == harmless(path, given[good]).tobytes()
    assert again.rows.tobytes() == batch.rows[:10].tobytes()
    assert_lost(posterior, batch.rows[17], given[17], Status.FAILED)
    (failure,) = batch.failures
    assert (failure.row, failure.culprit) == (17, "worker")
    assert failure.message == "took down 3 worker processes, the last ended by SIGKILL, often for want of memory"


def test_a_hanging_point_is_marked_and_the_others_are_kept(toy: Toy) -> None:
    path = trouble(toy, "hang")
    given = points(40, bad=(30,))
    with ProcessWorkers(partial(load_posterior, path), 2, time_limit=0.6) as workers:
        started = time.monotonic()
        batch = workers.evaluate(given)
        assert time.monotonic() - started < 30.0
        assert workers.restarts == 1
    good = np.arange(40) != 30
    assert batch.rows[good].tobytes() == harmless(path, given[good]).tobytes()
    assert_lost(load_posterior(path), batch.rows[30], given[30], Status.TIMED_OUT)
    (failure,) = batch.failures
    assert (failure.row, failure.culprit, failure.message) == (30, "worker", "took longer than 0.6 s")


def test_the_time_limit_is_for_a_point_and_not_for_a_batch(toy: Toy) -> None:
    path = toy(("sigma = 0.2", "sigma = 0.2\nmilliseconds = 50.0"))
    with ProcessWorkers(partial(load_posterior, path), 1, time_limit=0.6) as workers:
        batch = workers.evaluate(points(36))  # the first task has 18 points: 0.9 s
        assert workers.restarts == 0
    assert (batch.rows[:, load_posterior(path).column("status")] == Status.EVALUATED).all()


def test_an_interrupt_leaves_the_workers_fit_for_the_next_batch(toy: Toy) -> None:
    path = toy(("sigma = 0.2", "sigma = 0.2\nmilliseconds = 20.0"))
    given = points(100)
    with ProcessWorkers(partial(load_posterior, path), 2) as workers:
        workers.evaluate(given[:2])
        threading.Timer(0.3, os.kill, (os.getpid(), signal.SIGINT)).start()
        with pytest.raises(KeyboardInterrupt):
            workers.evaluate(given)
        assert workers.evaluate(given[50:60]).rows.tobytes() == harmless(path, given[50:60]).tobytes()


def test_ctrl_c_is_for_the_parent_alone(toy: Toy) -> None:
    path = toy(("sigma = 0.2", "sigma = 0.2\nmilliseconds = 20.0"))
    script = f"""
import numpy as np, sys
from functools import partial
from pathlib import Path
from scanfit.runfile import load_posterior
from scanfit.workers.processes import ProcessWorkers
with ProcessWorkers(partial(load_posterior, Path({str(path)!r})), 2) as workers:
    workers.evaluate(np.zeros((2, 3)))
    print("begun", flush=True)
    try:
        workers.evaluate(np.zeros((2000, 3)) + np.arange(2000)[:, None] / 1e5)
    except KeyboardInterrupt:
        sys.exit(7)
"""
    # Without a main guard in the script: starting workers must not run it again.
    process = subprocess.Popen(
        [sys.executable, "-c", script],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "begun\n"
    time.sleep(0.3)
    os.killpg(process.pid, signal.SIGINT)
    _, errors = process.communicate(timeout=30)
    assert (process.returncode, errors) == (7, "")


def test_no_worker_outlives_a_killed_parent_even_in_the_middle_of_a_point(toy: Toy) -> None:
    path = trouble(toy, "hang")
    script = f"""
import numpy as np
from functools import partial
from pathlib import Path
from scanfit.runfile import load_posterior
from scanfit.workers.processes import ProcessWorkers
workers = ProcessWorkers(partial(load_posterior, Path({str(path)!r})), 1)
workers.evaluate(np.zeros((1, 3)))
print(workers.process_numbers[0], flush=True)
workers.evaluate(np.full((1, 3), 0.95))
"""
    process = subprocess.Popen([sys.executable, "-c", script], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    worker = Path("/proc") / process.stdout.readline().strip()
    assert worker.exists()
    time.sleep(0.2)
    process.kill()
    process.communicate()
    deadline = time.monotonic() + 10.0
    while running(worker) and time.monotonic() < deadline:
        time.sleep(0.05)
    assert not running(worker)


def test_a_script_that_does_not_close_its_workers_ends_all_the_same(toy: Toy) -> None:
    script = f"""
import numpy as np
from functools import partial
from pathlib import Path
from scanfit.runfile import load_posterior
from scanfit.workers.processes import ProcessWorkers
workers = ProcessWorkers(partial(load_posterior, Path({str(toy())!r})), 2)
print(len(workers.evaluate(np.zeros((3, 3))).rows))
"""
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=60, check=False)
    assert (done.returncode, done.stdout, done.stderr) == (0, "3\n", "")


def test_workers_use_one_thread_each(toy: Toy) -> None:
    path = toy()

    def build() -> Posterior:
        if os.environ["OMP_NUM_THREADS"] != "1" or os.environ["NUMBA_NUM_THREADS"] != "1":
            raise AssertionError("more than one thread")
        return load_posterior(path)

    with ProcessWorkers(build, 1) as workers:
        assert len(workers.evaluate(points(2)).rows) == 2


def test_what_cannot_be_sent_is_refused_at_once() -> None:
    lock = threading.Lock()

    def build() -> Posterior:
        raise RuntimeError(lock)

    with pytest.raises(InputError, match=r"compute\.workers: .* cannot be sent to worker processes: .*lock"):
        ProcessWorkers(build, 2)


def test_a_posterior_that_cannot_be_built_is_reported_in_words(tmp_path: Path) -> None:
    workers = ProcessWorkers(partial(load_posterior, tmp_path / "missing.toml"), 2)
    with pytest.raises(ScanfitError, match=r"could not build the model: InputError: .*missing\.toml.* cannot be read"):
        workers.evaluate(points(2))
    with pytest.raises(ValueError, match="closed"):
        workers.evaluate(points(2))


def test_workers_that_die_before_they_begin_are_not_started_for_ever() -> None:
    workers = ProcessWorkers(partial(os._exit, 9), 1)
    with pytest.raises(ScanfitError, match="end before they can begin a point: exit status 9"):
        workers.evaluate(points(2))


def test_one_worker_without_a_time_limit_is_this_process(toy: Toy) -> None:
    assert isinstance(start_workers(partial(load_posterior, toy()), count=1), SerialWorkers)
    with pytest.raises(ValueError, match="at least one worker"):
        start_workers(partial(load_posterior, toy()), count=0)


def assert_lost(posterior: Posterior, row: FloatArray, point: FloatArray, status: Status) -> None:
    known = {"log_prior": posterior.space.log_prior(point), "log_likelihood": -np.inf, "status": float(status)}
    for place, name in enumerate(posterior.columns):
        if place < 3:
            assert row[place] == point[place]
        elif name in known:
            assert row[place] == known[name]
        else:
            assert np.isnan(row[place])


def running(process: Path) -> bool:
    """Whether a process exists and is not merely waiting to be reaped."""
    try:
        return (process / "stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False
