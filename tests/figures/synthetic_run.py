"""Write a run folder as the driver leaves it, from a toy likelihood with the shapes that real scans have.

The toy is no physics: a thin band with a funnel ("abundance"), an upper limit ("recoils") and a broad bump ("photons").
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scanfit.priors import FloatArray, Normal
from scanfit.results import Axis, Run
from scanfit.statistics import compare, intervals, profile_table
from scanfit.statistics.binned import Archive

INVENTED = "Invented demo data: the Corrie chamber, the Skua telescope and their observations do not exist."

PARAMETERS: tuple[dict[str, Any], ...] = (
    {"name": "mass", "unit": "GeV", "label": r"$m_\chi$ [GeV]", "symbol": r"m_\chi", "kind": "model", "free": True,
     "scale": "log", "low": 10.0, "high": 3000.0, "prior": {"prior": "log-uniform", "from": 10.0, "to": 3000.0}},
    {"name": "coupling", "unit": "", "label": r"$g_q$", "symbol": "g_q", "kind": "model", "free": True,
     "scale": "log", "low": 1e-3, "high": 1.0, "prior": {"prior": "log-uniform", "from": 1e-3, "to": 1.0}},
    {"name": "mediator_mass", "unit": "GeV", "label": r"$M_V$ [GeV]", "symbol": "M_V", "kind": "model", "free": False,
     "scale": "linear", "low": 700.0, "high": 700.0, "prior": {"prior": "fixed", "value": 700.0}},
    {"name": "local_density", "unit": "GeV/cm³", "label": r"$\rho_0$ [GeV/cm³]", "symbol": r"\rho_0",
     "kind": "nuisance", "free": True, "scale": "linear", "low": None, "high": None,
     "prior": {"prior": "normal", "mean": 0.4, "sigma": 0.05}},
)  # fmt: skip
QUANTITIES: tuple[dict[str, Any], ...] = (
    {"name": "sigma_si_proton", "unit": "cm²", "label": r"$\sigma^\mathrm{SI}_p$ [cm²]",
     "symbol": r"\sigma^\mathrm{SI}_p", "scale": "log", "description": "cross section on protons"},
    {"name": "dm_fraction", "unit": "", "label": r"$f_\mathrm{DM}$", "symbol": r"f_\mathrm{DM}", "scale": "log",
     "description": "fraction of the dark matter"},
    {"name": "absent", "unit": "", "label": "absent", "symbol": "", "scale": "log",
     "description": "a quantity that this model does not predict"},
)  # fmt: skip
TERMS: dict[str, dict[str, Any]] = {
    "relic": {"use": "relic-abundance", "summary": "abundance", "caveats": []},
    "xenon": {"use": "direct-detection", "summary": "recoils", "caveats": [INVENTED]},
    "dwarfs": {"use": "gamma-dwarfs", "summary": "photons", "caveats": [INVENTED]},
}
FREE = ("mass", "coupling", "local_density")
CONSTRAINTS = {"local_density": Normal(mean=0.4, sigma=0.05)}
PLANES = (("mass", "coupling"), ("mass", "sigma_si_proton"))


def rows(unit: FloatArray) -> pd.DataFrame:
    """Evaluate the toy at points of the unit cube, shape (n, 3)."""
    from scipy.special import ndtri

    mass, coupling = 10.0 * 300.0 ** unit[:, 0], 1e-3 * 1000.0 ** unit[:, 1]
    density = 0.4 + 0.05 * ndtri(np.clip(unit[:, 2], 1e-15, 1.0 - 1e-15))
    pole = np.square(4.0 * np.square(mass / 700.0) - 1.0) + 3e-3
    log_abundance = np.log10(0.12) - 2.0 * np.log10(coupling / 0.12) + np.log10(pole) - 0.6 * np.log10(mass / 350.0)
    fraction = np.minimum(1.0, 10.0 ** (log_abundance - np.log10(0.12)))
    sigma = 3e-44 * np.square(coupling / 0.3)
    counts = 40.0 * fraction * (density / 0.4) * sigma / 1e-45 / (1.0 + mass / 60.0) * np.exp(-12.0 / mass)
    frame = pd.DataFrame({"mass": mass, "coupling": coupling, "local_density": density})
    frame["log_prior"] = 0.0
    relic = -0.5 * np.square((log_abundance - np.log10(0.12)) / 0.04) - np.log(0.04 * np.sqrt(2.0 * np.pi))
    xenon = 2.0 * np.log(counts + 1.6) - (counts + 1.6) - np.log(2.0)
    dwarfs = -0.5 * np.square((np.log10(mass) - 2.55) / 0.45)
    frame["log_likelihood"] = relic + xenon + dwarfs
    frame["status"] = 0.0
    frame["loglike_relic"], frame["loglike_xenon"], frame["loglike_dwarfs"] = relic, xenon, dwarfs
    frame["sigma_si_proton"], frame["dm_fraction"], frame["absent"] = sigma, fraction, np.nan
    frame["flag_width_large"] = (coupling > 0.5).astype(float)
    return frame


def walk(seed: int, walkers: int, steps: int, temperature: float) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Differential-evolution Metropolis: every point evaluated, and the chain's second half with weights."""
    rng = np.random.default_rng(seed)
    unit = rng.random((40 * walkers, 3))
    seen = [rows(unit)]
    keep = np.argsort(seen[0]["log_likelihood"].to_numpy())[-walkers:]
    unit, now = unit[keep], seen[0].iloc[keep].reset_index(drop=True)
    chain = []
    for step in range(steps):
        one, two = rng.permutation(walkers), rng.permutation(walkers)
        length = 1.0 if step % 5 == 0 else rng.random((walkers, 1))
        jump = length * (unit[one] - unit[two]) + 1e-4 * rng.normal(size=unit.shape)
        proposal = unit + jump
        inside = np.all((proposal > 0.0) & (proposal < 1.0), axis=1)
        trial = rows(np.where(inside[:, np.newaxis], proposal, unit))
        seen.append(trial[inside])
        gain = (trial["log_likelihood"] - now["log_likelihood"]).to_numpy() / temperature
        accept = inside & (np.log(rng.random(walkers)) < gain)
        unit = np.where(accept[:, np.newaxis], proposal, unit)
        now = trial.where(pd.Series(accept), now, axis=0)
        if step > steps // 2 and step % 10 == 0:
            chain.append(now)
    posterior = pd.concat(chain, ignore_index=True)
    log_weight = posterior["log_likelihood"].to_numpy() * (1.0 - 1.0 / temperature)
    weight = np.exp(log_weight - log_weight.max())
    return pd.concat(seen, ignore_index=True), posterior.assign(weight=weight / weight.sum())


