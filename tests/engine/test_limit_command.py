"""``scanfit limit``: files, table, messages."""

from __future__ import annotations

import csv
import json
import math
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner, Result

from scanfit.cli.exclusion import excluded_ranges
from scanfit.cli.main import commands
from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.exclusion_plane import spin_one_candidate
from scanfit.likelihoods.resonance.term import DijetResonance

DEMO = Path(__file__).parents[2] / "runs" / "demo"


def call(*arguments: str) -> Result:
    return CliRunner().invoke(commands, ["limit", *arguments], catch_exceptions=True)


def test_everything_is_written(tmp_path: Path) -> None:
    arguments = ["direct-detection", str(DEMO / "corrie_xenon.toml"), "--points", "4", "--pseudo-experiments", "12"]
    result = call(*arguments, "--level", "0.95", "--out", str(tmp_path / "out"))
    assert result.exit_code == 0, result.output
    assert "invented data" in result.output
    assert "mass [GeV]" in result.output
    assert "observed [cm²]" in result.output
    assert {path.name for path in (tmp_path / "out").iterdir()} == {
        f"limit_si{ending}" for ending in (".csv", ".json", ".png", ".pdf")
    }
    record = json.loads((tmp_path / "out" / "limit_si.json").read_text(encoding="utf-8"))
    assert record["level"] == 0.95
    lines = (tmp_path / "out" / "limit_si.csv").read_text(encoding="utf-8").splitlines()
    assert any(line.startswith("#") and "invented" in line for line in lines)
    assert any("mass in GeV, limits in cm²" in line for line in lines)
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert [float(row["observed"]) for row in rows] == pytest.approx(record["observed"], rel=1e-5)
    assert [float(row["expected_50"]) for row in rows] == pytest.approx(record["expected_50"], rel=1e-5)
    # The same seed gives the same table.
    again = call(*arguments, "--level", "0.95", "--out", str(tmp_path / "again"))
    assert again.exit_code == 0
    first, second = ((tmp_path / name / "limit_si.csv").read_bytes() for name in ("out", "again"))
    assert first == second


def test_event_list_of_the_demo(tmp_path: Path) -> None:
    arguments = [
        "direct-detection",
        str(DEMO / "corrie_argon_events.toml"),
        "--points",
        "5",
        "--pseudo-experiments",
        "12",
    ]
    result = call(*arguments, "--json", "--out", str(tmp_path))
    assert result.exit_code == 0, result.output
    record = json.loads(result.output)
    assert any("invented data" in caveat for caveat in record["caveats"])
    # Background-only events: the limit lies where limits without a signal do.
    for mass in range(1, 5):
        assert 0.5 * record["expected_2.5"][mass] < record["observed"][mass] < 2.0 * record["expected_97.5"][mass]


def test_json_of_a_published_curve(tmp_path: Path) -> None:
    result = call("direct-detection-limit", str(DEMO / "corrie_limit_curve.toml"), "--json", "--out", str(tmp_path))
    assert result.exit_code == 0, result.output
    record = json.loads(result.output)
    assert record["observed"][0] == 1.3e-43
    assert any("approximate likelihood" in caveat for caveat in record["caveats"])


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["direct-detections", "corrie_xenon.toml"], "did you mean 'direct-detection'"),
        (["direct-detection", "nowhere.toml"], "cannot be read"),
        (["direct-detection", "corrie_xenon.toml", "--curve", "sii"], "did you mean 'si'"),
        (["direct-detection", "corrie_xenon.toml", "--set", "limit_method=unify"], "did you mean 'unified'"),
        (["direct-detection", "corrie_xenon.toml", "--set", "velocities"], "KEY=VALUE"),
        (["relic-abundance", "corrie_xenon.toml"], "unknown key"),
    ],
)
def test_mistakes_are_named(arguments: list[str], message: str) -> None:
    arguments[1] = str(DEMO / arguments[1])
    result = call(*arguments)
    assert isinstance(result.exception, InputError)
    assert message in str(result.exception)


