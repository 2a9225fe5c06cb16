"""The relic-abundance term: normalisation, modes, pseudo-data."""

from __future__ import annotations

import math
from pathlib import Path
from typing import get_args

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import norm

from scanfit.contracts import BuildContext
from scanfit.errors import InputError, PointError
from scanfit.likelihoods.candidate import Annihilation, Candidate
from scanfit.likelihoods.relic_abundance.cross_sections import constant_average
from scanfit.likelihoods.relic_abundance.freeze_out import RELIC_FLAGS
from scanfit.likelihoods.relic_abundance.term import ErrorFlag, RelicAbundance
from scanfit.validation import check


def term(**options: object) -> RelicAbundance:
    return RelicAbundance(check(RelicAbundance.Options, options), BuildContext(Path()))


def candidate(sigma_v: float, mass: float = 100.0) -> Candidate:
    return Candidate(
        mass=mass,
        self_conjugate=True,
        spin_degrees_of_freedom=2,
        annihilation=constant_average(mass=mass, sigma_v=sigma_v),
    )


RIGHT, TOO_MUCH, TOO_LITTLE = candidate(2.1e-26), candidate(1e-26), candidate(1e-25)


@pytest.mark.parametrize("point", [RIGHT, TOO_MUCH, TOO_LITTLE])
def test_measured_is_a_normalised_gaussian(point: Candidate) -> None:
    error = math.hypot(0.0012, 0.05 * point.omega_h2)
    assert term().loglike(point, {}) == pytest.approx(norm.logpdf(0.12, point.omega_h2, error), rel=1e-12)

    def density(observed: float) -> float:
        return math.exp(term(omega_h2=observed).loglike(point, {}))

    centre = point.omega_h2
    area = quad(density, max(1e-9, centre - 10 * error), centre + 10 * error, points=[centre], epsrel=1e-9)[0]
    assert area == pytest.approx(1.0, rel=1e-6)


def test_upper_limit_is_flat_below_and_falls_above() -> None:
    limit = term(mode="upper-limit")
    peak = norm.logpdf(0.12, 0.12, math.hypot(0.0012, 0.05 * 0.12))
    assert limit.loglike(TOO_LITTLE, {}) == pytest.approx(peak, rel=1e-12)
    assert limit.loglike(candidate(1e-24), {}) == limit.loglike(TOO_LITTLE, {})
    assert limit.loglike(TOO_MUCH, {}) == pytest.approx(term().loglike(TOO_MUCH, {}), rel=1e-12)
    assert limit.loglike(TOO_MUCH, {}) < limit.loglike(RIGHT, {}) <= peak


def test_measured_wants_all_of_it() -> None:
    assert term().loglike(TOO_LITTLE, {}) < term().loglike(RIGHT, {}) - 10.0
    assert term().loglike(TOO_MUCH, {}) < term().loglike(RIGHT, {}) - 10.0


def test_no_theory_error() -> None:
    assert term(theory_error=0.0).loglike(RIGHT, {}) == pytest.approx(norm.logpdf(0.12, RIGHT.omega_h2, 0.0012))


def near_a_pole() -> Candidate:
    def total(s: np.ndarray) -> np.ndarray:
        return np.asarray(1e-7 * (125.0 * 0.004) ** 2 / ((s - 125.0**2) ** 2 + (125.0 * 0.004) ** 2))

    annihilation = Annihilation(("bb",), lambda s: total(s)[None, :], total, ((125.0, 0.004),))
    return Candidate(mass=60.0, self_conjugate=True, spin_degrees_of_freedom=1, annihilation=annihilation)


def test_larger_theory_error_where_a_flag_is_raised() -> None:
    resonant = near_a_pole()
    assert resonant.relic.flags["narrow_resonance"]
    assert not resonant.relic.flags["above_unitarity_bound"]
    error = math.hypot(0.0012, resonant.omega_h2)
    expected = norm.logpdf(0.12, resonant.omega_h2, error)
    wide = term(flag_theory_errors={"narrow_resonance": 1.0, "above_unitarity_bound": 3.0})
    assert wide.loglike(resonant, {}) == pytest.approx(expected)
    assert wide.loglike(RIGHT, {}) == term().loglike(RIGHT, {})
    # A flag never makes the prediction more certain.
    assert term(flag_theory_errors={"narrow_resonance": 0.0}).loglike(resonant, {}) == term().loglike(resonant, {})


def test_every_flag_that_leaves_an_abundance_can_enlarge_the_error() -> None:
    assert set(get_args(ErrorFlag)) == set(RELIC_FLAGS) - {"relic_abundance_failed"}
    with pytest.raises(InputError, match=r"flag_theory_errors\.narow_resonance.*did you mean 'narrow_resonance'"):
        term(flag_theory_errors={"narow_resonance": 1.0})


def test_expected_data_are_the_best_data() -> None:
    asimov = term().expected(TOO_MUCH, {})
    assert asimov.observed == TOO_MUCH.omega_h2
    assert asimov.loglike(TOO_MUCH, {}) == pytest.approx(
        norm.logpdf(0.0, 0.0, math.hypot(0.0012, 0.05 * TOO_MUCH.omega_h2))
    )
    assert term(mode="upper-limit").expected(TOO_LITTLE, {}).observed == 0.12


def test_simulated_pulls_are_standard_normal() -> None:
    rng = np.random.default_rng(3)
    own = term()
    error = math.hypot(0.0012, 0.05 * RIGHT.omega_h2)
    pulls = [(own.simulate(RIGHT, {}, rng).observed - RIGHT.omega_h2) / error for _ in range(4000)]
    assert np.mean(pulls) == pytest.approx(0.0, abs=4 / math.sqrt(4000))
    assert np.std(pulls) == pytest.approx(1.0, abs=4 / math.sqrt(2 * 4000))
    assert own.observed == 0.12


def test_explain() -> None:
    (line,) = term(mode="upper-limit").explain(TOO_LITTLE, {})
    assert line.predicted == TOO_LITTLE.omega_h2
    assert (line.observed, line.limit) == (None, 0.12)
    (line,) = term().explain(TOO_LITTLE, {})
    assert (line.observed, line.limit) == (0.12, None)


def test_no_abundance_is_a_point_error() -> None:
    broken = Candidate(
        mass=100.0,
        self_conjugate=True,
        spin_degrees_of_freedom=2,
        annihilation=Annihilation(("bb",), lambda s: np.full((1, len(s)), np.nan), lambda s: np.full(len(s), np.nan)),
    )
    with pytest.raises(PointError, match="relic abundance"):
        term().loglike(broken, {})


@pytest.mark.parametrize(
    "options", [{"mode": "limit"}, {"omega_h2": 0.0}, {"error": -1.0}, {"theory_error": -0.1}, {"omegah2": 0.1}]
)
def test_bad_options(options: dict[str, object]) -> None:
    with pytest.raises(InputError):
        term(**options)
