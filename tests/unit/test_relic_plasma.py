"""Blends of published degrees of freedom, and the nuisance that moves between them."""

from __future__ import annotations

import numpy as np
import pytest

from scanfit.errors import InputError, PointError
from scanfit.likelihoods.candidate import Candidate, CosmologyOptions
from scanfit.likelihoods.relic_abundance.cross_sections import constant_average
from scanfit.likelihoods.relic_abundance.degrees_of_freedom import EQUATIONS_OF_STATE, solver_table, solver_temperatures
from scanfit.likelihoods.relic_abundance.plasma import Blend, other_source, plasma_range, plasma_table
from scanfit.validation import check

FIT, SPLINE, STEPS = EQUATIONS_OF_STATE


def candidate(shift: float, mass: float = 10.0, **options: str) -> Candidate:
    return Candidate(
        mass=mass,
        self_conjugate=True,
        spin_degrees_of_freedom=2,
        annihilation=constant_average(mass=mass, sigma_v=3e-26),
        cosmology=check(CosmologyOptions, options),
        equation_of_state_shift=shift,
    )


@pytest.mark.parametrize("second", [SPLINE, STEPS])
def test_a_blend_ends_at_its_sources(second: str) -> None:
    np.testing.assert_allclose(plasma_table(Blend(FIT, second, 0.0)), solver_table(FIT), rtol=1e-13)
    np.testing.assert_allclose(plasma_table(Blend(FIT, second, 1.0)), solver_table(second), rtol=1e-13)
    assert plasma_table(FIT) is solver_table(FIT)


@pytest.mark.parametrize("share", [-0.5, 0.3, 0.5, 1.2])
def test_a_blend_keeps_its_entropy_consistent(share: float) -> None:
    """g*^(1/2) holds the slope of ln g_s: numpy's gradient of the blended g_s must give it back (grid step 1 %)."""
    table = plasma_table(Blend(FIT, STEPS, share))
    log_t = np.log(solver_temperatures())
    inside = (log_t > np.log(1e-4)) & (log_t < np.log(1e3)) & (np.abs(log_t - np.log(0.12)) > 0.05)
    slope = np.gradient(np.log(table[:, 0]), log_t)
    g_rho = ((1.0 + slope / 3.0) * table[:, 0] / table[:, 1]) ** 2
    first, second = (np.square(_root_g_rho(source)) for source in (FIT, STEPS))
    expected = first ** (1.0 - share) * second**share
    np.testing.assert_allclose(g_rho[inside], expected[inside], rtol=2e-3)


def _root_g_rho(source: str) -> np.ndarray:
    table = solver_table(source)
    slope = np.gradient(np.log(table[:, 0]), np.log(solver_temperatures()))
    return np.asarray((1.0 + slope / 3.0) * table[:, 0] / table[:, 1])


def test_the_shift_carries_the_spread() -> None:
    """Independent numbers for 10 GeV and 3e-26 cm^3/s: 0.0966 with the fit, 0.0875 with the steps."""
    options = {"equation_of_state": FIT, "equation_of_state_alternative": STEPS}
    ends = [candidate(shift, **options).omega_h2 for shift in (0.0, 1.0)]
    assert ends == pytest.approx([0.0966, 0.0875], rel=1.5e-3)
    between = [candidate(shift, **options).omega_h2 for shift in (0.25, 0.5, 0.75)]
    assert ends[0] > between[0] > between[1] > between[2] > ends[1]


def test_the_alternative_is_another_source() -> None:
    assert [other_source(name) for name in EQUATIONS_OF_STATE] == [SPLINE, FIT, FIT]
    with pytest.raises(InputError, match="must differ"):
        check(CosmologyOptions, {"equation_of_state": SPLINE, "equation_of_state_alternative": SPLINE})
    # The default source counts too, when only the alternative is written.
    with pytest.raises(InputError, match="must differ"):
        check(CosmologyOptions, {"equation_of_state_alternative": FIT})


def test_a_blend_is_published_where_both_are() -> None:
    assert plasma_range(FIT) == (1e-5, 1e16)
    low, high = plasma_range(Blend(FIT, SPLINE, 0.1))
    assert (low, high) == (plasma_range(SPLINE)[0], plasma_range(SPLINE)[1])
    heavy = candidate(0.1, mass=2e4)
    assert heavy.relic.flags["outside_degrees_of_freedom_table"]
    assert not candidate(0.0, mass=2e4).relic.flags["outside_degrees_of_freedom_table"]


def test_no_plasma_far_outside() -> None:
    with pytest.raises(PointError, match="entropy that falls with temperature"):
        plasma_table(Blend(FIT, STEPS, -40.0))
