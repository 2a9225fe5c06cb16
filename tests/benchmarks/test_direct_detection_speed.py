"""Cost of a direct-detection point. Times are recorded, ratios within one run are tested."""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture
from scipy.special import ndtr

from scanfit.contracts import BuildContext, InnerNuisances
from scanfit.likelihoods.candidate import Annihilation, Candidate, CosmologyOptions, NucleonCouplings
from scanfit.likelihoods.direct_detection.folding import NODES, fold
from scanfit.likelihoods.direct_detection.halo import Halo
from scanfit.likelihoods.direct_detection.spectrum import differential_rate
from scanfit.likelihoods.direct_detection.term import DirectDetection

DEMO = Path(__file__).parents[2] / "runs" / "demo"
VALUES = {"local_density": 0.3, "most_probable_speed": 238.0, "escape_speed": 544.0, "earth_speed": 252.0}
NUCLEON = NucleonCouplings(1e-10, 1e-10, 1e-8, -1e-8)


def build(treatment: InnerNuisances) -> DirectDetection:
    return DirectDetection(DirectDetection.Options(data="corrie_xenon.toml"), BuildContext(DEMO, treatment))


def test_spectrum(benchmark: BenchmarkFixture) -> None:
    # All xenon isotopes, spin-independent and spin-dependent, resolution and efficiency.
    assert NODES >= 60
    response = fold(build("profile").experiment)
    counts = benchmark(response.counts, 40.0, NUCLEON, Halo())
    assert counts.sum() > 0.0


@pytest.mark.parametrize("treatment", ["profile", "marginal"])
def test_term(benchmark: BenchmarkFixture, treatment: InnerNuisances) -> None:
    nothing = np.zeros((0, 1))
    candidate = Candidate(
        mass=40.0,
        self_conjugate=True,
        spin_degrees_of_freedom=1,
        annihilation=Annihilation((), lambda s: nothing, lambda s: nothing[0]),
        nucleon=NUCLEON,
        cosmology=CosmologyOptions(underabundant="assume-all"),
    )
    value = benchmark(build(treatment).loglike, candidate, VALUES)
    assert np.isfinite(value)


def test_folding_once_pays() -> None:
    # Against the same sum done afresh at every point with vectorised library functions on 200 energies.
    experiment = build("profile").experiment
    response = fold(experiment)
    energy = np.linspace(3.0, 60.0, 200)
    lows, highs = np.array(experiment.bins.intervals_kev).T

    def afresh() -> np.ndarray:
        rate = differential_rate(energy, 40.0, NUCLEON, Halo(), {"Xe": 1.0}) * experiment.efficiency.at(energy)
        width = experiment.resolution.width(energy)[:, None]
        share = ndtr((highs - energy[:, None]) / width) - ndtr((lows - energy[:, None]) / width)
        return np.asarray(
            experiment.exposure_tonne_year * (energy[1] - energy[0]) * (rate[:, None] * share).sum(axis=0)
        )

    np.testing.assert_allclose(response.counts(40.0, NUCLEON, Halo()), afresh(), rtol=0.05)

    def fastest(repeats: int, call: object) -> float:
        times = []
        for _ in range(repeats):
            start = time.perf_counter()
            call()  # type: ignore[operator]
            times.append(time.perf_counter() - start)
        return min(times)

    folded = fastest(300, lambda: response.counts(40.0, NUCLEON, Halo()))
    assert fastest(30, afresh) > 5.0 * folded
