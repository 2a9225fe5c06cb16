"""Event lists: an unbinned likelihood against the formula, pseudo-data, and broken files."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad
from scipy.special import ndtr

from scanfit.contracts import BuildContext, InnerNuisances
from scanfit.errors import InputError
from scanfit.likelihoods.candidate import Annihilation, Candidate, CosmologyOptions, NucleonCouplings
from scanfit.likelihoods.direct_detection.halo import Halo
from scanfit.likelihoods.direct_detection.sensitivity import couplings_of
from scanfit.likelihoods.direct_detection.spectrum import differential_rate
from scanfit.likelihoods.direct_detection.term import DirectDetection

VALUES = {"local_density": 0.3, "most_probable_speed": 238.0, "escape_speed": 544.0, "earth_speed": 252.0}
EVENTS = (5.0, 9.3, 22.0)

FILE = """
title = "event list"
source = "none"
exposure_tonne_year = 2.0
target = { Xe = 1 }
[efficiency]
energy_kev = [2.0, 6.0, 60.0]
value = [0.1, 0.8, 0.8]
[resolution]
noise_kev = 0.3
stochastic = 0.2
[events]
window_kev = [4.0, 40.0]
energies_kev = [5.0, 9.3, 22.0]
background = 2.0
background_shape = { energy_kev = [4.0, 40.0], density = [3.0, 1.0] }
[background_uncertainty]
relative = 0.3
"""


def build(folder: Path, text: str = FILE, treatment: InnerNuisances = "marginal") -> DirectDetection:
    (folder / "list.toml").write_text(text, encoding="utf-8")
    return DirectDetection(DirectDetection.Options(data="list.toml"), BuildContext(folder, treatment))


def candidate(cross_section: float, mass: float = 50.0) -> Candidate:
    nothing = np.zeros((0, 1))
    return Candidate(
        mass=mass,
        self_conjugate=True,
        spin_degrees_of_freedom=1,
        annihilation=Annihilation((), lambda s: nothing, lambda s: nothing[0]),
        nucleon=couplings_of("si", mass, cross_section) if cross_section else NucleonCouplings(),
        cosmology=CosmologyOptions(underabundant="assume-all"),
    )


def by_hand(cross_section: float, resolution: bool = True) -> tuple[np.ndarray, float]:
    """Signal density at the events, and total, by dense sums over true energy."""
    energy = np.linspace(2.0, 60.0, 120001)
    rate = differential_rate(energy, 50.0, couplings_of("si", 50.0, cross_section), Halo(), {"Xe": 1.0})
    rate = 2.0 * rate * np.interp(energy, [2.0, 6.0, 60.0], [0.1, 0.8, 0.8])
    if not resolution:
        inside = (energy >= 4.0) & (energy <= 40.0)
        return np.interp(EVENTS, energy, rate), float(np.trapezoid(rate[inside], energy[inside]))
    width = np.sqrt(0.09 + 0.04 * energy)
    density = [np.trapezoid(rate * stats.norm.pdf(event, energy, width), energy) for event in EVENTS]
    share = ndtr((40.0 - energy) / width) - ndtr((4.0 - energy) / width)
    return np.array(density), float(np.trapezoid(rate * share, energy))


@pytest.mark.parametrize("treatment", ["marginal", "profile"])
@pytest.mark.parametrize("resolution", [True, False])
def test_extended_likelihood(tmp_path: Path, treatment: InnerNuisances, resolution: bool) -> None:
    text = FILE if resolution else FILE.replace("noise_kev = 0.3\nstochastic = 0.2", "")
    term = build(tmp_path, text, treatment)
    shape = np.interp(EVENTS, [4.0, 40.0], [3.0, 1.0]) / (2.0 * 36.0)
    for cross_section in (1e-48, 2e-47):
        density, total = by_hand(cross_section, resolution)

        def likelihood(z: float, density: np.ndarray = density, total: float = total) -> float:
            background = 2.0 * math.exp(math.log(1.3) * z)
            return math.exp(-total - background) * float(np.prod(density + background * shape)) * stats.norm.pdf(z)

        if treatment == "marginal":
            expected = math.log(quad(likelihood, -8.0, 8.0, epsabs=0.0, epsrel=1e-10, points=[-1.0, 1.0])[0])
        else:
            expected = math.log(max(likelihood(float(z)) for z in np.linspace(-3.0, 3.0, 6001)))
        assert term.loglike(candidate(cross_section), VALUES) == pytest.approx(expected, abs=1e-4)


@pytest.mark.parametrize("resolution", ["noise_kev = 0.3\nstochastic = 0.2", ""])
@pytest.mark.parametrize("quenching", ["", "[quenching]\nenergy_kev = [1.0, 45.0]\nfactor = [0.95, 0.95]"])
@pytest.mark.parametrize("width", [1.2, 0.05])
def test_signal_behind_a_smooth_threshold(tmp_path: Path, resolution: str, quenching: str, width: float) -> None:
    """Against a dense sum over true energy; a table of quenching that ends at 45 keV lets no recoil above through."""
    text = FILE.replace("noise_kev = 0.3\nstochastic = 0.2", resolution)
    formula = f"plateau = 0.85\nhalf_at_kev = 6.0\nwidth_kev = {width}\n"
    text = text.replace("energy_kev = [2.0, 6.0, 60.0]\nvalue = [0.1, 0.8, 0.8]\n", formula)
    term = build(tmp_path, text.replace("[efficiency]", quenching + "\n[efficiency]"))
    energy = np.linspace(0.5, 45.0 if quenching else 90.0, 200001)
    rate = differential_rate(energy, 50.0, couplings_of("si", 50.0, 1e-47), Halo(), {"Xe": 1.0})
    rate = 2.0 * rate * 0.85 * stats.norm.cdf(energy, 6.0, width)
    seen = energy * (0.95 if quenching else 1.0)
    if resolution:
        spread = np.sqrt(0.09 + 0.04 * seen)
        share = ndtr((40.0 - seen) / spread) - ndtr((4.0 - seen) / spread)
    else:
        share = np.asarray((seen >= 4.0) & (seen <= 40.0), dtype=float)
    assert term.signal(candidate(1e-47), VALUES)[-1] == pytest.approx(np.trapezoid(rate * share, energy), rel=2e-4)


def test_no_events_is_a_plain_exponential(tmp_path: Path) -> None:
    text = FILE.replace("[5.0, 9.3, 22.0]", "[]").partition("[background_uncertainty]")[0]
    _, total = by_hand(1e-47)
    assert build(tmp_path, text).loglike(candidate(1e-47), VALUES) == pytest.approx(-total - 2.0, abs=1e-4)
    # And so is the limit: 2.303 events whatever the background.
    curve = build(tmp_path, text).limit_curve("si", points=3, pseudo_experiments=0)
    assert curve.observed is not None
    events = build(tmp_path, text).signal(candidate(float(curve.observed[1]), float(curve.x_values[1])), VALUES)
    assert events[-1] == pytest.approx(math.log(10.0), rel=1e-3)


def test_pseudo_data_follow_signal_and_background(tmp_path: Path) -> None:
    term, rng = build(tmp_path), np.random.default_rng(7)
    truth = candidate(2e-46)
    _, total = by_hand(2e-46)
    counts, first = [], []
    for _ in range(120):
        twin = term.simulate(truth, VALUES, rng)
        counts.append(twin.counting.observed.sum())
        first.append(twin.loglike(truth, VALUES) - twin.loglike(candidate(0.0), VALUES))
    mean = total + 2.0 * math.exp(0.5 * math.log(1.3) ** 2)
    assert np.mean(counts) == pytest.approx(mean, abs=4.0 * math.sqrt((mean + 0.4) / len(counts)))
    assert np.median(first) > 10.0
    # The term itself keeps its data.
    assert term.counting.observed.sum() == 3.0


def test_expected_data_prefer_the_truth(tmp_path: Path) -> None:
    term = build(tmp_path).expected(candidate(5e-47), VALUES)
    values = [term.loglike(candidate(s), VALUES) for s in (4e-47, 4.8e-47, 5e-47, 5.2e-47, 6e-47)]
    assert max(values) == values[2]
    assert term.explain(candidate(5e-47), VALUES)[-1].observed == pytest.approx(by_hand(5e-47)[1] + 2.0, rel=1e-3)


def test_explain_counts_events(tmp_path: Path) -> None:
    lines = {line.name: line for line in build(tmp_path).explain(candidate(5e-47), VALUES)}
    assert lines["signal events"].predicted == pytest.approx(by_hand(5e-47)[1], rel=1e-4)
    assert lines["background events"].predicted == pytest.approx(2.0)
    assert lines["events in 4-40 keV"].observed == 3.0


def test_bands_of_an_event_list(tmp_path: Path) -> None:
    curve = build(tmp_path).limit_curve("si", points=3, pseudo_experiments=15, rng=np.random.default_rng(3))
    assert curve.bands is not None
    assert np.all(np.isfinite(curve.bands[1:]))
    assert np.all(np.diff(curve.bands, axis=1) >= 0.0)


def test_planned_list(tmp_path: Path) -> None:
    text = FILE.replace("energies_kev = [5.0, 9.3, 22.0]\n", "").replace("exposure", "planned = true\nexposure")
    term = build(tmp_path, text)
    assert term.counting.observed.sum() == pytest.approx(2.0)
    assert term.loglike(candidate(0.0), VALUES) > term.loglike(candidate(1e-46), VALUES)


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("22.0]", "52.0]", "every event must lie in the window, 4 to 40 keV"),
        ("[4.0, 40.0], density", "[5.0, 40.0], density", "must cover the window"),
        ("density = [3.0, 1.0]", "density = [0.0, 0.0]", "must not be zero everywhere"),
        ("background = 2.0", "background = -2.0", "greater than or equal to 0"),
        ("window_kev = [4.0, 40.0]", "window_kev = [40.0, 4.0]", "lower end must come first"),
        ("energies_kev = [5.0, 9.3, 22.0]\n", "", "'energies_kev' is required"),
        ("relative = 0.3", "relative = [0.3, 0.2]", "'relative' has 2 entries where 'the one background of"),
        ("[efficiency]", 'neutrinos = ["boron-9"]\n[efficiency]', "did you mean 'boron-8'"),
        ("[efficiency]", "observing_days = [0, 20]\n[efficiency]", "greater than or equal to 1"),
        (
            "[efficiency]",
            "[quenching]\nenergy_kev = [1.0, 50.0]\nfactor = [0.9, 0.95]\n[efficiency]",
            "quenching is known from 1 to 50 keV only",
        ),
        ("[efficiency]", "[quenching]\nlindhard_k = 0.1\n[efficiency]", "must cover every bin"),
        (
            "[efficiency]",
            "[bins]\nintervals_kev = [[4, 40]]\nbackground = [1]\nobserved = [1]\n[efficiency]",
            r"either \[bins\] or \[events\]",
        ),
    ],
)
def test_broken_files(tmp_path: Path, old: str, new: str, message: str) -> None:
    assert old in FILE
    with pytest.raises(InputError, match=message) as caught:
        build(tmp_path, FILE.replace(old, new, 1))
    assert len(caught.value.problems) == 1, str(caught.value)
