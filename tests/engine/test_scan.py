"""The driver from a run file to a finished folder, with a toy model whose answer is known."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from scanfit.cli.main import main
from scanfit.driver.reporter import Tally
from scanfit.driver.scan import Outcome, run
from scanfit.errors import InputError, RunFolderError, ScanStopped
from scanfit.results import Run
from scanfit.runfile import load

Toy = Callable[..., Path]
RESULTS = ("posterior.parquet", "profile.parquet", "explorers/nested/posterior.parquet")


class Listener:
    def __init__(self) -> None:
        self.notes: list[str] = []
        self.tallies: list[Tally] = []

    def note(self, text: str) -> None:
        self.notes.append(text)

    def progress(self, tally: Tally) -> None:
        self.tallies.append(tally)

    def close(self) -> None:
        pass


def scan(path: Path, out: Path, **options: bool | int) -> tuple[Outcome, Listener]:
    listener = Listener()
    return run(load(path), out, reporter=listener, **options), listener  # type: ignore[arg-type]


def without_times(summary: Path) -> str:
    def strip(value: object) -> object:
        if isinstance(value, dict):
            return {key: strip(item) for key, item in value.items() if key != "wall_seconds"}
        return [strip(item) for item in value] if isinstance(value, list) else value

    return json.dumps(strip(json.loads(summary.read_text())))


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("finished")
    toy_folder = Path(__file__).parents[1] / "toy"
    run(load(toy_folder / "toy.toml"), folder / "out")
    return folder / "out"


def test_the_known_answer_comes_out(finished: Path) -> None:
    summary = json.loads((finished / "summary.json").read_text())
    # The bump lies almost wholly inside the box, so the evidence is the prior density, 1/4, times the contained mass.
    assert abs(summary["log_evidence"] - math.log(0.25)) < 4.0 * summary["log_evidence_error"]
    assert summary["converged"]
    posterior = pd.read_parquet(finished / "posterior.parquet")
    assert posterior["weight"].sum() == pytest.approx(1.0)
    effective = 1.0 / np.square(posterior["weight"]).sum()
    spread = math.hypot(0.2, 0.05)
    assert abs(np.average(posterior["x"], weights=posterior["weight"])) < 5.0 * spread / math.sqrt(effective)


def test_every_evaluation_is_archived(finished: Path) -> None:
    summary = json.loads((finished / "summary.json").read_text())
    points = Run(finished).points()
    assert len(points) == summary["calls"] > len(pd.read_parquet(finished / "posterior.parquet"))
    # A profile likelihood counts the nuisance's normal prior (mean 0, sigma 0.05) as a measurement.
    height = points["log_likelihood"] - 0.5 * (points["shift"] / 0.05) ** 2
    assert summary["best_fit"]["log_likelihood"] == points["log_likelihood"][height.idxmax()]
    assert points.dtypes["x"] == points.dtypes["loglike_bump"] == np.float64


def test_what_the_design_promises_is_in_the_folder(finished: Path) -> None:
    names = {path.name for path in finished.iterdir()}
    assert names >= {"summary.json", "posterior.parquet", "profile.parquet", "points", "figures", "report.html"}
    assert names >= {"manifest.json", "status.json"}
    summary = json.loads((finished / "summary.json").read_text())
    assert summary["best_fit"].keys() >= {"values", "log_likelihood", "terms"}
    assert summary.keys() >= {"log_evidence", "log_evidence_error", "intervals", "diagnostics", "calls", "wall_seconds"}


def test_a_finished_run_is_not_run_again(toy: Toy, tmp_path: Path) -> None:
    path, out = toy(), tmp_path / "out"
    scan(path, out)
    before = (out / "summary.json").stat().st_mtime_ns
    outcome, _ = scan(path, out)
    assert outcome.was_finished
    assert (out / "summary.json").stat().st_mtime_ns == before


def test_other_planes_need_no_new_points(toy: Toy, tmp_path: Path) -> None:
    out = tmp_path / "out"
    calls = scan(toy(), out)[0].summary["calls"]
    outcome, _ = scan(toy(('["x", "radius"]', '["y", "radius"]')), out)
    assert not outcome.was_finished
    assert outcome.summary["calls"] == calls
    assert list(outcome.summary["planes"]) == [("x", "y"), ("y", "radius")]


def test_the_number_of_workers_changes_no_byte(toy: Toy, finished: Path, tmp_path: Path) -> None:
    scan(toy(), tmp_path / "two", workers=2)
    for name in RESULTS:
        assert (tmp_path / "two" / name).read_bytes() == (finished / name).read_bytes()
    assert without_times(tmp_path / "two" / "summary.json") == without_times(finished / "summary.json")


def test_a_changed_run_is_refused_with_what_changed(toy: Toy, tmp_path: Path) -> None:
    out = tmp_path / "out"
    scan(toy(), out)
    with pytest.raises(RunFolderError, match=r"terms\.bump\.sigma changed from 0\.2 to 0\.3") as caught:
        scan(toy(("sigma = 0.2", "sigma = 0.3")), out)
    assert "--fresh" in str(caught.value)
    outcome, _ = scan(toy(("sigma = 0.2", "sigma = 0.3")), out, fresh=True)
    assert not outcome.was_finished


def test_a_folder_of_other_things_is_left_alone(toy: Toy, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / "thesis.tex").write_text("do not lose")
    with pytest.raises(RunFolderError, match="not empty"):
        scan(toy(), out)
    assert (out / "thesis.tex").read_text() == "do not lose"


def test_fresh_removes_only_what_a_run_wrote(toy: Toy, tmp_path: Path) -> None:
    out = tmp_path / "out"
    scan(toy(), out)
    (out / "notes.txt").write_text("mine")
    scan(toy(), out, fresh=True)
    assert (out / "notes.txt").read_text() == "mine"


def test_failed_points_are_counted_and_explained(toy: Toy, tmp_path: Path) -> None:
    trouble = '[terms.trouble]\nuse = "toy.py:Trouble"\nhow = "raise"\nabove = 0.8\n\n[explore]'
    outcome, _ = scan(toy(("[explore]", trouble)), tmp_path / "out")
    points = Run(tmp_path / "out").points()
    assert outcome.summary["failed_points"] == int((points["x"] > 0.8).sum()) > 0
    entry = json.loads((tmp_path / "out" / "failures.jsonl").read_text().splitlines()[0])
    assert (entry["culprit"], entry["message"]) == ("terms.trouble", "ZeroDivisionError: one over nothing")
    assert entry["values"]["x"] > 0.8


def test_rejected_points_are_counted_apart(toy: Toy, tmp_path: Path) -> None:
    """Three quarters of the cube are cut away: nothing has failed, and the posterior keeps to the rest."""
    cut = (("seed = 7", 'seed = 7\nreject_flags = ["far"]'), ("from = -1.0, to = 1.0", "from = -1.8, to = 1.8"))
    outcome, _ = scan(toy(*cut), tmp_path / "out")
    points = Run(tmp_path / "out").points()
    far = np.hypot(points["x"], points["y"]) > 1.0
    assert outcome.summary["rejected_points"] == int(far.sum()) > 0
    assert outcome.summary["failed_points"] == 0
    assert list(outcome.summary["reject_flags"]) == ["far"]
    assert np.all(points.loc[far, "log_likelihood"] == -math.inf)
    posterior = Run(tmp_path / "out").posterior("nested")
    assert float(posterior.loc[np.hypot(posterior["x"], posterior["y"]) > 1.0, "weight"].sum()) == 0.0
    assert outcome.summary["flags"]["far"]["posterior_fraction"] == 0.0


def test_too_many_failures_stop_the_scan_and_lose_nothing(toy: Toy, tmp_path: Path) -> None:
    trouble = '[terms.trouble]\nuse = "toy.py:Trouble"\nhow = "nan"\nabove = 0.0\n\n[explore]'
    with pytest.raises(ScanStopped, match=r"failed_fraction_maximum = 0\.2 allows; the latest: terms\.trouble"):
        scan(toy(("[explore]", trouble)), tmp_path / "out")
    points = pd.read_parquet(tmp_path / "out" / "points")
    assert len(points) >= 200
    assert json.loads((tmp_path / "out" / "status.json").read_text())["phase"] == "stopped"


def test_a_prediction_that_is_never_made_is_told_before_the_scan(toy: Toy, tmp_path: Path) -> None:
    trouble = '[terms.trouble]\nuse = "toy.py:Trouble"\nhow = "missing"\nabove = -1.0\n\n[explore]'
    with pytest.raises(InputError, match=r"terms\.trouble: trouble cannot be used: the model does not predict a third"):
        scan(toy(("[explore]", trouble)), tmp_path / "out")


def test_point_prints_standard_json(toy: Toy, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        main(["point", str(toy()), "x=0.3", "y=0.4", "--json"])
    assert caught.value.code == 0
    found = json.loads(capsys.readouterr().out)
    assert found["values"] == {"x": 0.3, "y": 0.4, "shift": 0.0}
    assert found["derived"]["radius"] == pytest.approx(0.5)
    assert found["log_likelihood"] == pytest.approx(found["terms"]["bump"])
    assert found["explain"]["bump"][0]["predicted"] == 0.3


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["x=0.3"], "y: this free parameter needs a value"),
        (["x=0.3", "y=fast"], "y: must be written NAME=NUMBER"),
        (["x=0.3", "x=0.4", "y=1"], "x: is given twice"),
        (["x=0.3", "y=0", "shfit=1"], "did you mean 'shift'?"),
    ],
)
def test_point_names_what_is_wrong(toy: Toy, capsys: pytest.CaptureFixture[str], words: list[str], says: str) -> None:
    with pytest.raises(SystemExit) as caught:
        main(["point", str(toy()), *words])
    assert caught.value.code == 2
    assert says in capsys.readouterr().err


def test_point_outside_the_prior_says_so(toy: Toy, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit):
        main(["point", str(toy()), "x=5", "y=0"])
    assert "outside the prior" in capsys.readouterr().out


@pytest.mark.parametrize("words", [["status"], ["report"]])
def test_commands_on_a_finished_folder(words: list[str], finished: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        main([*words, str(finished)])
    assert caught.value.code == 0
    assert ("finished" if words == ["status"] else "report.html") in capsys.readouterr().out


def test_commands_on_a_folder_without_a_run(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for command in ("status", "report"):
        with pytest.raises(SystemExit) as caught:
            main([command, str(tmp_path)])
        assert caught.value.code == 3
        assert "holds no" in capsys.readouterr().err
