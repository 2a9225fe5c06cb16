"""Cost of one point: 25 targets, 24 energy bins, six final states. The aim is 0.15 ms; no test fails on seconds."""

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from scanfit.likelihoods.gamma_dwarfs.likelihood import DwarfLikelihood
from scanfit.likelihoods.gamma_dwarfs.spectra import TABLE_CHANNELS, photon_table
from scanfit.likelihoods.gamma_dwarfs.telescope import read_observation

SKUA = Path(__file__).parents[2] / "runs" / "demo" / "skua_dwarfs.toml"


def twenty_five_targets(background_error):
    data = read_observation(SKUA)
    rows = np.arange(25) % len(data.names)
    changed = {
        name: getattr(data, name)[rows]
        for name in (
            "acceptance", "log10_j", "j_minus", "j_plus", "background", "background_centre", "observed",
        )
    }  # fmt: skip
    error = np.full(25, background_error)
    return dataclasses.replace(data, names=tuple(map(str, rows)), background_error=error, **changed)


@pytest.mark.parametrize("background_error", [0.0, 0.05], ids=["known background", "uncertain background"])
@pytest.mark.parametrize("inner", ["profile", "marginal"])
def test_one_point(benchmark, inner, background_error):
    likelihood = DwarfLikelihood(twenty_five_targets(background_error), inner)
    table, response = photon_table(), likelihood.observation.response
    weights = np.where(np.arange(len(TABLE_CHANNELS)) % 2, 1e-26, 0.0)

    def point():
        return likelihood.total(response.photons(table, weights, 0.0, 120.0) * 2.8e-6)

    assert np.isfinite(benchmark(point))
