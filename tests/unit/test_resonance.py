"""Terms for the mediator itself: limit files, interpolation, likelihood, limits alone. Demo limits are invented."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError, MissingPrediction, PointError
from scanfit.likelihoods.exclusion_plane import exclusion_plane, spin_one_candidate
from scanfit.likelihoods.mediator_widths import spin_one_widths
from scanfit.likelihoods.resonance.production import load_production
from scanfit.likelihoods.resonance.term import DijetResonance, DileptonResonance

DEMO = Path(__file__).parents[2] / "runs" / "demo"
LIMITS = """
title = "invented"
source = "invented for this test"
invented = true
channels = ["uu", "dd", "ss", "cc", "bb"]
sqrt_s = 13.0
table = "limits.csv"
unit = "fb"
outside = "ignore"
"""
TABLE = """# a comment
mass, width_ratio, observed, expected
1000, 0.01, 200, 180
1000, 0.10, 300, 280
2000, 0.01, 30, 36
2000, 0.10, 50, 60
"""


def write(tmp_path: Path, *, limits: str = LIMITS, table: str = TABLE) -> Path:
    (tmp_path / "limits.csv").write_text(table, encoding="utf-8")
    path = tmp_path / "limits.toml"
    path.write_text(limits, encoding="utf-8")
    return path


def build(path: Path, inner="profile", kind=DijetResonance, **options):
    return kind(kind.Options(data=path.name, **options), BuildContext(path.parent, inner))


def narrow(mass: float, g_quark: float, **couplings):
    return spin_one_candidate(mass, 2.0 * mass, "vector", g_quark, 1.0, **couplings)


def test_the_likelihood_at_a_cls_limit_with_nothing_seen_is_that_of_1_96_sigma(tmp_path):
    """CLs at the median: limit = 1.96 sigma (arXiv:1007.1727, eq. 88), so 2 Delta ln L = 3.8415 at the limit."""
    table = TABLE.replace(", 180", ", 200").replace(", 280", ", 300").replace(", 36", ", 30").replace(", 60", ", 50")
    term = build(write(tmp_path, table=table), signal_uncertainty=0.0, scale_uncertainty=False)
    predicted, _ = term.cross_section(narrow(1000.0, 0.01).mediator)
    g_quark = 0.01 * math.sqrt(0.200 / predicted)
    point = narrow(1000.0, g_quark)
    assert term.cross_section(point.mediator)[0] == pytest.approx(0.200, rel=1e-12)
    assert 2.0 * term.loglike(point, {}) == pytest.approx(-3.841459, abs=1e-4)
    assert term.confidence(point)[0] == pytest.approx(0.05, abs=1e-6)
    assert term.loglike(narrow(1000.0, 1e-6), {}) == pytest.approx(0.0, abs=1e-6)


def test_a_limit_weaker_than_expected_prefers_a_signal_and_a_stronger_one_does_not(tmp_path):
    term = build(write(tmp_path))
    weaker, stronger = (
        max(term.loglike(narrow(mass, g), {}) for g in np.geomspace(1e-3, 0.3, 40)) for mass in (1000.0, 2000.0)
    )
    assert weaker > 0.01
    assert stronger <= 0.0


def test_limits_are_interpolated_in_log_mass_and_linearly_in_width(tmp_path):
    table = build(write(tmp_path)).table
    node = table.weights(1000.0, 0.01)
    assert node[0, 0] == 1.0
    middle = table.weights(math.sqrt(2.0) * 1000.0, 0.055)
    np.testing.assert_allclose(middle, 0.25, rtol=1e-12)
    assert table.weights(2000.0, 1e-4)[1, 0] == 1.0


def test_signal_is_production_times_branching_fraction():
    """Narrow width: unit cross section times g_q^2 times Gamma(5 quarks)/Gamma from the widths' own module."""
    term = build(DEMO / "brackwater_dijet.toml", k_factor=1.3)
    mediator = spin_one_candidate(2000.0, 100.0, "axial", 0.2, 1.0, 0.05).mediator
    widths = spin_one_widths(2000.0, True, 100.0, 1.0, 0.2, 0.05)
    share = widths[:5].sum() / widths.sum()
    expected = 1.3 * 0.2**2 * load_production(13.0)(2000.0)[0] * share
    assert term.cross_section(mediator)[0] == pytest.approx(expected, rel=1e-12)
    dilepton = build(DEMO / "brackwater_dilepton.toml", kind=DileptonResonance)
    assert dilepton.cross_section(mediator)[0] == pytest.approx(expected / 1.3 * widths[6:8].sum() / widths[:5].sum())
    quiet = narrow(1000.0, 0.1)
    assert dilepton.loglike(quiet, {}) == 0.0


