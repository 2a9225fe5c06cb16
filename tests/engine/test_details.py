"""``scanfit point --show``: details that a prediction may tell, printed, as JSON, and written."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest

from scanfit.cli.main import main
from scanfit.contracts import Detailed
from scanfit.runfile import load

Toy = Callable[..., Path]

TELLING = """

class TellingPlace(Place):
    details = {"ring": "points of the same radius"}

    def detail(self, name):
        import numpy as np
        from scanfit.contracts import Detail
        angle = np.linspace(0.0, 6.0, 50)
        radius = math.hypot(self.x, self.y)
        curves = ((Quantity("angle"), angle), (Quantity("east", "m"), radius * np.cos(angle)))
        return Detail("Ring", ((Quantity("radius", "m"), radius),), curves, ("It is round.",), (3, 7))


class TellingPlane(Plane):
    def predict(self, values):
        place = super().predict(values)
        return TellingPlace(place.x, place.y)
"""


@pytest.fixture
def telling(toy: Toy) -> Path:
    path = toy(("toy.py:Plane", "toy.py:TellingPlane"))
    with (path.parent / "toy.py").open("a") as file:
        file.write(TELLING)
    return path


def point(capsys: pytest.CaptureFixture[str], *arguments: str, code: int = 0) -> str:
    with pytest.raises(SystemExit) as caught:
        main(["point", *arguments])
    assert caught.value.code == code
    captured = capsys.readouterr()
    return captured.out if code == 0 else captured.err


def test_a_detail_is_printed(telling: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = point(capsys, str(telling), "x=0.3", "y=0.4", "--show", "ring")
    lines = text.splitlines()
    heading = next(number for number, line in enumerate(lines) if line.split() == ["angle", "east", "[m]"])
    # Two rows were chosen: 3/49 and 7/49 of the way.
    assert [line.split()[0] for line in lines[heading + 1 : heading + 3]] == ["0.3673", "0.8571"]
    assert lines[heading + 3] == "It is round."


def test_a_detail_as_json_and_as_a_table(telling: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = tmp_path / "out"
    text = point(capsys, str(telling), "x=0.3", "y=0.4", "--show", "ring", "--out", str(out), "--json")
    ring = json.loads(text)["details"]["ring"]
    assert ring["numbers"]["radius"] == {"value": 0.5, "unit": "m", "description": ""}
    assert ring["curves"]["east"]["values"][0] == 0.5
    assert len(ring["curves"]["angle"]["values"]) == 50
    assert ring["notes"] == ["It is round."]
    # No plug-in draws a ring, so there is a table and no figure.
    assert [file.name for file in out.iterdir()] == ["ring.csv"]
    assert pd.read_csv(out / "ring.csv")["east"].tolist() == pytest.approx(ring["curves"]["east"]["values"])


def test_unknown_details(toy: Toy, telling: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = point(capsys, str(telling), "x=0.3", "y=0.4", "--show", "rink", code=2)
    assert "the model has no detail of this name (given: 'rink'); did you mean 'ring'?; allowed: ring" in text
    assert "only goes with --show" in point(capsys, str(telling), "x=0", "y=0", "--out", "anywhere", code=2)


def test_no_prediction_has_to_tell_details(toy: Toy, capsys: pytest.CaptureFixture[str]) -> None:
    path = toy()
    assert not isinstance(load(path).posterior.model.predict({"x": 0.0, "y": 0.0}), Detailed)
    assert "the model has no details to show" in point(capsys, str(path), "x=0", "y=0", "--show", "ring", code=2)
