"""Make ``photon_spectra.npz``: photons per annihilation in bins of log10 x, x = E/m, by channel and mass.

Run it with the ``tables`` extra installed; nothing imports it at run time::

    python likelihoods/tables/make_photon_spectra.py --events 20000

A spinless resonance of mass 2m decays at rest into the two-body state; showers, decays of heavy particles and
hadronisation follow in the general-purpose event generator `pythia8mc` (its program is GPL, the table is data;
version and settings are in the table's metadata). Long-lived kaons and charged kaons decay too, as they do in
space; charged pions and muons make no photons.

Limits of the table, repeated in its metadata:

* no electroweak shower, which matters for masses above about 1 TeV, for leptons most;
* W and Z bosons decay unpolarised;
* masses below 3 GeV or above 100 TeV are absent.

Traps, each met in practice: a resonance of zero width, or below its threshold, is left undecayed while success
is reported, so every event is checked. With matrix-element corrections on, collinear radiation off electrons
comes out at 0.6-0.9 of the analytic rate above 1 TeV (measured; muons at 100 TeV alike, taus within 5 % of it),
so they are off for ee and mumu.
"""

from __future__ import annotations

import argparse
import datetime
import hashlib
import json
import math
import time
from importlib.metadata import version
from pathlib import Path
from typing import Any, Final

import numpy as np
import pythia8mc

CHANNEL_CODES: Final = {
    "uu": (2, -2), "cc": (4, -4), "bb": (5, -5), "tt": (6, -6), "gg": (21, 21),
    "ee": (11, -11), "mumu": (13, -13), "tautau": (15, -15),
    "WW": (24, -24), "ZZ": (23, 23), "hh": (25, 25), "Zh": (23, 25),
}  # fmt: skip
"""Particle codes of the final states; uu stands for the three light quarks."""

MASS_GRID: Final = (
    3.0, 3.6, 4.4, 5.5, 6.2, 7.0, 8.0, 9.0, 10.0, 11.5, 13.5, 16.0, 20.0, 27.0, 36.0, 50.0, 70.0, 100.0, 140.0, 200.0,
    300.0, 500.0, 800.0, 1300.0, 2200.0, 4000.0, 8000.0, 1.6e4, 4.0e4, 1.0e5,
)  # fmt: skip
"""GeV. Dense where bottom hadrons are slow: near 10 GeV a wider grid was off by tens of per cent between its points."""

W_MASS: Final = 80.377
Z_MASS: Final = 91.1876
HIGGS_MASS: Final = 125.25
TOP_MASS: Final = 172.7
LOWEST_MASS: Final = {
    "bb": 5.5, "WW": W_MASS, "ZZ": Z_MASS, "hh": HIGGS_MASS, "Zh": 0.5 * (Z_MASS + HIGGS_MASS), "tt": TOP_MASS,
}  # fmt: skip
ABOVE_THRESHOLD: Final = (1.003, 1.02, 1.06, 1.12, 1.2)
"""Further masses of the heavy channels, relative to threshold: there the spectrum changes with the velocity."""

HELD_OUT: Final = (
    ("bb", 8.5), ("bb", 24.0), ("bb", 240.0), ("bb", 3000.0), ("gg", 8.5), ("uu", 3.3), ("uu", 60.0), ("cc", 400.0),
    ("tautau", 23.0), ("tautau", 1000.0), ("WW", 86.0), ("WW", 165.0), ("ZZ", 400.0), ("tt", 220.0), ("hh", 160.0),
    ("Zh", 115.0), ("ee", 60.0), ("mumu", 1000.0),
)  # fmt: skip
"""Channels and masses (GeV) kept out of the table, to measure its interpolation against."""

LOG10_X_EDGES: Final = np.round(np.linspace(-6.0, 0.0, 151), 10)
SETTINGS: Final = (
    "Print:quiet = on",
    "ProcessLevel:all = off",
    "Random:setSeed = on",
    f"23:m0 = {Z_MASS}",
    f"24:m0 = {W_MASS}",
    f"25:m0 = {HIGGS_MASS}",
    f"6:m0 = {TOP_MASS}",
)
KAONS_DECAY: Final = ("130:mayDecay = on", "321:mayDecay = on")
LEPTON_SETTINGS: Final = ("TimeShower:MEcorrections = off",)
LEPTON_EVENTS: Final = 20
"""Events of ee and mumu cost and yield little, so there are this many times more."""
RESONANCE: Final = 99999
ENERGY_TOLERANCE: Final = 1e-4
"""Relative; typical events hold 1e-9, the generator itself throws out what breaks 1e-4."""
PHOTON: Final = 22