def test_signal_uncertainty_profiled_and_marginalised_meet_quadrature(tmp_path):
    path = write(tmp_path)
    profiled, marginal = (build(path, inner, signal_uncertainty=0.3, scale_uncertainty=False) for inner in
                          ("profile", "marginal"))  # fmt: skip
    point = narrow(1000.0, 0.04)
    pull, sigma = profiled._place(point.mediator)
    strength = profiled.cross_section(point.mediator)[0] / sigma
    z = np.linspace(-10.0, 10.0, 20001)
    chi2 = (strength * (1.0 + 0.3 * z) - pull) ** 2
    assert profiled.loglike(point, {}) == pytest.approx(0.5 * pull**2 - 0.5 * (chi2 + z**2).min(), abs=1e-6)
    weight = np.exp(-0.5 * (chi2 + z**2)) / math.sqrt(2.0 * math.pi)
    assert marginal.loglike(point, {}) == pytest.approx(0.5 * pull**2 + math.log(np.trapezoid(weight, z)), abs=1e-9)


def test_outside_the_table_a_search_has_no_say_or_refuses(tmp_path):
    term = build(write(tmp_path))
    for point in (narrow(900.0, 0.1), narrow(2100.0, 0.1), narrow(1500.0, 1.0)):
        assert term.loglike(point, {}) == 0.0
        assert term.confidence(point) == (1.0, 1.0)
    refusing = build(write(tmp_path, limits=LIMITS.replace('outside = "ignore"', "")))
    with pytest.raises(PointError, match=r"900 GeV.*outside the table \(1000 to 2000 GeV, width up to 0\.1\)"):
        refusing.loglike(narrow(900.0, 0.1), {})


def test_what_is_missing_is_said(tmp_path):
    term = build(write(tmp_path))
    with pytest.raises(MissingPrediction, match="a spin-one mediator"):
        term.loglike(dataclasses.replace(narrow(1000.0, 0.1), mediator=None), {})


BROKEN = {
    "observed: this column is required": ("observed", "seen"),
    "seen: unknown column": ("observed", "seen"),
    "observed: must be a finite number in row 3 (given: 'many')": (" 30, 36", " many, 36"),
    "expected: must be positive (row 4)": (" 60", " -60"),
    "each of 2 masses must come once with each of 2 widths": ("2000, 0.01", "2000, 0.10"),
    "at least two masses": ("2000, 0.01, 30, 36\n2000, 0.10, 50, 60\n", ""),
}


@pytest.mark.parametrize(("message", "replacement"), BROKEN.items())
def test_broken_tables_are_refused_with_a_clear_message(tmp_path, message, replacement):
    assert replacement[0] in TABLE
    with pytest.raises(InputError) as caught:
        build(write(tmp_path, table=TABLE.replace(*replacement)))
    assert message in str(caught.value)
    assert "limits.csv" in str(caught.value)


def test_broken_limit_files_are_refused(tmp_path):
    with pytest.raises(InputError, match="looks at quarks only"):
        build(write(tmp_path, limits=LIMITS.replace('"uu"', '"ee"')))
    with pytest.raises(InputError, match=r"no production table at this energy; known: 13, 13\.6, 14 TeV"):
        build(write(tmp_path, limits=LIMITS.replace("13.0", "8.0")))
    with pytest.raises(InputError, match="give this column, or the key `width_ratio_below`"):
        build(write(tmp_path, table="mass,observed\n1000,200\n2000,30\n"))
    with pytest.raises(InputError, match="cannot be read"):
        build(write(tmp_path, limits=LIMITS.replace("limits.csv", "nowhere.csv")))


