"""Run a scan from a checked run file to a finished folder, or carry on with one."""

from __future__ import annotations

import json
import os
import shutil
import time
from contextlib import ExitStack
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from scanfit import plugins
from scanfit.driver.interruption import Interruption
from scanfit.driver.recorder import Recorder
from scanfit.driver.reporter import Reporter, Silent, Tally
from scanfit.driver.summary import EXPLORATION, save_exploration, write_summary
from scanfit.errors import InputError, MissingPrediction, PointError, Problem, RunFolderError, ScanfitError, ScanStopped
from scanfit.posterior import Posterior
from scanfit.results import EXPLORERS, FIGURES, POINTS, POSTERIOR, PROFILE, REPORT, SUMMARY
from scanfit.runfile import HARMLESS_KEYS, PlannedExplorer, RunFile, load_posterior
from scanfit.store.archive import PointsArchive
from scanfit.store.atomic import UNFINISHED, write_json
from scanfit.store.failures import FailureLog
from scanfit.store.lock import RunLock
from scanfit.store.manifest import MANIFEST, Manifest
from scanfit.workers.contract import Workers
from scanfit.workers.start import start_workers

STATUS = "status.json"
FAILURES = "failures.jsonl"


@dataclass(frozen=True)
class Outcome:
    """How a call of `run` ended: the folder, its summary, and whether it had been finished before."""

    folder: Path
    summary: dict[str, Any]
    was_finished: bool


def run(
    run_file: RunFile,
    out: Path,
    *,
    workers: int | None = None,
    fresh: bool = False,
    reporter: Reporter | None = None,
) -> Outcome:
    """Start a scan, or carry on if `out` already holds it.

    Parameters
    ----------
    run_file : RunFile
        What to do.
    out : Path
        The run folder; made if it is not there.
    workers : int, optional
        Overrides the run file's number; the result does not depend on it.
    fresh : bool
        Remove an earlier run from the folder first.
    reporter : Reporter, optional
        Silent by default.

    Raises
    ------
    RunFolderError
        If the folder holds another run, or cannot be used.
    ScanStopped
        If a stop rule or a signal ended it; the same call carries on.
    InputError
        If a term needs what the model does not predict.
    """
    reporter = reporter or Silent()
    _make_folder(out)
    with ExitStack() as stack:
        strangers = [
            child.name
            for child in out.iterdir()
            if child.name not in RunLock.FILES and not child.name.endswith(UNFINISHED)
        ]
        lock = stack.enter_context(RunLock(out))
        for notice in lock.notices:
            reporter.note(notice)
        if fresh:
            _clear(out)
        elif strangers and not (out / MANIFEST).is_file():
            raise RunFolderError(f"{out} is not empty and holds no scanfit run; choose another folder with --out")
        meaning = {**run_file.data, "order of terms": list(run_file.posterior.terms)}  # it is that of the columns
        manifest = Manifest.of_run(meaning, HARMLESS_KEYS, run_file.data_files, _sources(run_file))
        _check_identity(out, manifest)
        finished = _finished_summary(out, run_file)
        if finished is not None:
            if not (out / REPORT).is_file():
                draw(out)  # killed, or failed, between the results and their pictures
            return Outcome(out, finished, was_finished=True)
        check_predictions(run_file.posterior)
        manifest.write(out / MANIFEST)
        archive = PointsArchive(out / POINTS, run_file.posterior.columns, run_file.posterior.space.dimension)
        archive.lookup(np.empty((0, run_file.posterior.space.dimension)))  # reads every part, and finds damage
        for notice in archive.notices:
            reporter.note(notice)
        if len(archive):
            _prove_identity(run_file.posterior, archive)
            reporter.note(f"carrying on: {len(archive):,} points are known and will not be evaluated again")
        interruption = stack.enter_context(Interruption())
        pool = stack.enter_context(_workers(run_file, workers))
        recorder = Recorder(
            run_file.posterior,
            archive,
            FailureLog(out / FAILURES),
            pool,
            reporter,
            interruption,
            flush_seconds=run_file.compute.checkpoint_seconds,
            failed_fraction_maximum=run_file.run.failed_fraction_maximum,
            on_flush=partial(_write_status, out, "running"),
        )
        try:
            explorations = {
                planned.name: _explore(planned, run_file, out, archive, recorder, reporter)
                for planned in run_file.explorers
            }
        except ScanStopped:
            recorder.flush()
            _write_status(out, "stopped", recorder.tally())
            raise
        finally:
            reporter.close()
        archive.compact()
        summary = write_summary(out, run_file, archive, explorations)
        _write_status(out, "finished", recorder.tally())
    draw(out)
    return Outcome(out, summary, was_finished=False)


def draw(folder: Path) -> list[Path]:
    """Make every installed figure and report of a finished run folder; return the files written.

    Raises
    ------
    ScanfitError
        If a figure cannot be drawn; the results themselves are whole.
    """
    files: list[Path] = []
    for name, point in plugins.installed("figures").items():
        try:
            files += point.load()(folder)
        except ScanfitError:
            raise
        except Exception as error:  # a figure plug-in may raise anything
            raise ScanfitError(
                f"the results in {folder} are complete, but {name} cannot be drawn: {type(error).__name__}: {error}; "
                f"'scanfit report {folder}' tries again"
            ) from error
    return files


