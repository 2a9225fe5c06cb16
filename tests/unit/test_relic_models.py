"""Every built-in model over a wide range of its parameters: a finite abundance or a named flag, never an exception."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import PointError
from scanfit.likelihoods.candidate import Candidate
from scanfit.likelihoods.models.scalar_singlet import ScalarSinglet
from scanfit.likelihoods.models.spin_one_mediator import SpinOneMediatorModel

Draw = Callable[[np.random.Generator], Candidate]


def singlet() -> Draw:
    model = ScalarSinglet(ScalarSinglet.Options(), BuildContext(Path()))

    def draw(rng: np.random.Generator) -> Candidate:
        log_mass, log_portal = rng.uniform([0.31, -6.0], [5.0, 1.1]).tolist()
        if rng.random() < 0.5:
            log_mass = math.log10(rng.uniform(45.0, 70.0))  # where the Higgs pole is
        return model.predict({"mass": 10.0**log_mass, "portal": 10.0**log_portal, "higgs_nucleon_coupling": 0.308})

    return draw


def vector() -> Draw:
    return _mediator(SpinOneMediatorModel.Options(coupling="vector"))


def axial() -> Draw:
    return _mediator(SpinOneMediatorModel.Options(coupling="axial"))


def _mediator(options: SpinOneMediatorModel.Options) -> Draw:
    model = SpinOneMediatorModel(options, BuildContext(Path()))
    names = ("mass", "mediator_mass", "g_quark", "g_dark", "g_lepton")
    charges = {"delta_u": 0.84, "delta_d": -0.43, "delta_s": -0.09}

    def draw(rng: np.random.Generator) -> Candidate:
        values = 10.0 ** rng.uniform([0.0, 1.0, -3.0, -3.0, -3.0], [5.0, 5.0, 0.5, 0.5, 0.5])
        return model.predict({**dict(zip(names, values.tolist(), strict=True)), **charges})

    return draw


@pytest.mark.parametrize("build", [singlet, vector, axial])
@pytest.mark.parametrize("count", [5000, pytest.param(100_000, marks=pytest.mark.soak)])
def test_finite_or_flagged(build: Callable[[], Draw], count: int) -> None:
    rng = np.random.default_rng(9)
    draw = build()
    computed = 0
    for _ in range(count):
        try:
            candidate = draw(rng)
        except PointError:  # the model says nothing there, and says so
            continue
        relic = candidate.relic
        computed += 1
        assert 0.0 < relic.omega_h2 < math.inf or relic.flags["relic_abundance_failed"]
        assert relic.error < 1e-3 or any(relic.flags.values())
    assert computed > 0.95 * count
