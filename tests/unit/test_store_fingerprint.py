"""What counts as another run, what does not, and that every change is named."""

from __future__ import annotations

import importlib.util
import json
import sys
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from scanfit import priors, space
from scanfit.errors import RunFolderError
from scanfit.store.fingerprint import Fingerprint, compare, flatten, take_fingerprint
from scanfit.store.manifest import MANIFEST, Manifest
from scanfit.store.sources import NO_SOURCE, source_hashes

RUN = {
    "run": {"title": "A run", "seed": 1},
    "parameters": {"mass": {"prior": "uniform", "from": 10.0, "to": 3000.0}},
    "figures": {"planes": (("mass", "portal"),)},
}
HARMLESS = ("run.title", "figures")


def take(run: Mapping[str, Any] = RUN, **others: Any) -> Fingerprint:
    return take_fingerprint(run, HARMLESS, others.get("data_files", ()), others.get("classes", {}))


def changed(**sections: Any) -> dict[str, Any]:
    return {**RUN, **sections}


def test_the_same_run_in_other_words_is_the_same() -> None:
    same = {
        "parameters": {"mass": {"to": 3000, "from": 10, "prior": "uniform"}},
        "run": {"seed": 1, "title": "Another title"},
        "figures": {},
    }
    assert compare(take(), take(same)) == []
    assert take().digest == take(same).digest


@pytest.mark.parametrize(
    ("run", "sentence"),
    [
        (changed(run={"title": "", "seed": 2}), "run.seed changed from 1 to 2"),
        (changed(run={"title": ""}), "run.seed is gone (was 1)"),
        (changed(terms={"relic": {}}), "terms.relic is new ({})"),
        (
            changed(parameters={"mass": {"prior": "uniform", "from": 10.000000000000002, "to": 3000.0}}),
            "parameters.mass.from changed from 10 to 10.000000000000002",
        ),
        (changed(parameters={"mass": 62.0}), "parameters.mass is new (62)"),
        (changed(parameters={"mass": {"prior": "uniform", "from": float("-inf"), "to": 3000.0}}), "to '-inf'"),
    ],
)
def test_every_change_of_meaning_is_named(run: dict[str, Any], sentence: str) -> None:
    sentences = compare(take(), take(run))
    assert any(sentence in found for found in sentences)
    assert take().digest != take(run).digest


def test_true_is_not_one() -> None:
    assert flatten({"a": True}) == {"a": True}
    assert json.dumps(flatten({"a": True})) != json.dumps(flatten({"a": 1}))


def test_data_files_count_by_content_and_not_by_place(tmp_path: Path) -> None:
    for name in ("here", "there"):
        (tmp_path / name).mkdir()
        (tmp_path / name / "data.toml").write_text("events = 3")
    here, there = (take(data_files=[tmp_path / name / "data.toml"]) for name in ("here", "there"))
    assert compare(here, there) == []
    (tmp_path / "there" / "data.toml").write_text("events = 4")
    assert compare(here, take(data_files=[tmp_path / "there" / "data.toml"])) == ["data file data.toml changed"]
    both = take(data_files=[tmp_path / "here" / "data.toml", tmp_path / "there" / "data.toml"])
    assert set(both.data) == {"here/data.toml", "there/data.toml"}


def test_a_missing_data_file_is_an_error_of_the_run(tmp_path: Path) -> None:
    with pytest.raises(RunFolderError, match=r"none\.toml cannot be read"):
        take(data_files=[tmp_path / "none.toml"])


def test_package_versions_are_named() -> None:
    old = take()
    assert {"python", "numpy", "scipy", "scanfit"} <= old.packages.keys()
    new = replace(old, packages={**old.packages, "numpy": "1.0"})
    assert compare(old, new) == [f"version of numpy changed from {old.packages['numpy']!r} to '1.0'"]


def test_sources_are_followed_through_the_package() -> None:
    found = source_hashes([space.Space])
    assert {"scanfit.space", "scanfit.priors", "scanfit.errors", "scanfit.validation"} <= found.keys()
    assert not any(name.startswith("numpy") for name in found)
    assert "scanfit.space" not in source_hashes([priors.Uniform]), "imports are followed down, not up"


def load_user_module(path: Path) -> type:
    name = f"user_{path.stem}_{abs(hash(str(path)))}"
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    found: type = module.Mine
    return found


def test_a_users_file_and_its_neighbours_count_by_content(tmp_path: Path) -> None:
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        (tmp_path / name / "cross_section.py").write_text("value = 1\n")
        (tmp_path / name / "unrelated.py").write_text("import json\n")
        (tmp_path / name / "mine.py").write_text(
            "import math, json\n\nclass Mine:\n    def f(self):\n        import cross_section\n"
        )
    one, two = (take(classes={"model": load_user_module(tmp_path / name / "mine.py")}) for name in ("one", "two"))
    assert set(one.sources) == {"mine.py", "cross_section.py"}
    assert one == two
    (tmp_path / "two" / "cross_section.py").write_text("value = 2\n")
    again = take(classes={"model": load_user_module(tmp_path / "two" / "mine.py")})
    assert compare(two, again) == ["source code of cross_section.py changed"]


def test_another_class_in_the_same_role_is_named() -> None:
    sentences = compare(take(classes={"model": priors.Uniform}), take(classes={"model": priors.Normal}))
    assert sentences == ["class of model changed from 'scanfit.priors.Uniform' to 'scanfit.priors.Normal'"]


def test_a_class_without_source_is_recorded_as_such() -> None:
    typed = type("Typed", (), {"__module__": "nowhere"})
    assert source_hashes([typed]) == {"nowhere": NO_SOURCE}


def test_a_manifest_comes_back_as_it_was_and_counts_sessions(tmp_path: Path) -> None:
    path = tmp_path / MANIFEST
    manifest = Manifest.of_run(RUN, HARMLESS, (), {"model": priors.Uniform})
    manifest.write(path)
    back = Manifest.read(path)
    assert back.changes(manifest) == []
    assert back == manifest
    Manifest.of_run(RUN, HARMLESS, (), {"model": priors.Uniform}).write(path)
    assert len(Manifest.read(path).sessions) == 2
    assert Manifest.read(path).sessions[0] == manifest.sessions[0]


def test_an_altered_or_damaged_manifest_is_refused(tmp_path: Path) -> None:
    path = tmp_path / MANIFEST
    Manifest.of_run(RUN, HARMLESS, (), {}).write(path)
    text = path.read_text()
    path.write_text(text.replace('"run.seed": 1', '"run.seed": 2'))
    with pytest.raises(RunFolderError, match=r"manifest\.json was altered"):
        Manifest.read(path)
    path.write_text(text[: len(text) // 2])
    with pytest.raises(RunFolderError, match=r"manifest\.json is damaged"):
        Manifest.read(path)
    path.write_text(text.replace('"format": 1', '"format": 99'))
    with pytest.raises(RunFolderError, match="written by another version"):
        Manifest.read(path)