def test_a_plane_is_written_as_table_record_and_figure(tmp_path: Path) -> None:
    """Dijets, where CLs is a closed formula: the record is what the term says of each point."""
    arguments = ["dijet-resonance", str(DEMO / "brackwater_dijet.toml"), "--plane", "vector", "--points", "6"]
    arguments += ["--with", "g_quark=0.1", "--with", "mediator_mass=[1500, 3500]", "--with", "dark_mass=[10, 2000]"]
    result = call(*arguments, "--out", str(tmp_path / "out"))
    assert result.exit_code == 0, result.output
    assert "excluded at 95 %" in result.output
    assert "Note: Brackwater ring dijet search (invented): invented data" in result.output
    assert {path.name for path in (tmp_path / "out").iterdir()} == {
        f"plane_vector{ending}" for ending in (".csv", ".json", ".png", ".pdf")
    }
    record = json.loads((tmp_path / "out" / "plane_vector.json").read_text(encoding="utf-8"))
    assert record["x_values"] == [1500.0, 1900.0, 2300.0, 2700.0, 3100.0, 3500.0]
    assert "g_quark = 0.1" in record["fixed"]
    term = DijetResonance(DijetResonance.Options(data="brackwater_dijet.toml"), BuildContext(DEMO))
    point = spin_one_candidate(1900.0, record["y_values"][5], "vector", 0.1, 1.0)
    assert (record["cls_observed"][5][1], record["cls_expected"][5][1]) == pytest.approx(term.confidence(point))
    lines = (tmp_path / "out" / "plane_vector.csv").read_text(encoding="utf-8").splitlines()
    assert any(line.startswith("#") and "invented data" in line for line in lines)
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert len(rows) == 36
    assert float(rows[31]["cls_observed"]) == pytest.approx(record["cls_observed"][5][1], rel=1e-5)
    # Another level moves the line, not the table.
    again = call(*arguments, "--level", "0.9", "--json", "--out", str(tmp_path / "again"))
    assert json.loads(again.output)["level"] == 0.9
    assert (tmp_path / "out/plane_vector.csv").read_bytes() == (tmp_path / "again/plane_vector.csv").read_bytes()


def test_a_plane_of_the_mono_jet_search_excludes_light_mediators_on_shell_only(tmp_path: Path) -> None:
    arguments = ["mono-x", str(DEMO / "brackwater_mono_jet.toml"), "--plane", "axial", "--points", "4", "--json"]
    ranges = ["--with", "mediator_mass=[600, 3000]", "--with", "dark_mass=[1, 1200]"]
    result = call(*arguments, *ranges, "--out", str(tmp_path))
    assert result.exit_code == 0, result.output
    record = json.loads(result.output)
    assert record["cls_expected"][0][0] < 1e-3
    assert record["cls_expected"][0][3] > 0.05
    assert record["cls_expected"][3][0] > 0.5
    assert any("no detector simulation" in caveat for caveat in record["caveats"])


def test_ranges_end_where_the_confidence_crosses_the_level() -> None:
    """CLs = exp(-t) with t piecewise linear: crossings are known, 0.05 = exp(-2.9957) by the logarithm itself."""
    x, needed = np.arange(8.0), -math.log(0.05)
    t = np.array([0.0, 2.0 * needed, 1.5 * needed, 0.5 * needed, np.nan, 2.0 * needed, 0.0, 2.0 * needed])
    found = excluded_ranges(x, np.exp(-t), 0.95)
    np.testing.assert_allclose(found, [(0.5, 2.5), (5.0, 5.5), (6.5, 7.0)])
    assert excluded_ranges(x, np.ones(8), 0.95) == []


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["mono-x", "brackwater_mono_jet.toml", "--plane", "axal"], "did you mean 'axial'"),
        (["mono-x", "brackwater_mono_jet.toml", "--plane", "axial", "--with", "g_qark=1"], "did you mean 'g_quark'"),
        (["mono-x", "brackwater_mono_jet.toml", "--plane", "axial", "--with", "dark_mass=[9, 1]"], "must rise"),
        (["mono-x", "brackwater_mono_jet.toml", "--plane", "axial", "--curve", "axial"], "cannot be combined"),
        (["mono-x", "brackwater_mono_jet.toml", "--with", "g_quark=1"], "belongs to a --plane"),
        (["dilepton-resonance", "brackwater_dilepton.toml", "--plane", "vector"], "no leptons to see"),
        (["direct-detection", "corrie_xenon.toml", "--plane", "si"], "no plane of this name"),
    ],
)
def test_mistakes_about_planes_are_named(arguments: list[str], message: str) -> None:
    test_mistakes_are_named(arguments, message)
