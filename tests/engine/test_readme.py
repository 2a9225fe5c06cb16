"""What the README prints must work as printed."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest

from scanfit.cli.main import commands, main
from scanfit.runfile import load

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", README, flags=re.DOTALL)


def test_its_run_file_is_valid(tmp_path: Path) -> None:
    (printed, _) = blocks("toml")
    path = tmp_path / "run.toml"
    path.write_text(printed.replace("demo/", f"{ROOT}/runs/demo/"), encoding="utf-8")
    assert load(path).posterior.space.dimension == 4


def test_its_own_term_works_and_counts_as_it_says(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (source,) = blocks("python")
    assert len(source.splitlines()) <= 40
    (tmp_path / "my_search.py").write_text(source, encoding="utf-8")
    run_file, own_term = blocks("toml")
    path = tmp_path / "run.toml"
    path.write_text(run_file.replace("demo/", f"{ROOT}/runs/demo/") + own_term, encoding="utf-8")
    with pytest.raises(SystemExit) as caught:
        main(["point", str(path), "mass=100", "portal=1e-4", "--json"])
    assert caught.value.code == 0
    found = json.loads(capsys.readouterr().out)
    (events,) = found["explain"]["mine"]
    picobarn = found["derived"]["sigma_si_proton"] / 1e-36
    assert events["predicted"] == pytest.approx(found["derived"]["dm_fraction"] * 2.0e9 * picobarn + 1.3)


def test_every_command_is_told_and_every_told_command_exists() -> None:
    told = set(re.findall(r"^\| `scanfit (\w+)", README, flags=re.MULTILINE))
    assert told == set(commands.commands)


def test_every_picture_and_page_it_points_to_is_there() -> None:
    for target in re.findall(r"\]\(([^)#:]+)\)", README):
        assert (ROOT / target).exists(), target


@pytest.mark.parametrize("name", ["first_light.toml", "scalar_singlet.toml"])
def test_the_demos_say_that_their_data_are_invented(name: str) -> None:
    run_file = load(ROOT / "runs" / name)
    assert "invented" in run_file.run.title
    assert any("invented" in caveat for caveat in run_file.caveats)
