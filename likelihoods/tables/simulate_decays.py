"""Simulate what annihilations leave behind, and keep the sums from which ``make_photon_spectra.py`` makes tables.

Run it with the ``tables`` extra installed; nothing imports it at run time::

    python likelihoods/tables/simulate_decays.py sums.npz --rounds 10

A spinless resonance of mass 2m decays at rest into the two-body state; showers, decays of heavy particles and
hadronisation follow in the general-purpose event generator `pythia8mc` (its program is GPL, tables are data;
version and settings are written down in them). Everything unstable decays, as it does in space: kaons, charged pions,
muons and neutrons too.

Work is done in rounds, each adding events to every final state and mass with seeds of its own, and the file is written
anew after every round: stop it whenever the errors are small enough.

Traps, each met in practice: a resonance of zero width, or below its threshold, is left undecayed while success
is reported, so every event is checked. With matrix-element corrections on, collinear radiation off electrons
comes out at 0.6-0.9 of the analytic rate above 1 TeV (measured; muons at 100 TeV alike, taus within 5 % of it),
so they are off for ee and mumu.
"""

from __future__ import annotations

import argparse
import datetime
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

SPECIES: Final = ("photons", "positrons", "antiprotons", "electron_neutrinos", "muon_neutrinos", "tau_neutrinos")
"""What is counted; antiprotons by kinetic energy, neutrinos together with antineutrinos."""
SPECIES_CODES: Final = {22: 0, -11: 1, -2212: 2, 12: 3, -12: 3, 14: 4, -14: 4, 16: 5, -16: 5}

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
HELD_OUT_EVENTS: Final = 4
"""They have this many times more events, so that it is the table that is measured."""

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
ALL_DECAY: Final = tuple(f"{code}:mayDecay = on" for code in (13, 130, 211, 321, 2112))
LEPTON_SETTINGS: Final = ("TimeShower:MEcorrections = off",)
LEPTON_EVENTS: Final = 10
"""Events of ee and mumu cost and yield little, so there are this many times more."""
RESONANCE: Final = 99999
ENERGY_TOLERANCE: Final = 1e-4
"""Relative; typical events hold 1e-9, the generator itself throws out what breaks 1e-4."""
Z_EVENTS: Final = 6000


def masses_of(channel: str) -> list[float]:
    """Masses in GeV at which `channel` is simulated."""
    lowest = LOWEST_MASS.get(channel, 0.0)
    extra = [] if channel == "bb" or not lowest else [round(lowest * factor, 3) for factor in ABOVE_THRESHOLD]
    common = [mass for mass in MASS_GRID if mass >= lowest and all(abs(mass / other - 1.0) > 0.02 for other in extra)]
    return sorted(common + extra)


def events_of(channel: str, mass: float, events: int) -> int:
    """Number of events of a round: fewer where each takes long and makes many particles."""
    share = 1.0 if mass <= 300.0 else 0.5 if mass <= 3000.0 else 0.2 if mass <= 1.0e4 else 0.05
    return max(round(events * share), 1) * (LEPTON_EVENTS if channel in ("ee", "mumu") else 1)


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


