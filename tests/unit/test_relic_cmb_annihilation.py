"""Energy injection around recombination."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Literal

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.candidate import CHANNELS, Candidate, CosmologyOptions
from scanfit.likelihoods.cmb_annihilation import EFFICIENCY, CmbAnnihilation
from scanfit.likelihoods.relic_abundance.cross_sections import constant_average, velocity_expansion
from scanfit.validation import check


def term(**options: object) -> CmbAnnihilation:
    return CmbAnnihilation(check(CmbAnnihilation.Options, options), BuildContext(Path()))


def candidate(
    mass: float, sigma_v: float = 3e-26, dirac: bool = False, f: Literal["scale", "assume-all"] = "assume-all"
) -> Candidate:
    return Candidate(
        mass=mass,
        self_conjugate=not dirac,
        spin_degrees_of_freedom=2,
        annihilation=constant_average(mass=mass, sigma_v=sigma_v),
        cosmology=CosmologyOptions(underabundant=f),
    )


@pytest.mark.parametrize(("efficiency", "mass"), [(0.137, 12.8), (0.33, 30.9), (0.6, 56.0)])
def test_mass_at_which_the_thermal_rate_meets_the_limit(efficiency: float, mass: float) -> None:
    """Independent: 3.2e-28 cm^3/s/GeV excludes 3e-26 cm^3/s below m = f_eff 93.8 GeV."""
    own = term(efficiency={"bb": efficiency})
    assert own.p_ann(candidate(mass)) == pytest.approx(3.2e-28, rel=0.006)


def test_limit_lies_at_95_per_cent() -> None:
    """2 Delta ln L is 3.84 for a limit from a posterior on p >= 0 (half-normal), 2.71 for a one-sided profile."""
    at_limit = candidate(0.3 * 3e-26 / 3.2e-28)
    for kind, difference in (("posterior", 3.841), ("profile", 2.706)):
        own = term(efficiency={"bb": 0.3}, limit_kind=kind)
        nothing = own.loglike(candidate(100.0, sigma_v=1e-40), {})
        assert 2.0 * (nothing - own.loglike(at_limit, {})) == pytest.approx(difference, rel=1e-3)
        assert nothing == pytest.approx(-math.log(math.sqrt(2.0 * math.pi) * own.sigma))


def test_counting_and_fraction() -> None:
    own = term()
    assert own.p_ann(candidate(50.0, dirac=True)) == pytest.approx(0.5 * own.p_ann(candidate(50.0)))
    scaled, full = candidate(50.0, 1e-24, f="scale"), candidate(50.0, 1e-24)
    assert scaled.dm_fraction < 0.1
    assert own.p_ann(scaled) == pytest.approx(scaled.dm_fraction**2 * own.p_ann(full))


def test_p_wave_is_negligible() -> None:
    p_wave = Candidate(
        mass=10.0,
        self_conjugate=True,
        spin_degrees_of_freedom=2,
        annihilation=velocity_expansion(mass=10.0, a=0.0, b=1e-25),
    )
    assert term().p_ann(p_wave) == pytest.approx(0.0, abs=1e-45)


def test_efficiencies() -> None:
    """Entries of arXiv:0906.1197, table 1, from memory, and interpolation in ln m."""
    own = term()
    np.testing.assert_allclose(own.efficiencies(("ee", "mumu", "WW", "nunu"), 100.0), [0.60, 0.23, 0.26, 0.0])
    assert own.efficiencies(("ee",), math.sqrt(1000.0))[0] == pytest.approx(0.5 * (0.77 + 0.60))
    assert set(EFFICIENCY) == set(CHANNELS)


def test_pseudo_data() -> None:
    own, point = term(), candidate(20.0)
    asimov = own.expected(point, {})
    assert asimov.loglike(point, {}) == asimov.loglike(candidate(2000.0), {})
    assert asimov.loglike(candidate(5.0), {}) < asimov.loglike(point, {})
    assert own.best == 0.0
    rng = np.random.default_rng(1)
    best = [own.simulate(point, {}, rng).best for _ in range(2000)]
    assert min(best) >= 0.0
    assert np.mean(best) == pytest.approx(own.p_ann(point), rel=0.1)


def test_explain() -> None:
    (line,) = term().explain(candidate(20.0), {})
    assert line.limit == 3.2e-28
    assert line.predicted == term().p_ann(candidate(20.0))


@pytest.mark.parametrize("options", [{"limit": 0.0}, {"efficiency": {"xx": 0.1}}, {"efficiency": {"bb": 1.5}}])
def test_bad_options(options: dict[str, object]) -> None:
    with pytest.raises(InputError):
        term(**options)
