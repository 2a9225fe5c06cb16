"""Broken run files: each gives one clear message with path, value and nearest allowed name, and exit status 2."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from scanfit.errors import InputError
from scanfit.runfile import load

X = 'x = { prior = "uniform", from = -1.0, to = 1.0 }'
Toy = Callable[..., Path]

# what is replaced, by what, and what the message must say
BROKEN = {
    "unknown section": (("[compute]", "[computer]"), ["computer: unknown key", "did you mean 'compute'?"]),
    "unknown key": (("workers = 1", "worker = 1"), ["compute.worker: unknown key", "did you mean 'workers'?"]),
    "wrong type": (("seed = 7", 'seed = "seven"'), ["run.seed: must be a valid integer", "'seven'"]),
    "fraction of a seed": (("seed = 7", "seed = 7.5"), ["run.seed: must be a valid integer", "7.5"]),
    "negative seed": (("seed = 7", "seed = -7"), ["run.seed: must be greater than or equal to 0", "-7"]),
    "missing key": (('title = "Two coordinates"', ""), ["run.title: this key is required"]),
    "missing section": (('[explore]\nuse = "nested"\nlive_points = 100', ""), ["explore: this key is required"]),
    "low above high": ((X, X.replace("-1.0", "3.0")), ["parameters.x: 'from' must be below 'to'", "from = 3"]),
    "log of nothing": (
        (X, X.replace('"uniform"', '"log-uniform"')),
        ["parameters.x.from: must be greater than 0 for a log-uniform prior", "-1.0"],
    ),
    "unknown prior": (
        (X, X.replace('"uniform"', '"log-unifrom"')),
        ["parameters.x.prior: no prior has this name", "did you mean 'log-uniform'?"],
    ),
    "key of a prior": ((X, X.replace("from", "form")), ["parameters.x.from: this key is required", "'from'"]),
    "no prior": ((X, ""), ["parameters.x: this parameter needs a prior", "log-uniform"]),
    "nuisance without prior": ((X, X + "\nshift = {}"), ["parameters.shift.prior: this key is required", "normal"]),
    "prior of a wrong type": ((X, 'x = "wide"'), ["parameters.x: must be a number, or a table with a prior", "'wide'"]),
    "not a number": ((X, "x = nan"), ["parameters.x: must be a finite number", "nan"]),
    "duplicated parameter": ((X, X + "\n" + X), ["not valid TOML", "Cannot overwrite a value"]),
    "unknown parameter": ((X, X + "\nshfit = 1.0"), ["parameters.shfit", "did you mean 'shift'?"]),
    "everything fixed": (
        ("[parameters]", "[parameters]\nshift = 0.0"),
        None,  # see test_everything_fixed
    ),
    "unknown model": (('"toy.py:Plane"', '"scalar-singlett"'), ["model.use", "did you mean 'scalar-singlet'?"]),
    "unknown term": (('"toy.py:Bump"', '"gama-dwarfs"'), ["terms.bump.use", "did you mean 'gamma-dwarfs'?"]),
    "unknown explorer": (('"nested"', '"nest"'), ["explore.use", "'nest'", "allowed: ensemble, nested"]),
    "explorer named twice": (
        ('use = "nested"', 'use = ["nested", "nested"]'),
        ["explore.use: names an explorer twice"],
    ),
    "option of an explorer": (("live_points = 100", "life_points = 100"), ["explore.life_points", "'live_points'"]),
    "stray option": (('use = "nested"', 'use = ["nested", "ensemble"]'), ["explore.live_points", "table"]),
    "option of a term": (("sigma = 0.2", "sgima = 0.2"), ["terms.bump.sgima: unknown key", "did you mean 'sigma'?"]),
    "term without a name": (('use = "toy.py:Bump"', ""), ["terms.bump.use: this key is required"]),
    "name of a term": (("[terms.bump]", '[terms."a bump"]'), ["terms.a bump", "letters, digits and underscores"]),
    "no class": (('"toy.py:Bump"', '"toy.py:Bupm"'), ["terms.bump.use", "no class of this name", "'Bump'"]),
    "not a term": (('"toy.py:Bump"', '"toy.py:Plane"'), ["terms.bump.use", "Term"]),
    "no file": (('"toy.py:Bump"', '"toys.py:Bump"'), ["terms.bump.use: there is no file", "toys.py"]),
    "unknown axis": (('["x", "radius"]', '["x", "radios"]'), ["figures.planes.1", "did you mean 'radius'?"]),
    "plane of one axis": (('["x", "radius"]', '["x"]'), ["figures.planes.1"]),
    "no workers": (("workers = 1", "workers = 0"), ["compute.workers: must be greater than 0", "0"]),
}


@pytest.mark.parametrize("name", [name for name, (_, says) in BROKEN.items() if says is not None])
def test_broken_run_files(toy: Toy, name: str) -> None:
    replacement, says = BROKEN[name]
    assert says is not None
    with pytest.raises(InputError) as caught:
        load(toy(replacement))
    assert len(caught.value.problems) == 1 or name == "key of a prior"
    for fragment in says:
        assert fragment in str(caught.value)


def test_the_unbroken_file_loads(toy: Toy) -> None:
    run_file = load(toy())
    assert run_file.posterior.space.free_names == ("x", "y", "shift")
    assert run_file.caveats == ("bump: invented",)


def test_everything_fixed(toy: Toy) -> None:
    with pytest.raises(InputError, match="nothing to scan"):
        load(toy((X, "x = 0.0\nshift = 0.0"), (X.replace("x", "y", 1), "y = 0.1")))


def test_all_problems_are_told_at_once(toy: Toy) -> None:
    with pytest.raises(InputError) as caught:
        load(toy((X, X.replace("-1.0", "3.0")), ("sigma = 0.2", "sgima = 0.2"), ("live_points", "life_points")))
    assert {problem.where for problem in caught.value.problems} >= {"terms.bump.sgima", "explore.life_points"}


def test_two_terms_share_a_nuisance_by_name(toy: Toy) -> None:
    path = toy(("[explore]", '[terms.second]\nuse = "toy.py:Bump"\n\n[explore]'))
    assert load(path).posterior.space.free_names.count("shift") == 1


def test_a_broken_plugin_file_is_told_without_its_traceback(toy: Toy) -> None:
    path = toy()
    (path.parent / "toy.py").write_text("import nothing_of_this_name\n")
    with pytest.raises(InputError, match=r"toy\.py cannot be imported: ModuleNotFoundError"):
        load(path)


def test_the_command_line_exits_with_2_and_no_traceback(toy: Toy) -> None:
    path = toy(("workers = 1", "worker = 1"))
    done = subprocess.run(
        [sys.executable, "-m", "scanfit.cli", "run", str(path)], capture_output=True, text=True, check=False
    )
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.startswith(f"scanfit: {path}: compute.worker: unknown key")
    assert "Traceback" not in done.stderr
