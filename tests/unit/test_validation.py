"""Every broken rule is reported at once, with path, value, rule and the nearest allowed name."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import pytest
from pydantic import PositiveFloat, model_validator

from scanfit.errors import InputError, Problem, nearest_name
from scanfit.validation import Options, check, read_toml


class Inner(Options):
    exposure: PositiveFloat
    counts: tuple[int, ...] = ()


class Outer(Options):
    inner: Inner
    mode: Literal["measured", "upper-limit"] = "measured"

    @model_validator(mode="after")
    def _known_bad(self) -> Outer:
        if self.inner.counts == (13,):
            raise ValueError("13 will not do")
        return self


def problems(table: dict[str, object]) -> list[str]:
    with pytest.raises(InputError) as caught:
        check(Outer, table, "terms.xenon", "run.toml")
    assert str(caught.value).startswith("run.toml: ")
    return [str(problem) for problem in caught.value.problems]


def test_all_problems_come_at_once() -> None:
    found = problems({"inner": {"exposure": -1.0, "count": (1,)}, "mode": "upper-limits"})
    assert len(found) == 3
    assert any(text == "terms.xenon.inner.exposure: must be greater than 0 (given: -1.0)" for text in found)
    assert any("inner.count: unknown key; did you mean 'counts'?" in text for text in found)
    assert any("did you mean 'upper-limit'?" in text for text in found)


@pytest.mark.parametrize(
    ("table", "fragment"),
    [
        ({"inner": {"exposure": "4"}}, "must be a valid number"),
        ({"inner": {"exposure": True}}, "must be a valid number"),
        ({"inner": {"exposure": float("nan")}}, "must be a finite number"),
        ({"inner": {"exposure": float("inf")}}, "finite"),
        ({"inner": {"exposure": 1.0, "counts": (1.5,)}}, "inner.counts.0"),
        ({}, "terms.xenon.inner: this key is required"),
        ({"inner": {"exposure": 1.0, "counts": (13,)}}, "13 will not do"),
    ],
)
def test_one_rule_one_message(table: dict[str, object], fragment: str) -> None:
    (found,) = problems(table)
    assert fragment in found


def test_integers_serve_as_numbers() -> None:
    assert check(Outer, {"inner": {"exposure": 4}}).inner.exposure == 4.0


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="cannot be read: No such file"):
        read_toml(tmp_path / "none.toml")
    broken = tmp_path / "broken.toml"
    broken.write_text("a = 1\na = 2\n")
    with pytest.raises(InputError, match="not valid TOML"):
        read_toml(broken)
    broken.write_bytes(b"\xff\xfe")
    with pytest.raises(InputError, match="not valid TOML"):
        read_toml(broken)


def test_arrays_arrive_as_tuples(tmp_path: Path) -> None:
    file = tmp_path / "a.toml"
    file.write_text("a = [[1, 2], [3]]\n[b]\nc = [{d = [4]}]\n")
    assert read_toml(file) == {"a": ((1, 2), (3,)), "b": {"c": ({"d": (4,)},)}}


def test_nearest_name_is_silent_when_nothing_is_near() -> None:
    assert nearest_name("masss", ["mass", "portal"]) == "mass"
    assert nearest_name("zzz", ["mass", "portal"]) is None
    assert str(Problem("a.b", "unknown key", None, ("c",))) == "a.b: unknown key; allowed: c"
