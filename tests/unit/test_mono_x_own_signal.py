"""The user's own signal table: format, interpolation, and how it is brought to other couplings."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError, PointError
from scanfit.likelihoods.exclusion_plane import spin_one_candidate
from scanfit.likelihoods.mono_x.signal import SpinOneSignal, load_table
from scanfit.likelihoods.mono_x.term import MonoX

ANALYSIS = """
title = "invented"
source = "invented for this test"
invented = true
signature = "mono-jet"
sqrt_s = 13.0
luminosity = 10.0
regions = ["loose", "tight"]
background = [1000.0, 100.0]
relative_uncertainty = [0.05, 0.1]
observed = [990, 105]

[signal]
table = "signal.csv"
unit = "fb"
coupling = "axial"
g_quark = 0.25
g_dark = 1.0

[validity]
"""
MEDIATORS = (200.0, 500.0, 1000.0, 2000.0)
DARK = (10.0, 80.0, 240.0, 260.0, 480.0, 700.0)


def truth(candidate) -> np.ndarray:
    """Cross section x acceptance in fb of an invented selection: shipped rates times slowly varying efficiencies."""
    mediator = candidate.mediator
    signal = SpinOneSignal(load_table("mono-jet", 13.0), (250.0, 500.0, 2000.0))
    rate, _ = signal(mediator.mass, mediator.width, mediator.coupling == "axial", candidate.mass, mediator.g_quark,
                     mediator.g_dark)  # fmt: skip
    return 1000.0 * rate * np.array([0.7, 0.5])


def frame() -> pd.DataFrame:
    rows = []
    for mediator, dark in itertools.product(MEDIATORS, DARK):
        rates = truth(spin_one_candidate(mediator, dark, "axial", 0.25, 1.0))
        rows += [(mediator, dark, bin + 1, rate, 0.1) for bin, rate in enumerate(rates)]
    names = ["mediator_mass", "dark_mass", "bin", "cross_section", "relative_uncertainty"]
    return pd.DataFrame(rows, columns=names)


@pytest.fixture(scope="module")
def table() -> pd.DataFrame:
    return frame()


def build(tmp_path: Path, table: pd.DataFrame, *replacements: tuple[str, str]) -> MonoX:
    text = ANALYSIS
    for old, new in replacements:
        assert old in text
        text = text.replace(old, new)
    table.to_csv(tmp_path / "signal.csv", index=False)
    (tmp_path / "search.toml").write_text(text, encoding="utf-8")
    return MonoX(MonoX.Options(data="search.toml", signal_uncertainty=0.0), BuildContext(tmp_path))


def test_the_table_comes_back_at_its_own_points(tmp_path, table):
    term = build(tmp_path, table)
    for mediator, dark in ((500.0, 240.0), (500.0, 260.0), (2000.0, 10.0)):
        point = spin_one_candidate(mediator, dark, "axial", 0.25, 1.0)
        events, spread = term.signal(point)
        np.testing.assert_allclose(events, 10.0 * truth(point), rtol=1e-9)
        np.testing.assert_allclose(spread, np.log(1.1), rtol=1e-9)


@pytest.mark.parametrize(
    ("mediator", "dark", "g_quark", "g_dark"),
    [(700.0, 10.0, 0.25, 1.0), (700.0, 345.0, 0.1, 1.0), (700.0, 355.0, 0.1, 0.5), (1500.0, 300.0, 0.5, 1.5)],
)
def test_between_points_and_at_other_couplings_rates_hold(tmp_path, table, mediator, dark, g_quark, g_dark):
    """Also on both sides of 2 m = M, and for a mediator three times as broad; 10 % on this deliberately coarse grid.

    With bins in missing momentum the table differs from the shipped rates by a constant, which comes back exactly.
    """
    point = spin_one_candidate(mediator, dark, "axial", g_quark, g_dark)
    np.testing.assert_allclose(build(tmp_path, table).signal(point)[0], 10.0 * truth(point), rtol=0.10)
    binned = build(tmp_path, table, ('regions = ["loose", "tight"]', "edges = [250.0, 500.0, 2000.0]"))
    np.testing.assert_allclose(binned.signal(point)[0], 10.0 * truth(point), rtol=1e-9)


def test_lighter_dark_matter_is_as_good_as_the_lightest(tmp_path, table):
    term = build(tmp_path, table)
    light, lightest = (term.signal(spin_one_candidate(1000.0, m, "axial", 0.25, 1.0))[0] for m in (0.1, 10.0))
    np.testing.assert_allclose(light, lightest, rtol=2e-3)


def test_outside_the_table_points_are_refused_or_left_alone(tmp_path, table):
    for mediator, dark in ((3000.0, 100.0), (150.0, 100.0), (1000.0, 800.0)):
        point = spin_one_candidate(mediator, dark, "axial", 0.25, 1.0)
        with pytest.raises(PointError, match=f"{mediator:g} GeV with dark matter of {dark:g} GeV lies outside"):
            build(tmp_path, table).loglike(point, {})
        ignoring = build(tmp_path, table, ("[validity]", '[validity]\noutside = "ignore"'))
        assert not ignoring.signal(point)[0].any()


def test_caveats_and_files_name_the_table(tmp_path, table):
    term = build(tmp_path, table)
    assert any("own table signal.csv times 1," in caveat for caveat in term.caveats)
    assert {path.name for path in term.data_files} == {"search.toml", "signal.csv", "mono_jet_13tev.npz"}
    assert term.explain(spin_one_candidate(500.0, 10.0, "axial", 0.25, 1.0), {})[2].name == "events in tight"


def test_broken_tables_are_refused_with_a_clear_message(tmp_path, table):
    with pytest.raises(InputError, match=r"bin: the analysis has bins 1 to 2 \(given: 3"):
        build(tmp_path, table.assign(bin=table.bin + 1))
    with pytest.raises(InputError, match=r"each of the 2 bins.*mediator 500, dark matter 80 GeV"):
        build(tmp_path, table.drop(index=14))
    with pytest.raises(InputError, match=r"cross_section: must not be negative \(row 3\)"):
        build(tmp_path, table.assign(cross_section=table.cross_section.where(table.index != 2, -1.0)))
    with pytest.raises(InputError, match="unknown column"):
        build(tmp_path, table.assign(colour=1.0))
    with pytest.raises(InputError, match="must span an area"):
        build(tmp_path, table[table.dark_mass == 10.0])
    with pytest.raises(InputError, match=r"must be a \.csv or \.parquet file"):
        build(tmp_path, table, ("signal.csv", "signal.txt"))
    with pytest.raises(InputError, match="vanishes here"):
        build(tmp_path, pd.concat([table, table.tail(2).assign(dark_mass=6000.0)]))