def simulate(channel: str, mass: float, events: int, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Particles by species and bin of log10 x, the sum of their squares over events, and x summed by species."""
    first, second = CHANNEL_CODES[channel]
    generator = start_generator(
        (
            *ALL_DECAY,
            *(LEPTON_SETTINGS if channel in ("ee", "mumu") else ()),
            f"{RESONANCE}:all = resonance void 1 0 0 {2.0 * mass} 1.0 0 0 0",
            f"{RESONANCE}:isResonance = on",
            f"{RESONANCE}:oneChannel = 1 1.0 101 {first} {second}",
        ),
        seed,
    )
    bins = LOG10_X_EDGES.size - 1
    per_decade = bins / (LOG10_X_EDGES[-1] - LOG10_X_EDGES[0])
    shape = (len(SPECIES), bins)
    total, squares, energy = np.zeros(shape), np.zeros(shape), np.zeros(len(SPECIES))
    for number in range(events):
        event = next_decay(generator, RESONANCE, 2.0 * mass)
        found = [(SPECIES_CODES.get(part.id(), -1), part.e(), part.m()) for part in event if part.isFinal()]
        kind, energies, masses = np.array(found).T
        if number % 100 == 0 and abs(energies.sum() / (2.0 * mass) - 1.0) > ENERGY_TOLERANCE:
            raise RuntimeError(f"{channel} at {mass} GeV: energy is not conserved")
        wanted = kind >= 0
        kind, x = kind[wanted].astype(int), (energies - np.where(kind == 2, masses, 0.0))[wanted] / mass
        index = np.floor((np.log10(np.maximum(x, 1e-300)) - LOG10_X_EDGES[0]) * per_decade).astype(int)
        inside = index >= 0
        counts = np.bincount((kind * bins + np.minimum(index, bins - 1))[inside], minlength=total.size).reshape(shape)
        total += counts
        squares += counts**2
        energy += np.bincount(kind, weights=x, minlength=len(SPECIES))
    return total, squares, energy


def z_boson_multiplicities(events: int, seed: int) -> dict[str, list[float]]:
    """Mean numbers of particles (with standard errors) in hadronic decays of a Z boson at rest, kaons stable."""
    generator = start_generator(("23:onMode = off", "23:onIfAny = 1 2 3 4 5"), seed)
    found = np.zeros((events, 4))
    for row in found:
        for part in next_decay(generator, 23, Z_MASS):
            code, final = abs(part.id()), part.isFinal()
            row += (final and part.isCharged(), final and code == 22, code == 111, final and code == 2212)
    mean, error = found.mean(axis=0), found.std(axis=0) / math.sqrt(events)
    names = ("charged", "photons", "neutral_pions", "protons")
    return {name: [float(mean[i]), float(error[i])] for i, name in enumerate(names)}


def main() -> None:
    """Simulate round after round."""
    parser = argparse.ArgumentParser(description="Simulate annihilations for the tables of spectra.")
    parser.add_argument("sums", type=Path, help="the file to write, .npz")
    parser.add_argument("--events", type=int, default=1000, help="per round, final state and mass (default: 1000)")
    parser.add_argument("--rounds", type=int, default=20, help="default: 20, an hour")
    parser.add_argument("--seed", type=int, default=20_261_202)
    choice = parser.parse_args()
    started = time.process_time()
    check_values = z_boson_multiplicities(Z_EVENTS, choice.seed)
    cases = [(channel, mass, 1) for channel in CHANNEL_CODES for mass in masses_of(channel)]
    cases += [(channel, mass, HELD_OUT_EVENTS) for channel, mass in HELD_OUT]
    events = np.array([times * events_of(channel, mass, choice.events) for channel, mass, times in cases])
    shape = (len(cases), len(SPECIES), LOG10_X_EDGES.size - 1)
    total, squares, energy = np.zeros(shape), np.zeros(shape), np.zeros(shape[:2])
    for done in range(1, choice.rounds + 1):
        for number, (channel, mass, _) in enumerate(cases):
            seed = choice.seed + done * len(cases) + number
            parts = simulate(channel, mass, int(events[number]), seed)
            total[number] += parts[0]
            squares[number] += parts[1]
            energy[number] += parts[2]
        metadata = {
            "generator": f"pythia8mc {version('pythia8mc')}",
            "settings": [*SETTINGS, *ALL_DECAY],
            "settings_ee_mumu": list(LEPTON_SETTINGS),
            "seed": choice.seed,
            "date": datetime.datetime.now(datetime.UTC).date().isoformat(),
            "rounds": done,
            "events_per_round": choice.events,
            "z_boson_multiplicities": check_values,
            "cpu_seconds": round(time.process_time() - started),
        }
        unfinished = choice.sums.with_suffix(".part.npz")
        np.savez_compressed(
            unfinished,
            channel=np.array([case[0] for case in cases]),
            mass=np.array([case[1] for case in cases]),
            held_out=np.array([case[2] > 1 for case in cases]),
            events=done * events,
            total=total,
            squares=squares,
            energy=energy,
            metadata=np.array(json.dumps(metadata)),
        )
        unfinished.replace(choice.sums)
        print(f"round {done}: {time.process_time() - started:.0f} CPU seconds so far", flush=True)


if __name__ == "__main__":
    main()
