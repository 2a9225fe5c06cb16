"""Cost of the mono-x term at one point: at most 0.2 ms is aimed at, signal and 22 correlated bins together.

Measured, never asserted: a loaded machine is no defect of the code.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.likelihoods.candidate import Annihilation, Candidate, SpinOneMediator
from scanfit.likelihoods.mono_x.signal import SpinOneSignal, load_table
from scanfit.likelihoods.mono_x.simplified_likelihood import CorrelatedBackground, SimplifiedLikelihood
from scanfit.likelihoods.mono_x.term import MonoX

DEMO = Path(__file__).parents[2] / "runs" / "demo"


@pytest.mark.parametrize("inner", ["marginal", "profile"])
def test_demo_search(benchmark, inner):
    term = MonoX(MonoX.Options(data="brackwater_mono_jet.toml"), BuildContext(DEMO, inner))
    nothing = Annihilation(channels=(), sigma_v=lambda s: np.zeros((0, len(s))), total=np.zeros_like)
    mediator = SpinOneMediator(1500.0, 80.0, "axial", 0.25, 1.0, 0.0)
    point = Candidate(10.0, False, 2, nothing, mediator=mediator)
    term.loglike(point, {})
    assert math.isfinite(benchmark.pedantic(term.loglike, (point, {}), rounds=300, iterations=10))


@pytest.mark.parametrize("method", ["marginal", "profile"])
@pytest.mark.parametrize("skew", [0.0, 0.5])
def test_22_correlated_bins(benchmark, method, skew):
    edges = (*np.geomspace(250.0, 1400.0, 22).tolist(), math.inf)
    signal = SpinOneSignal(load_table("mono-jet", 13.0), edges)
    background = 5e5 * np.exp(-0.35 * np.arange(22))
    deviation = background * np.linspace(0.02, 0.1, 22)
    covariance = np.outer(deviation, deviation) * (0.8 + 0.2 * np.eye(22))
    model = CorrelatedBackground.from_moments(background, covariance, skew * deviation**3)
    observed = np.random.default_rng(1).poisson(background).astype(float)
    likelihood = SimplifiedLikelihood(model, observed)

    def point() -> float:
        cross_section, spread = signal(1500.0, 80.0, True, 10.0, 0.25, 1.0)
        return getattr(likelihood, method)(1e5 * cross_section, spread)

    point()
    assert math.isfinite(benchmark.pedantic(point, rounds=300, iterations=10))