def write_run(folder: Path, walkers: int = 200, steps: int = 120, shift: float = 0.0) -> Run:
    """Write the folder.

    Parameters
    ----------
    folder : Path
        Created if need be.
    walkers, steps : int
        Size of the two chains; the archive gets about ``2 * walkers * (steps + 40)`` points.
    shift : float
        Decades by which the second explorer's masses are falsified.
    """
    first_seen, nested = walk(1, walkers, steps, 1.5)
    second_seen, ensemble = walk(2, walkers, steps, 1.0)
    ensemble["mass"] *= 10.0**shift
    points = pd.concat([first_seen, second_seen], ignore_index=True)
    failed = points.index[::997]
    points.loc[failed, "status"] = 1.0
    points.loc[failed, "log_likelihood"] = -np.inf
    points.loc[failed, "loglike_dwarfs"] = np.nan
    (folder / "points").mkdir(parents=True)
    for number, start in enumerate(range(0, len(points), 20_000)):
        points.iloc[start : start + 20_000].to_parquet(folder / "points" / f"part-{number:06d}.parquet", index=False)
    histories = {"nested": _nested_history(), "ensemble": _ensemble_history()}
    for name, frame in (("nested", nested), ("ensemble", ensemble)):
        (folder / "explorers" / name).mkdir(parents=True)
        frame.to_parquet(folder / "explorers" / name / "posterior.parquet", index=False)
        np.savez(folder / "explorers" / name / "history.npz", **histories[name])
    nested.to_parquet(folder / "posterior.parquet", index=False)
    axes = {
        item["name"]: Axis(item["name"], item["label"], item["scale"], item.get("low"), item.get("high"))
        for item in (*PARAMETERS, *QUANTITIES)
        if item.get("free", True)
    }
    profile_table(points, axes, PLANES, CONSTRAINTS).to_parquet(folder / "profile.parquet", index=False)
    summary = _summary(points, {"nested": nested, "ensemble": ensemble}, axes)
    (folder / "summary.json").write_text(json.dumps(summary, allow_nan=False), encoding="utf-8")
    return Run(folder)


