"""Make ``photon_spectra.npz`` and ``particle_spectra.npz`` from what ``simulate_decays.py`` summed up.

Nothing imports it at run time::

    python likelihoods/tables/simulate_decays.py sums.npz
    python likelihoods/tables/make_photon_spectra.py sums.npz

Several files of sums, made with different seeds, are added; those that say ``photons only`` count for photons only.
The shipped tables add two rounds (2,000 events a mass) to 6,000 of the first version of this script, which had its
own loop, let kaons decay and counted photons only; the metadata describe both runs.

``photon_spectra.npz`` holds, for each final state and mass, photons per annihilation in bins of log10 x, x = E/m, the
standard error of each bin and that of N(> x), the number above its lower edge. Few photons carry more than a tenth of
the mass: from there on counts are smoothed over neighbouring masses and energies (``smoothing.py``), and errors say
what remains. Final states with a Higgs boson are left as counted up to a tenth above threshold: its decay into two
photons makes edges there. Masses kept out for checking are never smoothed and take no part.

``particle_spectra.npz`` holds positrons, antiprotons (by kinetic energy) and three neutrinos (with antineutrinos) in
bins twice as wide, as counted. Nothing reads it yet.

Limits of the tables, repeated in their metadata:

* no electroweak shower, which matters for masses above about 1 TeV, for leptons most;
* W and Z bosons decay unpolarised;
* masses below 3 GeV or above 100 TeV are absent.
"""

from __future__ import annotations

import argparse
import hashlib
import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any, Final

import numpy as np

from scanfit.likelihoods.tables.smoothing import smooth

LOG10_X_EDGES: Final = np.round(np.linspace(-6.0, 0.0, 151), 10)
OTHER_SPECIES: Final = ("positrons", "antiprotons", "electron_neutrinos", "muon_neutrinos", "tau_neutrinos")
LINES_NEAR_THRESHOLD: Final = ("hh", "Zh")
SMOOTHED_FROM: Final = 1.1
"""Relative to the lowest mass: below, photons of h -> gamma gamma make edges that must not be smoothed away."""
SMOOTHED_ABOVE: Final = 0.1
FITTED_ABOVE: Final = 0.06
"""Counts between these two take part in smoothing, so that it has no edge where it begins to be used."""
LIMITS: Final = "no electroweak shower; unpolarised W and Z; 3 GeV to 100 TeV; uu stands for dd and ss too"


def add(paths: Sequence[Path]) -> tuple[dict[str, np.ndarray], list[dict[str, Any]]]:
    """Sums of several runs, and the metadata of each; `particle_events` are those of runs that counted all species."""
    runs = [dict(np.load(path)) for path in paths]
    described = [json.loads(str(run["metadata"])) for run in runs]
    for run, metadata in zip(runs, described, strict=True):
        run["particle_events"] = run["events"] * (metadata.get("species") != "photons only")
    first = runs[0]
    for run in runs[1:]:
        for name in ("channel", "mass", "held_out"):
            if not np.array_equal(run[name], first[name]):
                raise ValueError(f"the files differ in their {name}")
        for name in ("events", "particle_events", "total", "squares", "energy"):
            first[name] = first[name] + run[name]
    return first, described


def standard_errors(total: np.ndarray, squares: np.ndarray, events: np.ndarray) -> np.ndarray:
    """Standard errors of means per event; `events` broadcasts."""
    return np.asarray(np.sqrt(np.maximum(squares / events - (total / events) ** 2, 0.0) / events))


def checksum(arrays: dict[str, np.ndarray]) -> str:
    """SHA-256 over names and bytes of the arrays, in order of name."""
    digest = hashlib.sha256()
    for name in sorted(arrays):
        digest.update(name.encode())
        digest.update(np.ascontiguousarray(arrays[name]).tobytes())
    return digest.hexdigest()


