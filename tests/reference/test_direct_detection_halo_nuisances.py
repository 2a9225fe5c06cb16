"""The limits of docs/halo_limits.py by other means: random halos for the marginal one, a minimiser for the profile."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import minimize

from scanfit.contracts import BuildContext
from scanfit.likelihoods.direct_detection.sensitivity import couplings_of
from scanfit.likelihoods.direct_detection.term import DirectDetection

ROOT = Path(__file__).parents[2]


@pytest.mark.parametrize("mass", [7.0, 50.0])
def test_marginal_and_profiled_halo(mass: float) -> None:
    specification = importlib.util.spec_from_file_location("halo_limits", ROOT / "docs" / "halo_limits.py")
    assert specification is not None
    assert specification.loader is not None
    page = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(page)
    term = DirectDetection(DirectDetection.Options(data="corrie_xenon.toml"), BuildContext(ROOT / "runs" / "demo"))
    fixed, marginal, profiled = page.limits(term, mass)
    zero = term.counting.log_likelihood(np.zeros(8))

    def log_likelihood(limit: float, first: float, second: float) -> float:
        signal = term.response.counts(mass, couplings_of("si", mass, limit), page.halo(first, second))
        return term.counting.log_likelihood(signal) - zero

    assert log_likelihood(fixed, 0.0, 0.0) == pytest.approx(-page.FALL, abs=1e-4)
    pulls = np.random.default_rng(11).standard_normal((4000, 2))
    likelihoods = np.exp([log_likelihood(marginal, x, y) for x, y in pulls])
    error = likelihoods.std() / np.sqrt(likelihoods.size) / likelihoods.mean()
    assert np.log(likelihoods.mean()) == pytest.approx(-page.FALL, abs=4.0 * error + 1e-4)
    best = minimize(lambda z: 0.5 * z @ z - log_likelihood(profiled, z[0], z[1]), [-0.5, -0.5], method="Nelder-Mead")
    assert best.fun == pytest.approx(page.FALL, abs=5e-3)
    # Near the threshold halos matter and the two treatments differ; far above it neither happens.
    if mass < 10.0:
        assert marginal > 1.05 * fixed
        assert profiled > 1.2 * marginal
    else:
        assert marginal == pytest.approx(fixed, rel=0.02)
        assert profiled == pytest.approx(fixed, rel=0.02)
