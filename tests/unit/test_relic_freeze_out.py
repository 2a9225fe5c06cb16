"""Properties that freeze-out must have whatever the cross section, its flags, and its conveniences."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scanfit.errors import InputError, PointError
from scanfit.likelihoods.candidate import Annihilation, CosmologyOptions
from scanfit.likelihoods.constants import GEV_M2_TO_CM3_S
from scanfit.likelihoods.relic_abundance.boltzmann import solve
from scanfit.likelihoods.relic_abundance.cross_sections import constant_average, tabulated, velocity_expansion
from scanfit.likelihoods.relic_abundance.degrees_of_freedom import EQUATIONS_OF_STATE, solver_table
from scanfit.likelihoods.relic_abundance.freeze_out import RELIC_FLAGS, FreezeOut, freeze_out, thermal_history
from scanfit.likelihoods.relic_abundance.thermal_average import thermal_nodes
from scanfit.priors import FloatArray
from scanfit.validation import check

DEFAULT = "arxiv-1803.01038"


def majorana(mass: float, annihilation: Annihilation, source: str = DEFAULT) -> FreezeOut:
    return freeze_out(
        mass=mass, degrees_of_freedom=2, self_conjugate=True, annihilation=annihilation, equation_of_state=source
    )


def breit_wigner(
    mass: float,
    pole: float,
    width: float,
    strength: float,
    a: float = 0.0,
    b: float = 0.0,
    edge: float = 0.0,
    d: float = 0.0,
) -> Annihilation:
    """sigma v_rel = a + b v_rel^2 + resonance + a channel with coupling d that opens at `edge`, all in GeV^-2."""

    def total(s: FloatArray) -> FloatArray:
        velocity2 = 4.0 * (1.0 - 4.0 * mass**2 / s)
        peak = (pole * width) ** 2 / ((s - pole**2) ** 2 + (pole * width) ** 2)
        opened = np.sqrt(np.maximum(0.0, 1.0 - edge**2 / s))
        return np.asarray(a + b * velocity2 + strength * peak + d * opened)

    return Annihilation(("bb",), lambda s: total(s)[None, :], total, ((pole, width),), (edge,) if edge else ())


def random_annihilation(rng: np.random.Generator) -> tuple[float, Annihilation]:
    mass = 10.0 ** rng.uniform(0.0, 5.0)
    if rng.random() < 0.3:
        pole = mass * 10.0 ** rng.uniform(-1.0, 1.5)
    else:
        pole = 2.0 * mass * (1.0 + rng.choice([-1.0, 1.0]) * 10.0 ** rng.uniform(-6.0, -0.1))
    width = pole * 10.0 ** rng.uniform(-6.0, math.log10(0.5))
    a, b, strength, d = (rng.integers(0, 2, 4) * 10.0 ** rng.uniform(-15.0, -5.0, 4)).tolist()
    edge = 2.0 * mass * (1.0 + 10.0 ** rng.uniform(-6.0, 0.7))
    return mass, breit_wigner(mass, pole, width, strength, a, b, edge, d)


def check_random_points(count: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    named = 0
    for _ in range(count):
        mass, annihilation = random_annihilation(rng)
        result = freeze_out(
            mass=mass,
            degrees_of_freedom=int(rng.integers(1, 4)),
            self_conjugate=bool(rng.integers(0, 2)),
            annihilation=annihilation,
            equation_of_state=EQUATIONS_OF_STATE[rng.integers(0, 3)],
        )
        assert set(result.flags) == set(RELIC_FLAGS)
        assert 0.0 < result.omega_h2 < math.inf
        assert 1.0 <= result.x_freeze_out < 100.0
        assert result.error < 1e-3 or result.flags["thermal_average_uncertain"]
        named += result.flags["narrow_resonance"]
    assert 0 < named < count


def test_random_points_are_finite() -> None:
    check_random_points(10_000, seed=20)


@pytest.mark.soak
def test_many_random_points_are_finite() -> None:
    check_random_points(100_000, seed=21)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    log_mass=st.floats(0.0, 5.0),
    log_rate=st.floats(-13.0, -6.0),
    offset=st.floats(-0.3, 0.6),
    log_width=st.floats(-5.0, -0.5),
    more=st.floats(1.001, 10.0),
)
def test_more_annihilation_never_leaves_more(
    log_mass: float, log_rate: float, offset: float, log_width: float, more: float
) -> None:
    mass, rate = 10.0**log_mass, 10.0**log_rate
    pole = 2.0 * mass * (1.0 + offset)
    annihilation = breit_wigner(mass, pole, pole * 10.0**log_width, rate, a=0.1 * rate)
    stronger = replace(annihilation, total=lambda s: more * annihilation.total(s))
    assert majorana(mass, stronger).omega_h2 < majorana(mass, annihilation).omega_h2


@pytest.mark.parametrize("first_x", [1.0, 3.0, 10.0, 15.0, 18.0])
def test_result_does_not_depend_on_the_start(first_x: float) -> None:
    mass = 100.0
    annihilation = constant_average(mass=mass, sigma_v=2.2e-26)
    nodes, last_x, _ = thermal_nodes(annihilation.total, mass, np.zeros((0, 2)), np.zeros(0))
    arguments = (nodes, solver_table(DEFAULT), mass, 2.0, last_x)
    reference = solve(*arguments, 0.0, 1e-3, 1e-7, 1.0, np.zeros((0, 2)))[0]
    own = solve(*arguments, first_x, 1e-3, 1e-6, 1.0, np.zeros((0, 2)))[0]
    assert own == pytest.approx(reference, rel=5e-6)


def test_late_annihilation_counts() -> None:
    """Independent: ending at x = 1000 leaves 1.0 % too much, at x = 300, 5.8 % if what is left is not added."""
    mass = 100.0
    annihilation = constant_average(mass=mass, sigma_v=2.2e-26)
    nodes, _, _ = thermal_nodes(annihilation.total, mass, np.zeros((0, 2)), np.zeros(0))
    table = solver_table(DEFAULT)
    today = solve(nodes, table, mass, 2.0, 1e6, 0.0, 1e-3, 1e-6, 0.1, np.zeros((0, 2)))[0]
    for last_x, excess in ((1000.0, 0.010), (300.0, 0.058)):
        track = np.full((400, 2), np.nan)
        solve(nodes, table, mass, 2.0, last_x, 0.0, 1e-3, 1e-6, 0.1, track)
        last = track[np.isfinite(track[:, 1]), 1][-1]
        assert last / today - 1.0 == pytest.approx(excess, abs=0.004)


def test_velocity_at_freeze_out_matters() -> None:
    """A p-wave candidate needs about 7 times the rate at rest velocities: b near 1.6e-25 against 2.1e-26 cm^3/s."""
    s_wave = majorana(100.0, velocity_expansion(mass=100.0, a=2.1e-26, b=0.0))
    p_wave = majorana(100.0, velocity_expansion(mass=100.0, a=0.0, b=1.6e-25))
    assert p_wave.omega_h2 == pytest.approx(s_wave.omega_h2, rel=0.2)


def test_table_reproduces_what_it_was_made_from() -> None:
    mass = 50.0
    exact = velocity_expansion(mass=mass, a=1e-26, b=1e-25)
    sqrt_s = 2.0 * mass * (1.0 + np.concatenate([[0.0], np.geomspace(1e-6, 30.0, 600)]))
    table = tabulated(
        mass=mass, sqrt_s=sqrt_s, sigma_v=exact.sigma_v(sqrt_s**2) * GEV_M2_TO_CM3_S, channels=("bb",)
    )  # fmt: skip
    assert majorana(mass, table).omega_h2 == pytest.approx(majorana(mass, exact).omega_h2, rel=2e-4)


@pytest.mark.parametrize(
    ("sqrt_s", "sigma_v", "complaint"),
    [([1.0, 2.0], [[1.0]], "shape"), ([2.0, 1.0], [[1.0, 1.0]], "ascend"), ([1.0, 2.0], [[1.0, -1.0]], "negative")],
)
def test_table_is_checked(sqrt_s: list[float], sigma_v: list[list[float]], complaint: str) -> None:
    with pytest.raises(ValueError, match=complaint):
        tabulated(mass=1.0, sqrt_s=np.array(sqrt_s), sigma_v=np.array(sigma_v), channels=("bb",))


def flagged(result: FreezeOut) -> set[str]:
    return {name for name, value in result.flags.items() if value}


def test_an_ordinary_candidate_has_no_flags() -> None:
    assert flagged(majorana(100.0, constant_average(mass=100.0, sigma_v=2.2e-26))) == set()


def test_flag_narrow_resonance() -> None:
    near = breit_wigner(60.0, 125.0, 4e-3, 1e-6)
    just_below = breit_wigner(63.0, 125.0, 4e-3, 1e-3)
    far = breit_wigner(200.0, 125.0, 4e-3, 1e-3, a=2e-9)
    broad = breit_wigner(60.0, 125.0, 20.0, 1e-8)
    assert [majorana(m, a).flags["narrow_resonance"] for m, a in ((60.0, near), (63.0, just_below))] == [True, True]
    assert [majorana(m, a).flags["narrow_resonance"] for m, a in ((200.0, far), (60.0, broad))] == [False, False]


def test_flag_temperature_outside_the_table() -> None:
    """The spline source ends at 282 GeV; freeze-out of a 20 TeV particle happens at 700 GeV."""
    heavy = constant_average(mass=2e4, sigma_v=2.2e-26)
    assert majorana(2e4, heavy, "arxiv-1606.07494").flags["outside_degrees_of_freedom_table"]
    assert not majorana(2e4, heavy).flags["outside_degrees_of_freedom_table"]


def test_flag_never_in_equilibrium() -> None:
    weak = majorana(100.0, constant_average(mass=100.0, sigma_v=1e-45))
    none = majorana(100.0, constant_average(mass=100.0, sigma_v=0.0))
    assert "never_in_equilibrium" in flagged(weak)
    assert "never_in_equilibrium" in flagged(none)
    assert weak.omega_h2 == pytest.approx(none.omega_h2, rel=0.01)


def test_flag_unitarity() -> None:
    """At 1 TeV the s-wave bound at freeze-out is 4 pi/m^2 sqrt(x/pi), about 4e-22 cm^3/s."""
    assert "above_unitarity_bound" in flagged(majorana(1e3, constant_average(mass=1e3, sigma_v=1e-21)))
    assert flagged(majorana(1e3, constant_average(mass=1e3, sigma_v=1e-22))) == set()


@pytest.mark.parametrize("value", [math.nan, math.inf, -1e-9])
def test_flag_failure(value: float) -> None:
    def total(s: FloatArray) -> FloatArray:
        return np.where(s > 1.1 * 4.0 * 100.0**2, value, 1e-9)

    result = majorana(100.0, Annihilation(("bb",), lambda s: total(s)[None, :], total))
    assert "relic_abundance_failed" in flagged(result)
    assert math.isnan(result.omega_h2)


@pytest.mark.parametrize("mass", [0.0, -1.0, math.nan, math.inf])
def test_mass_must_be_positive(mass: float) -> None:
    with pytest.raises(PointError, match="positive mass"):
        majorana(mass, constant_average(mass=1.0, sigma_v=1e-26))


def test_flags_explain_themselves() -> None:
    assert all(len(sentence) > 30 for sentence in RELIC_FLAGS.values())


def test_every_equation_of_state_can_be_chosen() -> None:
    for source in EQUATIONS_OF_STATE:
        assert check(CosmologyOptions, {"equation_of_state": source}).equation_of_state == source
    with pytest.raises(InputError, match="not one of the allowed values"):
        check(CosmologyOptions, {"equation_of_state": "arxiv-0000.00000"})


def test_history() -> None:
    """The history ends on the abundance, follows equilibrium before freeze-out and crosses 2.5 Y_eq at x_f."""
    mass = 100.0
    annihilation = constant_average(mass=mass, sigma_v=2.2e-26)
    result = majorana(mass, annihilation)
    history = thermal_history(
        mass=mass, degrees_of_freedom=2, self_conjugate=True, annihilation=annihilation, equation_of_state=DEFAULT
    )
    omega = 2891.2 / 1.05371e-5 * mass * history.number_yield
    assert omega[-1] == pytest.approx(result.omega_h2, rel=3e-4)
    early = history.x < 100.0  # later the equilibrium value underflows
    excess = history.number_yield[early] / history.equilibrium_yield[early]
    assert history.x[0] == 1.0
    assert np.all(excess[history.x[early] < 12.0] < 1.001)
    assert np.all(np.diff(history.number_yield) < 0.0)
    assert np.interp(result.x_freeze_out, history.x[early], excess) == pytest.approx(2.5, rel=0.03)
    np.testing.assert_allclose(history.sigma_v, 2.2e-26, rtol=1e-5)
    assert result.temperature == pytest.approx(mass / result.x_freeze_out)
    assert result.sigma_v_freeze_out == pytest.approx(2.2e-26, rel=1e-5)


def test_history_of_a_dirac_particle_quotes_particle_on_antiparticle() -> None:
    history = thermal_history(
        mass=10.0,
        degrees_of_freedom=2,
        self_conjugate=False,
        annihilation=constant_average(mass=10.0, sigma_v=3e-26),
        equation_of_state=DEFAULT,
    )
    np.testing.assert_allclose(history.sigma_v, 3e-26, rtol=1e-5)
