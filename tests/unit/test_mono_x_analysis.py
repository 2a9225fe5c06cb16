"""Broken analysis files and tables: one clear message each, and all of them at once."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.mono_x.analysis import Analysis, read_analysis, read_background
from scanfit.likelihoods.mono_x.signal import load_table, read_table
from scanfit.likelihoods.mono_x.term import MonoX

ANALYSIS = """
title = "invented"
source = "invented for this test"
invented = true
signature = "mono-jet"
sqrt_s = 13.0
luminosity = 10.0
edges = [200.0, 300.0, 400.0]
overflow = true
background = [1000.0, 200.0, 80.0]
uncertainty = [40.0, 10.0, 6.0]
correlation = [[1.0, 0.5, 0.2], [0.5, 1.0, 0.5], [0.2, 0.5, 1.0]]
observed = [990, 210, 75]
"""


def write(tmp_path: Path, *replacements: tuple[str, str]) -> Path:
    text = ANALYSIS
    for old, new in replacements:
        assert old in text
        text = text.replace(old, new)
    path = tmp_path / "analysis.toml"
    path.write_text(text, encoding="utf-8")
    return path


def read(path: Path) -> Analysis:
    analysis = read_analysis(path)
    read_background(analysis, path)
    return analysis


def term(path: Path) -> MonoX:
    return MonoX(MonoX.Options(data=path.name), BuildContext(folder=path.parent))


CORRELATION = "correlation = [[1.0, 0.5, 0.2], [0.5, 1.0, 0.5], [0.2, 0.5, 1.0]]"
BROKEN = {
    "correlation: must be positive definite; its smallest eigenvalue is": (
        ("[0.2, 0.5, 1.0]", "[-0.9, 0.9, 1.0]"),
        ("[1.0, 0.5, 0.2]", "[1.0, 0.9, -0.9]"),
        ("[0.5, 1.0, 0.5]", "[0.9, 1.0, 0.9]"),
    ),
    "must be symmetric": (("[0.2, 0.5, 1.0]", "[0.3, 0.5, 1.0]"),),
    "ones on its diagonal": (("[0.2, 0.5, 1.0]", "[0.2, 0.5, 0.9]"),),
    "observed: must have one value for each of the 3 bins": (("[990, 210, 75]", "[990, 210]"),),
    "background: must have one value for each of the 3 bins": (("[1000.0, 200.0, 80.0]", "[1.0, 2.0, 3.0, 4.0]"),),
    "correlation: must have 3 rows of 3 values": (("[0.5, 1.0, 0.5], ", ""),),
    "background.1: must be greater than 0": (("200.0, 80.0]", "-200.0, 80.0]"),),
    "observed.2: must be greater than or equal to 0": (("210, 75", "210, -75"),),
    "observed.0: must be a valid integer": (("[990,", "[990.5,"),),
    "luminosity: must be a finite number": (("luminosity = 10.0", "luminosity = nan"),),
    "background: this key is required, or a `workspace`": (("background = [1000.0, 200.0, 80.0]", ""),),
    "edges: give either `edges` or `regions`": (("overflow = true", 'overflow = true\nregions = ["a", "b", "c"]'),),
    "regions: need a table of one's own": (
        ("edges = [200.0, 300.0, 400.0]\noverflow = true", 'regions = ["a", "b", "c"]'),
    ),
    "observed: is read from the `workspace`": (("overflow = true", 'overflow = true\nworkspace = "w.json"'),),
    "channels: belongs to a `workspace`": (("overflow = true", 'overflow = true\nchannels = ["a"]'),),
    "validity.dark_mass: must run from the smaller": (
        ("observed = [990, 210, 75]", "observed = [990, 210, 75]\n[validity]\ndark_mass = [10.0, 1.0]"),
    ),
    "validity.outside: not one of the allowed values": (
        ("observed = [990, 210, 75]", 'observed = [990, 210, 75]\n[validity]\noutside = "clip"'),
    ),
    "edges: must rise from bin to bin": (("[200.0, 300.0, 400.0]", "[200.0, 400.0, 300.0]"),),
    "at least one bin": (("edges = [200.0, 300.0, 400.0]\noverflow = true", "edges = [200.0]"),),
    "exactly one of `covariance`, `uncertainty` and `relative_uncertainty` (given: 'none')": (
        ("uncertainty = [40.0, 10.0, 6.0]", ""),
    ),
    "cannot stand beside `covariance`": (("uncertainty = [40.0, 10.0, 6.0]", "covariance = [[1.0]]"),),
    "cannot stand beside `correlation`": (("overflow = true", "overflow = true\ncorrelated_fraction = 0.5"),),
    "reaches a third moment of at most": (("overflow = true", "overflow = true\nthird_moments = [1e9, 0.0, 0.0]"),),
    "unknown key": (("overflow = true", "overflow = true\nlumi = 3.0"),),
}


@pytest.mark.parametrize(("message", "replacements"), BROKEN.items())
def test_broken_files_are_refused_with_a_clear_message(tmp_path, message, replacements):
    path = write(tmp_path, *replacements)
    with pytest.raises(InputError) as caught:
        read(path)
    assert message in str(caught.value)
    assert str(path) in str(caught.value)


def test_all_broken_rules_are_reported_at_once(tmp_path):
    path = write(
        tmp_path,
        ("[990, 210, 75]", "[990, 210]"),
        ("[40.0, 10.0, 6.0]", "[40.0, 10.0]"),
        ("[200.0, 300.0, 400.0]", "[200.0, 400.0, 300.0]"),
        ("[0.2, 0.5, 1.0]", "[0.2, 0.5, 0.9]"),
    )
    with pytest.raises(InputError) as caught:
        read(path)
    assert {problem.where for problem in caught.value.problems} == {"observed", "uncertainty", "edges", "correlation"}


def test_a_table_that_does_not_cover_the_bins_or_the_energy_is_named(tmp_path):
    with pytest.raises(InputError, match=r"edges\.0: .*from 100 to 2000 GeV.*50\.0"):
        term(write(tmp_path, ("[200.0, 300.0", "[50.0, 300.0")))
    with pytest.raises(InputError, match=r"sqrt_s: there is no signal table.*13 TeV.*8\.0"):
        term(write(tmp_path, ("sqrt_s = 13.0", "sqrt_s = 8.0")))
    with pytest.raises(InputError, match=r"mono-photon at this energy.*8\.0"):
        term(write(tmp_path, ("mono-jet", "mono-photon"), ("sqrt_s = 13.0", "sqrt_s = 8.0")))
    with pytest.raises(InputError, match="cannot be read"):
        MonoX(MonoX.Options(data="nowhere.toml"), BuildContext(folder=tmp_path))


def test_a_damaged_table_is_refused(tmp_path):
    table = load_table("mono-jet", 13.0)
    good = {name: getattr(table, name) for name in ("cross_section", "cut", "virtuality")}
    with np.load(table.path) as file:
        metadata = file["metadata"]
    np.savez(tmp_path / "good.npz", **good, metadata=metadata)
    assert read_table(tmp_path / "good.npz").metadata == table.metadata
    good["cross_section"] = good["cross_section"] * 1.0000001
    np.savez(tmp_path / "changed.npz", **good, metadata=metadata)
    with pytest.raises(InputError, match="checksum"):
        read_table(tmp_path / "changed.npz")
    (tmp_path / "cut.npz").write_bytes((tmp_path / "good.npz").read_bytes()[:1000])
    with pytest.raises(InputError, match="cannot be read"):
        read_table(tmp_path / "cut.npz")


def test_the_ways_to_write_a_covariance_agree(tmp_path):
    """Relative or absolute, common fraction or matrix, or the covariance itself."""
    sizes = np.array([40.0, 10.0, 6.0])
    matrix = 0.4 + 0.6 * np.eye(3)
    covariance = np.outer(sizes, sizes) * matrix
    ways = (
        ("uncertainty = [40.0, 10.0, 6.0]", "correlated_fraction = 0.4"),
        ("relative_uncertainty = [0.04, 0.05, 0.075]", f"correlation = {matrix.tolist()}"),
        (f"covariance = {covariance.tolist()}", ""),
    )
    for size, correlation in ways:
        path = write(tmp_path, ("uncertainty = [40.0, 10.0, 6.0]", size), (CORRELATION, correlation))
        np.testing.assert_allclose(read(path).covariance_matrix(), covariance, rtol=1e-12)


def test_without_overflow_the_last_edge_closes_the_last_bin(tmp_path):
    analysis = read(
        write(tmp_path, ("400.0]\noverflow = true", "400.0, 500.0]")),
    )
    assert analysis.count == 3
    assert analysis.bin_name(2) == "400-500 GeV"
    assert read(write(tmp_path)).bin_name(2) == "above 400 GeV"


def test_a_full_likelihood_without_pyhf_says_what_to_install(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyhf", None)
    lines = 'overflow = true\nworkspace = "w.json"\nchannels = ["signal"]'
    own = (CORRELATION, "uncertainty = [40.0, 10.0, 6.0]", "observed = [990, 210, 75]")
    gone = ("background = [1000.0, 200.0, 80.0]", *own)
    path = write(tmp_path, ("overflow = true", lines), *((text, "") for text in gone))
    with pytest.raises(InputError, match=r"workspace: needs pyhf.*pip install 'scanfit\[histfactory\]'"):
        MonoX(MonoX.Options(data=path.name), BuildContext(tmp_path, "profile"))