def masses_of(channel: str) -> list[float]:
    """Masses in GeV at which `channel` is simulated."""
    lowest = LOWEST_MASS.get(channel, 0.0)
    extra = [] if channel == "bb" or not lowest else [round(lowest * factor, 3) for factor in ABOVE_THRESHOLD]
    common = [mass for mass in MASS_GRID if mass >= lowest and all(abs(mass / other - 1.0) > 0.02 for other in extra)]
    return sorted(common + extra)


def events_of(channel: str, mass: float, events: int) -> int:
    """Number of events: a quarter above 10 TeV, where each takes long and makes many photons."""
    return (events if mass <= 1.0e4 else max(events // 4, 1)) * (LEPTON_EVENTS if channel in ("ee", "mumu") else 1)


def start_generator(settings: tuple[str, ...], seed: int) -> Any:
    """Start the generator or say which setting it does not know."""
    generator = pythia8mc.Pythia("", False)
    for line in (*SETTINGS, *settings, f"Random:seed = {seed}"):
        if not generator.readString(line):
            raise RuntimeError(f"the generator refuses {line!r}")
    if not generator.init():
        raise RuntimeError("the generator does not start")
    return generator


def next_decay(generator: Any, code: int, mass: float) -> Any:
    """Decay particle `code` of `mass` (GeV) at rest; returns the event record."""
    event = generator.event
    for _ in range(100):
        event.reset()
        event.append(code, 1, 0, 0, 0.0, 0.0, 0.0, mass, mass)
        if generator.next():
            if event[1].isFinal():
                raise RuntimeError(f"particle {code} of mass {mass} GeV was left undecayed")
            return event
    raise RuntimeError(f"particle {code} of mass {mass} GeV: 100 failed events in a row")


def simulate(channel: str, mass: float, events: int, seed: int) -> tuple[np.ndarray, np.ndarray, float]:
    """Mean photons per annihilation and bin, its standard error, and the fraction of the energy in photons."""
    first, second = CHANNEL_CODES[channel]
    generator = start_generator(
        (
            *KAONS_DECAY,
            *(LEPTON_SETTINGS if channel in ("ee", "mumu") else ()),
            f"{RESONANCE}:all = resonance void 1 0 0 {2.0 * mass} 1.0 0 0 0",
            f"{RESONANCE}:isResonance = on",
            f"{RESONANCE}:oneChannel = 1 1.0 101 {first} {second}",
        ),
        seed,
    )
    bins = LOG10_X_EDGES.size - 1
    per_decade = bins / (LOG10_X_EDGES[-1] - LOG10_X_EDGES[0])
    total, squares, energy = np.zeros(bins), np.zeros(bins), 0.0
    for number in range(events):
        event = next_decay(generator, RESONANCE, 2.0 * mass)
        photons = np.array([part.e() for part in event if part.id() == PHOTON and part.isFinal()])
        energy += photons.sum()
        index = np.floor((np.log10(np.maximum(photons / mass, 1e-300)) - LOG10_X_EDGES[0]) * per_decade).astype(int)
        counts = np.bincount(np.minimum(index[index >= 0], bins - 1), minlength=bins)
        total += counts
        squares += counts**2
        if number % 100 == 0:
            visible = math.fsum(part.e() for part in event if part.isFinal())
            if abs(visible / (2.0 * mass) - 1.0) > ENERGY_TOLERANCE:
                raise RuntimeError(f"{channel} at {mass} GeV: energy is not conserved")
    mean = total / events
    return mean, np.sqrt(np.maximum(squares / events - mean**2, 0.0) / events), energy / (2.0 * mass * events)


def z_boson_multiplicities(events: int, seed: int) -> dict[str, list[float]]:
    """Mean numbers of particles (with standard errors) in hadronic decays of a Z boson at rest, kaons stable."""
    generator = start_generator(("23:onMode = off", "23:onIfAny = 1 2 3 4 5"), seed)
    found = np.zeros((events, 4))
    for row in found:
        for part in next_decay(generator, 23, Z_MASS):
            code, final = abs(part.id()), part.isFinal()
            row += (final and part.isCharged(), final and code == PHOTON, code == 111, final and code == 2212)
    mean, error = found.mean(axis=0), found.std(axis=0) / math.sqrt(events)
    names = ("charged", "photons", "neutral_pions", "protons")
    return {name: [float(mean[i]), float(error[i])] for i, name in enumerate(names)}


def checksum(arrays: dict[str, np.ndarray]) -> str:
    """SHA-256 over names and bytes of the arrays, in order of name."""
    digest = hashlib.sha256()
    for name in sorted(arrays):
        digest.update(name.encode())
        digest.update(np.ascontiguousarray(arrays[name]).tobytes())
    return digest.hexdigest()


def make_table(events: int, seed: int) -> dict[str, np.ndarray]:
    """Simulate everything; see `photon_spectra.npz` for the names of the arrays."""
    started = time.process_time()
    seeds = iter(range(seed, seed + 10_000))
    check_values = z_boson_multiplicities(events, next(seeds))
    arrays: dict[str, np.ndarray] = {"log10_x_edges": LOG10_X_EDGES}
    numbers: dict[str, int] = {}
    for channel in CHANNEL_CODES:
        masses = masses_of(channel)
        rows = [simulate(channel, mass, events_of(channel, mass, events), next(seeds)) for mass in masses]
        arrays[f"{channel}_mass"] = np.array(masses)
        arrays[f"{channel}_photons"] = np.array([row[0] for row in rows], dtype=np.float32)
        arrays[f"{channel}_error"] = np.array([row[1] for row in rows], dtype=np.float32)
        arrays[f"{channel}_energy_fraction"] = np.array([row[2] for row in rows])
        numbers[channel] = events_of(channel, masses[0], events)
        print(f"{channel}: {len(masses)} masses, {time.process_time() - started:.0f} CPU seconds so far", flush=True)
    rows = [simulate(channel, mass, events_of(channel, mass, events), next(seeds)) for channel, mass in HELD_OUT]
    arrays["held_out_channel"] = np.array([channel for channel, _ in HELD_OUT])
    arrays["held_out_mass"] = np.array([mass for _, mass in HELD_OUT])
    arrays["held_out_photons"] = np.array([row[0] for row in rows], dtype=np.float32)
    arrays["held_out_error"] = np.array([row[1] for row in rows], dtype=np.float32)
    metadata = {
        "title": "photons per annihilation in bins of log10(E/m)",
        "units": {"mass": "GeV", "photons": "per annihilation and bin", "error": "standard error of photons"},
        "generator": f"pythia8mc {version('pythia8mc')}",
        "settings": [*SETTINGS, *KAONS_DECAY],
        "settings_ee_mumu": list(LEPTON_SETTINGS),
        "seed": seed,
        "date": datetime.datetime.now(datetime.UTC).date().isoformat(),
        "events": numbers,
        "events_above_10_TeV": "a quarter of these",
        "z_boson_multiplicities": check_values,
        "limits": "no electroweak shower; unpolarised W and Z; 3 GeV to 100 TeV; uu stands for dd and ss too",
        "cpu_seconds": round(time.process_time() - started),
        "sha256": checksum(arrays),
    }
    arrays["metadata"] = np.array(json.dumps(metadata, indent=1))
    return arrays


def main() -> None:
    """Make the table and write it beside this script, or where the command line says."""
    parser = argparse.ArgumentParser(description="Make the table of photon spectra.")
    parser.add_argument(
        "--events", type=int, default=20_000, help="events per channel and mass (default: 20000, about an hour)"
    )
    parser.add_argument("--seed", type=int, default=20_261_201)
    parser.add_argument("--output", type=Path, default=Path(__file__).with_name("photon_spectra.npz"))
    choice = parser.parse_args()
    arrays = make_table(choice.events, choice.seed)
    np.savez_compressed(choice.output, **arrays)  # type: ignore[arg-type]  # the stub takes any keyword for allow_pickle


if __name__ == "__main__":
    main()
