"""``scanfit limit``: files, table, messages."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from scanfit.cli.main import commands
from scanfit.errors import InputError

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
