"""``scanfit limit``: what one search excludes alone, without a run file."""

from __future__ import annotations

import csv
import io
import tomllib
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
import numpy as np

from scanfit.cli.printing import console, print_json, table
from scanfit.errors import InputError, Problem
from scanfit.validation import freeze

if TYPE_CHECKING:
    from rich.table import Table

    from scanfit.contracts import InnerNuisances, LimitCurve, Term

BANDS = ("expected_2.5", "expected_16", "expected_50", "expected_84", "expected_97.5")
"""Columns of the expected limits: quantiles in per cent."""
PLANE_LEVEL = 0.95
"""Confidence level at which planes are drawn by default."""


@click.command()
@click.argument("term")
@click.argument("data", type=click.Path(path_type=Path))
@click.option("--curve", help="Which limit; the term's first when not given.")
@click.option("--plane", help="Instead of a curve: what is excluded in a plane of two quantities.")
@click.option(
    "--with", "held", multiple=True, metavar="KEY=VALUE", help="A coupling held fixed in the plane, or a range of it."
)
@click.option("--level", type=click.FloatRange(0.5, 0.9999), help="Confidence level; what the field quotes by default.")
@click.option("--points", default=40, show_default=True, type=click.IntRange(min=2), help="Points along each axis.")
@click.option("--pseudo-experiments", default=200, show_default=True, type=click.IntRange(min=0), help="0: no bands.")
@click.option("--seed", default=1, show_default=True, type=click.IntRange(min=0), help="Of the pseudo-experiments.")
@click.option(
    "--set", "settings", multiple=True, metavar="KEY=VALUE", help="Another key of the term, as in a run file."
)
@click.option(
    "--inner-nuisances",
    default="marginal",
    show_default=True,
    type=click.Choice(["marginal", "profile"]),
    help="What is done with uncertain backgrounds.",
)
@click.option("--out", type=click.Path(path_type=Path), help="Folder; results/limits/<name of DATA> by default.")
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
def limit(
    term: str,
    data: Path,
    curve: str | None,
    plane: str | None,
    held: tuple[str, ...],
    level: float | None,
    points: int,
    pseudo_experiments: int,
    seed: int,
    settings: tuple[str, ...],
    inner_nuisances: InnerNuisances,
    out: Path | None,
    as_json: bool,
) -> None:
    """Draw what one search excludes alone: TERM is its kind, DATA its file.

    Writes a table (CSV and JSON) and a figure (PNG and PDF): the observed upper limit, and the median and the 68 and
    95 % bands of limits expected without a signal.

    With --plane, what is excluded where two quantities vary and the couplings are held.

    Example: scanfit limit direct-detection runs/demo/corrie_xenon.toml --curve si

    Of a plane: scanfit limit mono-x runs/demo/brackwater_mono_jet.toml --plane axial --with g_quark=0.25
    """
    if plane is not None and curve is not None:
        raise InputError([Problem("--plane", "cannot be combined with --curve", plane)], "limit")
    if held and plane is None:
        raise InputError([Problem("--with", "belongs to a --plane", held[0])], "limit")
    built = _build(term, data, settings, inner_nuisances)
    folder = out if out is not None else Path("results") / "limits" / data.stem
    if plane is not None:
        _plane(built, plane, held, points, PLANE_LEVEL if level is None else level, folder, as_json)
        return
    if not built.curves:
        raise InputError([Problem("TERM", f"{term} draws no limit alone", term)], "limit")
    name = curve if curve is not None else next(iter(built.curves))
    found = built.limit_curve(
        name, level=level, points=points, pseudo_experiments=pseudo_experiments, rng=np.random.default_rng(seed)
    )
    written = _write(found, folder, name)
    if as_json:
        print_json({**_record(found), "files": [str(path) for path in written]})
        return
    shown = table(f"{found.title}: upper limits at {100 * found.level:g} %", _header(found), _rows(found))
    _show(shown, found.caveats, written)