def check_predictions(posterior: Posterior) -> None:
    """Evaluate the middle of the prior once, so that a term the model cannot serve is found before the scan.

    It also compiles the kernels, once, before the workers load them from the cache.

    Raises
    ------
    InputError
        Naming every term that needs a missing prediction.
    """
    middle = posterior.space.from_unit(np.full(posterior.space.dimension, 0.5))
    values = posterior.space.values(middle)
    try:
        prediction = posterior.model.predict(values)
    except PointError:
        return  # the middle of the prior may well be a point without meaning; others are not
    problems = []
    for name, term in posterior.terms.items():
        try:
            term.loglike(prediction, values)
        except MissingPrediction as error:
            problems.append(Problem(f"terms.{name}", f"{term.name} cannot be used: {error}"))
        except Exception:  # counted and reported like any other failed point, by the scan itself
            continue
    if problems:
        raise InputError(problems)
    posterior.evaluate_many(middle[None, :])


def _explore(
    planned: PlannedExplorer,
    run_file: RunFile,
    out: Path,
    archive: PointsArchive,
    recorder: Recorder,
    reporter: Reporter,
) -> dict[str, Any]:
    verdict = out / EXPLORERS / planned.name / EXPLORATION
    if not verdict.is_file():
        recorder.begin(planned.name)
        started = time.monotonic()
        explorer = planned.kind(planned.options)
        explorer.start(run_file.posterior.space.free_names, _seed(run_file.run.seed, planned.name), recorder)
        while not explorer.finished:
            recorder.note_progress(explorer.advance())
        recorder.flush()
        reporter.close()
        exploration = explorer.result()
        save_exploration(out, planned.name, exploration, run_file.posterior, archive, time.monotonic() - started)
        mark = "converged" if exploration.converged else "NOT CONVERGED"
        reporter.note(f"{planned.name}: {mark}. {exploration.verdict}")
    found: dict[str, Any] = json.loads(verdict.read_text(encoding="utf-8"))
    return found


def _seed(seed: int, name: str) -> np.random.SeedSequence:
    """An explorer's own branch of the seed tree, the same whichever others run."""
    return np.random.SeedSequence(seed, spawn_key=tuple(name.encode()))


def _workers(run_file: RunFile, workers: int | None) -> Workers:
    count = workers or run_file.compute.workers or len(os.sched_getaffinity(0))
    return start_workers(
        partial(load_posterior, run_file.path.resolve()),
        count=count,
        cluster=run_file.compute.cluster,
        seconds_per_point_maximum=run_file.compute.seconds_per_point_maximum,
    )


def _sources(run_file: RunFile) -> dict[str, type[Any]]:
    """The classes whose source is part of the run's identity."""
    posterior = run_file.posterior
    return {
        "model": type(posterior.model),
        **{f"terms.{name}": type(term) for name, term in posterior.terms.items()},
        **{f"explore.{planned.name}": planned.kind for planned in run_file.explorers},
    }


def _make_folder(out: Path) -> None:
    try:
        out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise RunFolderError(f"{out} cannot be made: {error.strerror}") from None


def _check_identity(out: Path, manifest: Manifest) -> None:
    path = out / MANIFEST
    changes = Manifest.read(path).changes(manifest) if path.is_file() else []
    if changes:
        listed = "\n  ".join(changes)
        raise RunFolderError(
            f"{out} holds another run. What changed:\n  {listed}\n"
            "Undo the change to carry on, run with --fresh to start again, or with --out for another folder."
        )


def _finished_summary(out: Path, run_file: RunFile) -> dict[str, Any] | None:
    """The summary, if nothing is left to do; other planes or another title need a new one, but no new points."""
    if not (out / SUMMARY).is_file():
        return None
    summary: dict[str, Any] = json.loads((out / SUMMARY).read_text(encoding="utf-8"))
    planes = [list(plane) for plane in run_file.figures.planes]
    return summary if summary["planes"] == planes and summary["title"] == run_file.run.title else None


def _prove_identity(posterior: Posterior, archive: PointsArchive) -> None:
    """Evaluate the first archived point again; its bytes must be the same."""
    stored = archive.take(np.array([0]))[list(posterior.columns)].to_numpy(dtype=float)
    again = posterior.evaluate_many(stored[:, : posterior.space.dimension]).rows
    if not np.array_equal(stored, again, equal_nan=True):
        different = [
            f"{name}: {old!r} then, {new!r} now"
            for name, old, new in zip(posterior.columns, stored[0].tolist(), again[0].tolist(), strict=True)
            if old != new and not (np.isnan(old) and np.isnan(new))
        ]
        listed = "\n  ".join(different)
        raise RunFolderError(
            f"a stored point, evaluated again, gives something else, so the run cannot be carried on.\n  {listed}\n"
            "Run with --fresh to start again, or with --out for another folder."
        )


def _clear(out: Path) -> None:
    """Remove an earlier run; whatever else the folder holds is the user's and stays."""
    for name in (MANIFEST, SUMMARY, POSTERIOR, PROFILE, REPORT, STATUS, FAILURES, POINTS, EXPLORERS, FIGURES):
        path = out / name
        if path.is_dir():
            shutil.rmtree(path)
        else:
            path.unlink(missing_ok=True)


def _write_status(out: Path, phase: str, tally: Tally) -> None:
    write_json(
        out / STATUS,
        {
            "phase": phase,
            "explorer": tally.explorer,
            "step": tally.progress.phase,
            "fraction": tally.progress.fraction,
            "numbers": dict(tally.progress.numbers),
            "points": tally.archived,
            "failed_points": tally.failed,
            "points_per_second": tally.rate,
            "seconds_left": tally.seconds_left,
            "best_log_likelihood": tally.best,
            "workers": tally.workers,
            "written": time.time(),
        },
    )