def test_parquet_serves_as_well_as_csv(tmp_path):
    path = write(tmp_path)
    pd.read_csv(tmp_path / "limits.csv", comment="#", skipinitialspace=True).to_parquet(tmp_path / "limits.parquet")
    other = tmp_path / "other.toml"
    other.write_text(LIMITS.replace("limits.csv", "limits.parquet"), encoding="utf-8")
    point = narrow(1400.0, 0.1)
    assert build(other).loglike(point, {}) == build(path).loglike(point, {})


def test_curves_cross_the_limits_they_come_from():
    term = build(DEMO / "brackwater_dijet.toml", signal_uncertainty=0.0, scale_uncertainty=False)
    curve = term.limit_curve("coupling", points=4)
    for mass, g_quark in zip(curve.x_values[:3], curve.observed[:3], strict=True):
        assert term.confidence(narrow(float(mass), float(g_quark)))[0] == pytest.approx(0.05, abs=1e-3)
    assert np.all(np.diff(curve.bands[0]) > 0.0)
    cross = term.limit_curve("cross-section", points=4)
    # At the first mass of the table, corrected for the acceptance of one half.
    first = pd.read_csv(DEMO / "brackwater_dijet_limits.csv", comment="#").iloc[0]
    assert cross.observed[0] == pytest.approx(first.observed / 0.5, rel=1e-3)
    assert cross.bands[0, 2] == pytest.approx(first.expected / 0.5, rel=1e-6)
    assert any("invented" in caveat for caveat in cross.caveats)
    with pytest.raises(InputError, match="no limit curve of this name"):
        term.limit_curve("cross")


def test_curves_are_infinite_where_nothing_is_excluded_within_the_table(tmp_path):
    weak = build(write(tmp_path, table=TABLE.replace(" 30, 36", " 3e9, 3e9").replace(" 50, 60", " 5e9, 5e9")))
    assert weak.limit_curve("coupling", points=2).observed[1] == math.inf
    narrow_only = LIMITS.replace('unit = "fb"', 'unit = "fb"\nwidth_ratio_below = 1e-12')
    only = build(write(tmp_path, limits=narrow_only, table="mass,observed\n1000,200\n2000,30\n"))
    assert np.all(only.limit_curve("coupling", points=3).observed == math.inf)
    assert only.limit_curve("cross-section", points=3).bands is None


def test_expected_and_simulated_data_favour_the_point_that_made_them():
    term = build(DEMO / "brackwater_dijet.toml")
    point = narrow(2100.0, 0.15)
    asimov = term.expected(point, {})
    assert asimov.loglike(point, {}) > max(asimov.loglike(narrow(2100.0, g), {}) for g in (0.05, 0.3)) + 1.0
    pulls = [term.simulate(point, {}, np.random.default_rng(k))._place(point.mediator)[0] for k in range(300)]
    mean, _ = asimov._place(point.mediator)
    assert np.mean(pulls) == pytest.approx(mean, abs=5.0 / math.sqrt(300))


def test_a_plane_excludes_where_dark_matter_is_too_heavy_to_share_the_decays():
    """Dijets are lost to invisible decays below M/2: what is excluded above the line may survive below it."""
    term = build(DEMO / "brackwater_dijet.toml")
    plane = exclusion_plane(term, "test", np.array([1800.0, 2500.0]), np.array([10.0, 2000.0]), "vector", 0.1, 1.0)
    assert plane.observed.shape == (2, 2)
    assert np.all(plane.expected[1] < plane.expected[0])
    table = pd.DataFrame(plane.table())
    assert list(table.columns) == ["mediator_mass", "mass", "cls_observed", "cls_expected"]
    assert table.cls_expected[2] == plane.expected[1, 0]