def photon_arrays(sums: dict[str, np.ndarray], channel: str) -> tuple[dict[str, np.ndarray], list[float]]:
    """Arrays of one final state for the photon table, and the stiffness that smoothing chose."""
    rows = (sums["channel"] == channel) & ~sums["held_out"]
    events = sums["events"][rows].astype(float)[:, None]
    total = sums["total"][rows][:, 0]
    photons, error = total / events, standard_errors(total, sums["squares"][rows][:, 0], events)
    variance = (error**2)[:, ::-1].cumsum(axis=1)[:, ::-1]
    stiffness: list[float] = []
    mass = sums["mass"][rows]
    smoothed_rows = mass > (SMOOTHED_FROM * mass[0] if channel in LINES_NEAR_THRESHOLD else 0.0)
    if smoothed_rows.any():
        lower = 10.0 ** LOG10_X_EDGES[:-1]
        fitted = int(np.searchsorted(lower, FITTED_ABOVE * (1.0 - 1e-9)))
        used = int(np.searchsorted(lower, SMOOTHED_ABOVE * (1.0 - 1e-9)))
        rate, covariance, chosen = smooth(total[smoothed_rows, fitted:], events[smoothed_rows, 0])
        stiffness = [float(value) for value in chosen]
        photons[smoothed_rows, used:] = rate[:, used - fitted :]
        error[smoothed_rows, used:] = np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))[:, used - fitted :]
        above = covariance[:, ::-1, ::-1].cumsum(axis=1).cumsum(axis=2)[:, ::-1, ::-1]
        smoothed = np.diagonal(above, axis1=1, axis2=2)[:, used - fitted :]
        counted = variance[smoothed_rows, :used] - variance[smoothed_rows, used][:, None]
        variance[smoothed_rows, :used] = counted + smoothed[:, :1]
        variance[smoothed_rows, used:] = smoothed
    return {
        f"{channel}_mass": sums["mass"][rows],
        f"{channel}_photons": photons.astype(np.float32),
        f"{channel}_error": error.astype(np.float32),
        f"{channel}_above_error": np.sqrt(variance).astype(np.float32),
        f"{channel}_energy_fraction": sums["energy"][rows][:, 0] / (2.0 * events[:, 0]),
    }, stiffness


def particle_arrays(sums: dict[str, np.ndarray], channel: str) -> dict[str, np.ndarray]:
    """Arrays of one final state for the table of other particles."""
    rows = (sums["channel"] == channel) & ~sums["held_out"]
    events = sums["particle_events"][rows].astype(float)[:, None]
    arrays = {f"{channel}_mass": sums["mass"][rows]}
    for number, name in enumerate(OTHER_SPECIES, start=1):
        total = sums["total"][rows][:, number]
        squares = sums["squares"][rows][:, number]
        pairs = (total.shape[0], -1, 2)
        arrays[f"{channel}_{name}"] = (total / events).reshape(pairs).sum(axis=2).astype(np.float32)
        # Neighbouring bins are taken as independent, which they are to a few per cent of the error.
        error = np.sqrt((standard_errors(total, squares, events) ** 2).reshape(pairs).sum(axis=2))
        arrays[f"{channel}_{name}_error"] = error.astype(np.float32)
        arrays[f"{channel}_{name}_energy_fraction"] = sums["energy"][rows][:, number] / (2.0 * events[:, 0])
    return arrays


def main() -> None:
    """Make the tables and write them beside this script, or where the command line says."""
    parser = argparse.ArgumentParser(description="Make the tables of photon and particle spectra.")
    parser.add_argument("sums", type=Path, nargs="+", help="files of simulate_decays.py")
    parser.add_argument("--output", type=Path, default=Path(__file__).parent, help="folder of the tables")
    choice = parser.parse_args()
    sums, runs = add(choice.sums)
    channels = list(dict.fromkeys(sums["channel"].tolist()))
    photons: dict[str, np.ndarray] = {"log10_x_edges": LOG10_X_EDGES}
    others: dict[str, np.ndarray] = {"log10_x_edges": LOG10_X_EDGES[::2]}
    stiffness, numbers = {}, {}
    for channel in channels:
        arrays, stiffness[channel] = photon_arrays(sums, channel)
        photons |= arrays
        others |= particle_arrays(sums, channel)
        rows = (sums["channel"] == channel) & ~sums["held_out"]
        numbers[channel] = {
            f"{mass:g}": int(n) for mass, n in zip(sums["mass"][rows], sums["events"][rows], strict=True)
        }
        print(f"{channel}: stiffness along mass and energy {stiffness[channel]}", flush=True)
    out = sums["held_out"]
    events = sums["events"][out].astype(float)[:, None]
    photons["held_out_channel"], photons["held_out_mass"] = sums["channel"][out], sums["mass"][out]
    photons["held_out_photons"] = (sums["total"][out][:, 0] / events).astype(np.float32)
    error = standard_errors(sums["total"][out][:, 0], sums["squares"][out][:, 0], events)
    photons["held_out_error"] = error.astype(np.float32)
    common = {"runs": runs, "events_by_mass": numbers, "limits": LIMITS}
    for arrays, name, title, more in (
        (
            photons,
            "photon_spectra.npz",
            "photons per annihilation in bins of log10(E/m)",
            {
                "smoothed_above_x": SMOOTHED_ABOVE,
                "as_counted_near_threshold": LINES_NEAR_THRESHOLD,
                "stiffness": stiffness,
            },
        ),
        (others, "particle_spectra.npz", "particles per annihilation in bins of log10(E/m), antiprotons kinetic", {}),
    ):
        units = {"mass": "GeV", "photons and particles": "per annihilation and bin", "error": "standard error"}
        metadata = {"title": title, "units": units, **common, **more, "sha256": checksum(arrays)}
        arrays["metadata"] = np.array(json.dumps(metadata, indent=1))
        np.savez_compressed(choice.output / name, **arrays)  # type: ignore[arg-type]  # the stub's allow_pickle


if __name__ == "__main__":
    main()
