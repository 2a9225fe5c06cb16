"""Examples of failures: few for each reason, none twice, none lost to a crash."""

from __future__ import annotations

import json
import math
from pathlib import Path

from scanfit.store.failures import EXAMPLES_PER_REASON, FailureLog


def test_few_examples_are_kept_for_each_reason_and_numbers_do_not_make_a_reason(tmp_path: Path) -> None:
    log = FailureLog(tmp_path / "failures.jsonl")
    assert log.latest() is None
    for number in range(100):
        log.add({"mass": float(number)}, "terms.relic", f"no freeze-out at {number}.5e-3 GeV")
    log.add({"mass": 1.0}, "model", "no freeze-out at 3 GeV")
    assert len(log.entries) == EXAMPLES_PER_REASON + 1
    assert log.latest() == "model: no freeze-out at 3 GeV"
    assert log.entries[0] == {
        "culprit": "terms.relic",
        "message": "no freeze-out at 0.5e-3 GeV",
        "values": {"mass": 0.0},
    }


def test_a_second_session_goes_on_where_the_first_ended(tmp_path: Path) -> None:
    path = tmp_path / "failures.jsonl"
    FailureLog(path).add({"mass": 1.0}, "model", "bad")
    whole = path.read_bytes()
    path.write_bytes(whole + b'{"culprit": "mod')  # the process died here
    log = FailureLog(path)
    assert path.read_bytes() == whole
    log.add({"mass": 1.0}, "model", "bad")  # evaluated again after the crash
    log.add({"mass": 2.0}, "model", "bad")
    assert [entry["values"]["mass"] for entry in map(json.loads, path.read_text().splitlines())] == [1.0, 2.0]
    assert FailureLog(path).entries == log.entries


def test_numbers_that_json_lacks_are_written_in_words(tmp_path: Path) -> None:
    log = FailureLog(tmp_path / "failures.jsonl")
    log.add({"mass": math.nan}, "model", "not a mass")
    assert json.loads(log.path.read_text())["values"] == {"mass": "nan"}
