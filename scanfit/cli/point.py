"""``scanfit point`` and ``scanfit check``: one point, and a run before it starts."""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
import numpy as np

from scanfit.cli.printing import console, print_json, table
from scanfit.errors import InputError, Problem

if TYPE_CHECKING:
    from scanfit.runfile import RunFile
    from scanfit.space import Space


@click.command()
@click.argument("file", type=click.Path(path_type=Path))
@click.argument("values", nargs=-1, metavar="[NAME=VALUE]...")
@click.option("--show", multiple=True, metavar="DETAIL", help="Show more of the model's, for example: thermal.")
@click.option("--out", type=click.Path(path_type=Path), help="Folder for table and figure of what --show shows.")
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
def point(file: Path, values: tuple[str, ...], show: tuple[str, ...], out: Path | None, as_json: bool) -> None:
    """Show one point of the model in FILE: predicted beside observed, term by term.

    Every free model parameter needs a value. A nuisance that is not given takes the median of its prior; a fixed
    parameter can be given another value.
    """
    from scanfit.cli.detail import detail_as_json, find_details, print_detail, write_detail
    from scanfit.driver.summary import describe_point
    from scanfit.runfile import load

    if out is not None and not show:
        raise InputError([Problem("--out", "only goes with --show")], "point")
    run_file = load(file)
    posterior = run_file.posterior
    complete = _complete(_parsed(values), posterior.space)
    found = describe_point(posterior, complete)
    # Where the model fails there is nothing to show; the failure is told below.
    details = find_details(posterior.model.predict(complete), show) if show and "failure" not in found else {}
    written = [file for name, item in details.items() if out for file in write_detail(name, item, out)]
    if as_json:
        shown = {"details": {name: detail_as_json(item) for name, item in details.items()}} if show else {}
        print_json({**found, **shown})
    else:
        _print_point(found, run_file)
        for item in details.values():
            print_detail(console(), item)
        for path in written:
            console().print(f"Wrote {path}", highlight=False, soft_wrap=True)
    if "failure" in found:
        raise click.exceptions.Exit(1)


def _parsed(assignments: Sequence[str]) -> dict[str, float]:
    found: dict[str, float] = {}
    problems = []
    for text in assignments:
        name, equals, value = text.partition("=")
        try:
            if not equals or name in found:
                raise ValueError
            found[name] = float(value)
        except ValueError:
            rule = "is given twice" if name in found else "must be written NAME=NUMBER"
            problems.append(Problem(name, rule, text))
    if problems:
        raise InputError(problems, "point")
    return found


def _complete(given: Mapping[str, float], space: Space) -> dict[str, float]:
    names = [parameter.name for parameter in space.parameters]
    problems = [
        Problem(name, "the model and its terms have no such parameter", None, names)
        for name in given
        if name not in names
    ]
    values = {}
    for parameter in space.parameters:
        name = parameter.name
        if name in given:
            values[name] = given[name]
        elif name in space.fixed_values or parameter.kind == "nuisance":
            values[name] = space.prior(name).median
        else:
            problems.append(Problem(name, "this free parameter needs a value"))
    if problems:
        raise InputError(problems, "point")
    return values


def _print_point(found: Mapping[str, Any], run_file: RunFile) -> None:
    screen = console()
    units = {parameter.name: parameter.unit for parameter in run_file.posterior.space.parameters}
    units |= {quantity.name: quantity.unit for quantity in run_file.posterior.quantities}
    rows = [[name, value, units[name]] for name, value in {**found["values"], **found["derived"]}.items()]
    screen.print(table("Point", ["", "value", "unit"], rows))
    if "failure" in found:
        screen.print(f"This point cannot be evaluated. {found['failure']}", style="bold", highlight=False)
        return
    for name, term in run_file.posterior.terms.items():
        fields = ("name", "predicted", "observed", "uncertainty", "limit", "unit", "note")
        rows = [[item[field] for field in fields] for item in found["explain"][name]]
        title = f"{name} ({term.name}): ln L = {found['terms'][name]:.3f}"
        screen.print()
        screen.print(table(title, ["", "predicted", "observed", "±", "limit", "unit", "note"], rows))
    screen.print()
    screen.print(f"ln L = {found['log_likelihood']:.4f}, ln prior = {found['log_prior']:.4f}", highlight=False)
    if found["log_prior"] == -np.inf:
        screen.print("This point lies outside the prior; a scan would not visit it.", style="bold")
    meanings = run_file.posterior.model.flag_names
    for flag in (name for name, raised in found["flags"].items() if raised):
        screen.print(f"Flag {flag}: {meanings[flag]}", highlight=False, soft_wrap=True)
    if found["rejected_for"]:
        cut = ", ".join(found["rejected_for"])
        screen.print(f"The run file rejects this point for {cut}: its likelihood is zero.", style="bold")
    for caveat in run_file.caveats:
        screen.print(f"Note: {caveat}", highlight=False, soft_wrap=True)


@click.command()
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--points", default=64, show_default=True, type=click.IntRange(min=1), help="How many to evaluate.")
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
def check(file: Path, points: int, as_json: bool) -> None:
    """Validate FILE, evaluate a few points of its prior and time them."""
    from scanfit.driver.scan import check_predictions
    from scanfit.runfile import load

    run_file = load(file)
    posterior = run_file.posterior
    check_predictions(posterior)
    rng = np.random.default_rng(run_file.run.seed)
    sample = posterior.space.from_unit(rng.random((points, posterior.space.dimension)))
    started = time.perf_counter()
    batch = posterior.evaluate_many(sample)
    seconds = (time.perf_counter() - started) / points
    failures = [f"{failure.culprit}: {failure.message}" for failure in batch.failures]
    found = {
        "file": str(file),
        "model": posterior.model.name,
        "free_parameters": list(posterior.space.free_names),
        "terms": {name: term.name for name, term in posterior.terms.items()},
        "explorers": [planned.name for planned in run_file.explorers],
        "milliseconds_per_point": 1e3 * seconds,
        "points_evaluated": points,
        "failures": failures,
        "caveats": list(run_file.caveats),
    }
    if as_json:
        print_json(found)
        return
    screen = console()
    dimension = posterior.space.dimension
    screen.print(f"{file} is valid: {posterior.model.name}, {dimension} free parameters.", highlight=False)
    priors = [
        [parameter.name, parameter.kind, parameter.unit, str(parameter.prior), parameter.description]
        for parameter in posterior.space.parameters
    ]
    screen.print(table("Parameters", ["", "kind", "unit", "prior", ""], priors))
    screen.print(table("Terms", ["", "kind", ""], [[n, t.name, t.summary] for n, t in posterior.terms.items()]))
    screen.print(
        f"A point costs {1e3 * seconds:.2f} ms on one core; 100,000 points take about "
        f"{seconds * 1e5 / 60:.1f} min of one core.",
        highlight=False,
    )
    for text in dict.fromkeys(failures):
        screen.print(f"Failed: {text}", highlight=False, soft_wrap=True)
    for caveat in run_file.caveats:
        screen.print(f"Note: {caveat}", highlight=False, soft_wrap=True)
