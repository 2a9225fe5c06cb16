"""Write what a finished scan leaves: posterior points, history, profile table and summary."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scanfit.contracts import Exploration, Observable
from scanfit.posterior import Posterior, Status
from scanfit.priors import LogNormal, LogUniform, Prior
from scanfit.results import EXPLORERS, FIGURES, HISTORY, POSTERIOR, PROFILE, SUMMARY, Axis
from scanfit.runfile import RunFile
from scanfit.space import Parameter
from scanfit.statistics.binned import log_constraint
from scanfit.statistics.comparison import compare
from scanfit.statistics.marginals import intervals
from scanfit.statistics.profile import profile_table
from scanfit.store.archive import PointsArchive
from scanfit.store.atomic import write_json, write_npz, write_parquet
from scanfit.store.fingerprint import package_versions

EXPLORATION = "exploration.json"


def save_exploration(
    folder: Path, name: str, exploration: Exploration, posterior: Posterior, archive: PointsArchive, seconds: float
) -> None:
    """Write one explorer's weighted points, curves and verdict under ``explorers/<name>/``.

    The verdict comes last: it says that the rest is whole.
    """
    home = folder / EXPLORERS / name
    home.mkdir(parents=True, exist_ok=True)
    points = posterior.space.from_unit(exploration.unit_points) + 0.0  # as the recorder archives them
    frame = archive.take(archive.row_numbers(points))
    frame["weight"] = np.exp(exploration.log_weights - np.logaddexp.reduce(exploration.log_weights))
    write_parquet(home / POSTERIOR, frame)
    write_npz(home / HISTORY, exploration.history)
    verdict = {
        "converged": exploration.converged,
        "verdict": exploration.verdict,
        "log_evidence": exploration.log_evidence,
        "log_evidence_error": exploration.log_evidence_error,
        "effective_samples": exploration.diagnostics.get(
            "effective_samples", float(1.0 / np.square(frame["weight"]).sum())
        ),
        "calls": len(archive),
        "wall_seconds": seconds,
        "diagnostics": exploration.diagnostics,
    }
    write_json(home / EXPLORATION, verdict)


def write_summary(
    folder: Path, run_file: RunFile, archive: PointsArchive, explorations: Mapping[str, Mapping[str, Any]]
) -> dict[str, Any]:
    """Compute intervals, profiles and comparisons, and write them; ``summary.json`` comes last.

    Parameters
    ----------
    folder : Path
        The run folder.
    run_file : RunFile
        What was run.
    archive : PointsArchive
        Every point evaluated.
    explorations : mapping of str to mapping
        What `save_exploration` wrote, by explorer.
    """
    posterior = run_file.posterior
    posteriors = {name: pd.read_parquet(folder / EXPLORERS / name / POSTERIOR) for name in explorations}
    first = next(iter(posteriors.values()))
    write_parquet(folder / POSTERIOR, first)
    axes = {item["name"]: _axis(item) for item in [*parameter_entries(posterior), *quantity_entries(posterior)]}
    wanted = [*posterior.space.free_names, *(quantity.name for quantity in posterior.quantities)]
    drawable = {name: axes[name] for name in wanted if name in axes}
    points = archive.frame([*drawable, "log_likelihood", "status", *posterior.term_columns])
    rejected = int((points["status"] == Status.REJECTED).sum())
    points = points[points["status"] == Status.EVALUATED]
    constraints = nuisance_constraints(posterior)
    write_parquet(folder / PROFILE, profile_table(points, drawable, run_file.figures.planes, constraints))
    evidences = {
        name: (found["log_evidence"], found["log_evidence_error"])
        for name, found in explorations.items()
        if found["log_evidence"] is not None
    }
    log_evidence, log_evidence_error = next(iter(evidences.values()), (None, None))
    best = best_fit(posterior, archive)
    summary: dict[str, Any] = {
        "title": run_file.run.title,
        "model": dict(run_file.data["model"]),
        "finished": True,
        "converged": all(e["converged"] for e in explorations.values()),
        "caveats": run_file.caveats,
        "inner_nuisances": run_file.run.inner_nuisances,
        "best_fit": best,
        "log_evidence": log_evidence,
        "log_evidence_error": log_evidence_error,
        "intervals": intervals(first, points, drawable, constraints),
        "explorers": explorations,
        "comparison": compare(
            posteriors,
            {name: drawable[name] for name in posterior.space.free_names},
            evidences=evidences,
            effective_sizes={name: found["effective_samples"] for name, found in explorations.items()},
        ),
        "diagnostics": {name: exploration["diagnostics"] for name, exploration in explorations.items()},
        "flags": _flags(posterior, first, best),
        "terms": {
            name: {"use": term.name, "summary": term.summary, "caveats": term.caveats}
            for name, term in posterior.terms.items()
        },
        "parameters": parameter_entries(posterior),
        "quantities": quantity_entries(posterior),
        "planes": run_file.figures.planes,
        "calls": len(archive),
        "failed_points": len(archive) - len(points) - rejected,
        "reject_flags": posterior.reject_flags,
        "rejected_points": rejected,
        "wall_seconds": sum(e["wall_seconds"] for e in explorations.values()),
        "versions": package_versions(),
    }
    write_json(folder / SUMMARY, summary)
    (folder / FIGURES).mkdir(exist_ok=True)
    return summary


def nuisance_constraints(posterior: Posterior) -> dict[str, Prior]:
    """Priors of the free nuisances, which a profile likelihood counts as measurements of them."""
    return {p.name: posterior.space.prior(p.name) for p in posterior.space.free if p.kind == "nuisance"}


def best_fit(posterior: Posterior, archive: PointsArchive) -> dict[str, Any]:
    """The archived point of highest likelihood, constraints on nuisances included, with everything known about it."""
    names = list(posterior.space.free_names)
    points = archive.frame([*names, "log_likelihood"])
    height = points["log_likelihood"].to_numpy() + log_constraint(points, nuisance_constraints(posterior))
    highest = points.iloc[int(np.argmax(height))]
    return describe_point(posterior, posterior.space.values(highest[names].to_numpy(dtype=float)))


def describe_point(posterior: Posterior, values: Mapping[str, float]) -> dict[str, Any]:
    """Log-likelihoods, derived quantities, flags and predicted beside observed at one point.

    Parameters
    ----------
    values : mapping
        All parameters by name.
    """
    batch = posterior.evaluate(values)
    row = dict(zip(posterior.columns, batch.rows[0].tolist(), strict=True))
    failure = batch.failures[0] if batch.failures else None
    explained: Mapping[str, Any] = posterior.explain(values) if failure is None else {}
    return {
        "values": dict(values),
        "log_prior": row["log_prior"],
        "log_likelihood": row["log_likelihood"],
        "terms": {name: row[f"loglike_{name}"] for name in posterior.terms},
        "derived": {quantity.name: row[quantity.name] for quantity in posterior.quantities},
        "flags": {name: row[f"flag_{name}"] == 1.0 for name in posterior.flag_names},
        "rejected_for": [name for name in posterior.reject_flags if row[f"flag_{name}"] == 1.0],
        "explain": {name: [_observable(item) for item in items] for name, items in explained.items()},
        **({"failure": f"{failure.culprit}: {failure.message}"} if failure else {}),
    }


def parameter_entries(posterior: Posterior) -> list[dict[str, Any]]:
    """What the summary says of each parameter."""
    free = set(posterior.space.free_names)
    return [_parameter_entry(parameter, parameter.name in free) for parameter in posterior.space.parameters]


def quantity_entries(posterior: Posterior) -> list[dict[str, Any]]:
    """What the summary says of each derived quantity."""
    return [{**dataclasses.asdict(quantity), "label": quantity.label} for quantity in posterior.quantities]


def _parameter_entry(parameter: Parameter, free: bool) -> dict[str, Any]:
    prior = parameter.prior
    assert prior is not None  # a space holds no parameter without one
    low, high = prior.support
    return {
        "name": parameter.name,
        "unit": parameter.unit,
        "symbol": parameter.symbol,
        "label": parameter.label,
        "kind": parameter.kind,
        "description": parameter.description,
        "free": free,
        "scale": "log" if isinstance(prior, LogUniform | LogNormal) else "linear",
        "low": low if math.isfinite(low) and not (low == 0.0 and isinstance(prior, LogNormal)) else None,
        "high": high if math.isfinite(high) else None,
        "prior": prior.model_dump(by_alias=True),
    }


def _axis(entry: Mapping[str, Any]) -> Axis:
    return Axis(entry["name"], entry["label"], entry["scale"], entry.get("low"), entry.get("high"))


def _flags(posterior: Posterior, first: pd.DataFrame, best: Mapping[str, Any]) -> dict[str, Any]:
    return {
        name: {
            "meaning": posterior.model.flag_names[name],
            "posterior_fraction": float(first.loc[first[f"flag_{name}"] == 1.0, "weight"].sum()),
            "best_fit": best["flags"][name],
        }
        for name in posterior.flag_names
    }


def _observable(item: Observable) -> dict[str, Any]:
    return dataclasses.asdict(item)