def _summary(points: pd.DataFrame, posteriors: dict[str, pd.DataFrame], axes: dict[str, Axis]) -> dict[str, Any]:
    best = points.loc[Archive(points, CONSTRAINTS).best_row]
    compared = {name: axes[name] for name in FREE}
    return {
        "title": "Toy mediator against three <invented> searches",
        "model": {"use": "toy-mediator", "coupling": "vector"},
        "finished": True,
        "converged": True,
        "caveats": [INVENTED, "The likelihood is a toy & no physics."],
        "inner_nuisances": "marginal",
        "parameters": list(PARAMETERS),
        "quantities": list(QUANTITIES),
        "terms": TERMS,
        "flags": {
            "width_large": {"meaning": "the width exceeds a tenth of the mass", "posterior_fraction": 0.0125,
                            "best_fit": False},
            "extrapolated": {"meaning": "a table was left", "posterior_fraction": 0.0, "best_fit": False},
        },
        "planes": [list(plane) for plane in PLANES],
        "best_fit": {
            "values": {**{name: float(best[name]) for name in FREE}, "mediator_mass": 700.0},
            "log_likelihood": float(best["log_likelihood"]),
            "terms": {name: float(best[f"loglike_{name}"]) for name in TERMS},
            "derived": {"sigma_si_proton": float(best["sigma_si_proton"]), "dm_fraction": float(best["dm_fraction"]),
                        "absent": None},
            "flags": {"width_large": False, "extrapolated": False},
            "explorer": "nested",
            "explain": {
                "relic": [{"name": "relic abundance", "predicted": 0.1193, "observed": 0.12, "uncertainty": 0.012,
                           "limit": None, "unit": "", "note": "theory error 10 % added"}],
                "xenon": [
                    {"name": "events, 3 to 10 keV", "predicted": 2.31, "observed": 2.0, "uncertainty": None,
                     "limit": None, "unit": "events", "note": "background 1.6"},
                    {"name": "cross section on protons", "predicted": 1.234e-46, "observed": None,
                     "uncertainty": None, "limit": 4.7e-47, "unit": "cm²", "note": "90 % limit at this mass"}],
                "dwarfs": [],
            },
        },
        "log_evidence": -4.213,
        "log_evidence_error": 0.061,
        "intervals": intervals(posteriors["nested"], points, axes, CONSTRAINTS),
        "explorers": {
            "nested": {"converged": True, "verdict": "remaining evidence 0.008 below 0.01", "log_evidence": -4.213,
                       "log_evidence_error": 0.061, "calls": 30_000, "wall_seconds": 41.2,
                       "diagnostics": {"live_points": 400, "efficiency": 0.113}},
            "ensemble": {"converged": True, "verdict": "87 autocorrelation times, largest R-hat 1.008",
                         "log_evidence": None, "log_evidence_error": None, "calls": 32_000, "wall_seconds": 44.8,
                         "diagnostics": {"ensembles": 4, "acceptance": 0.31}},
        },
        "comparison": compare(posteriors, compared, effective_sizes={"ensemble": 3000.0}),
        "calls": len(points),
        "failed_points": 1,
        "wall_seconds": 86.4,
        "versions": {"scanfit": "0.1.0", "numpy": np.__version__, "python": "3.11"},
    }  # fmt: skip


def _nested_history() -> dict[str, FloatArray]:
    log_volume = -np.linspace(0.0, 14.0, 700)
    log_likelihood = 1.2 - 9.0 * np.exp(log_volume * 0.55)
    log_evidence = np.logaddexp.accumulate(log_likelihood + log_volume + np.log(14.0 / 700.0))
    efficiency = 0.1 + 0.85 * np.exp(log_volume / 3.0 + 0.0)
    calls = np.cumsum(40.0 / efficiency)
    return {"calls": calls, "log_prior_volume": log_volume, "log_evidence": log_evidence,
            "log_likelihood": log_likelihood, "efficiency": efficiency, "unheard_of": np.zeros(3)}  # fmt: skip


def _ensemble_history() -> dict[str, FloatArray]:
    calls = np.linspace(2_000, 32_000, 16)
    limit = np.array([34.0, 41.0, 29.0])
    times = limit * (1.0 - np.exp(-calls[:, np.newaxis] / 6_000))
    r_hat = 1.0 + 0.4 * np.exp(-calls[:, np.newaxis] / np.array([5_000, 7_500, 4_000]))
    length = 87.0 * calls / calls[-1]
    return {"calls": calls, "autocorrelation_time": times, "chain_length": length, "r_hat": r_hat}