def _plane(
    built: Term[Any], name: str, held: Sequence[str], points: int, level: float, folder: Path, as_json: bool
) -> None:
    from scanfit.cli.exclusion import plane_record, plane_table, write_plane

    found = built.exclusion_plane(name, _parsed(held, "--with"), points=points)
    written = write_plane(found, folder, name, level)
    if as_json:
        print_json({**plane_record(found, level), "files": [str(path) for path in written]})
    else:
        _show(plane_table(found, level), found.caveats, written)


def _show(shown: Table, caveats: Sequence[str], files: Sequence[Path]) -> None:
    screen = console()
    screen.print(shown)
    for caveat in caveats:
        screen.print(f"Note: {caveat}", highlight=False, soft_wrap=True)
    for path in files:
        screen.print(str(path), highlight=False, soft_wrap=True)


def _build(name: str, data: Path, settings: Sequence[str], inner_nuisances: InnerNuisances) -> Term[Any]:
    from scanfit.contracts import BuildContext
    from scanfit.plugins import find
    from scanfit.validation import check

    kind = find("terms", name, Path(), "TERM")
    options = check(kind.Options, {"data": data.name, **_parsed(settings, "--set")}, source=f"limit {name}")
    built: Term[Any] = kind(options, BuildContext(data.parent, inner_nuisances))
    return built


def _parsed(settings: Sequence[str], option: str) -> dict[str, Any]:
    """Values as TOML; what is not TOML is text."""
    found: dict[str, Any] = {}
    for setting in settings:
        key, equals, value = setting.partition("=")
        if not equals or not key.isidentifier():
            raise InputError([Problem(option, "must be written KEY=VALUE", setting)], "limit")
        try:
            found[key] = freeze(tomllib.loads(f"value = {value}")["value"])
        except tomllib.TOMLDecodeError:
            found[key] = value
    return found


def _header(curve: LimitCurve) -> list[str]:
    x, y = curve.x, curve.y
    columns = [f"{x.name} [{x.unit}]" if x.unit else x.name]
    if curve.observed is not None:
        columns.append(f"observed [{y.unit}]" if y.unit else "observed")
    return columns + ([name.replace("_", " ") + " %" for name in BANDS] if curve.bands is not None else [])


def _rows(curve: LimitCurve) -> list[list[float]]:
    columns = [curve.x_values]
    if curve.observed is not None:
        columns.append(curve.observed)
    if curve.bands is not None:
        columns.extend(curve.bands.T)
    return [[float(value) for value in row] for row in zip(*columns, strict=True)]


def _record(curve: LimitCurve) -> dict[str, Any]:
    """JSON-ready content; what is infinite, hence no limit, becomes null when it is written."""
    bands = {} if curve.bands is None else {name: curve.bands[:, i].tolist() for i, name in enumerate(BANDS)}
    return {
        "title": curve.title,
        "level": curve.level,
        "x": asdict(curve.x),
        "y": asdict(curve.y),
        "x_values": curve.x_values.tolist(),
        "observed": None if curve.observed is None else curve.observed.tolist(),
        **bands,
        "caveats": list(curve.caveats),
    }


def _write(curve: LimitCurve, folder: Path, name: str) -> list[Path]:
    from scanfit.plugins import installed
    from scanfit.store.atomic import explaining, write_bytes, write_json

    stem = folder / f"limit_{name}"
    table_file, record_file = (stem.with_name(stem.name + ending) for ending in (".csv", ".json"))
    text = io.StringIO()
    units = f"{curve.x.name} in {curve.x.unit or 1}, limits in {curve.y.unit or 1}"
    what = f"{curve.y.description or curve.y.name}, level {curve.level:g}; {units}"
    for caveat in (curve.title, what, *curve.caveats):
        text.write(f"# {caveat}\n")
    writer = csv.writer(text, lineterminator="\n")
    observed = ["observed"] if curve.observed is not None else []
    writer.writerow([curve.x.name, *observed, *(BANDS if curve.bands is not None else ())])
    writer.writerows([[f"{value:.6g}" for value in row] for row in _rows(curve)])
    with explaining(folder):
        folder.mkdir(parents=True, exist_ok=True)
    write_bytes(table_file, text.getvalue().encode())
    write_json(record_file, _record(curve))
    drawn: list[Path] = installed("drawings")["limit"].load()(curve, stem)
    return [table_file, record_file, *drawn]
