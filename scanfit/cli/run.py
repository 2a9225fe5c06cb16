"""``scanfit run``."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from scanfit.cli.printing import console, number, print_json, table
from scanfit.cli.progress import reporter_for
from scanfit.results import REPORT


@click.command()
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), help="Run folder; by default results/<name of FILE>.")
@click.option("--workers", type=click.IntRange(min=1), help="Worker processes; the result does not depend on it.")
@click.option("--fresh", is_flag=True, help="Discard an earlier run in the folder.")
@click.option("--json", "as_json", is_flag=True, help="Print the summary as JSON.")
def run(file: Path, out: Path | None, workers: int | None, fresh: bool, as_json: bool) -> None:
    """Start the scan that FILE describes, or carry on with it."""
    from scanfit.driver.scan import run as run_scan
    from scanfit.runfile import load

    folder = out or Path("results") / file.stem
    messages = console(stderr=as_json)
    reporter = reporter_for(messages)
    run_file = load(file)
    for caveat in run_file.caveats:
        reporter.note(f"Note: {caveat}")
    outcome = run_scan(run_file, folder, workers=workers, fresh=fresh, reporter=reporter)
    if as_json:
        print_json(outcome.summary)
        return
    if outcome.was_finished:
        reporter.note(f"{folder} already holds this run, finished. Nothing was done; --fresh would start again.")
    _print_summary(outcome.summary, folder)


def _print_summary(summary: dict[str, Any], folder: Path) -> None:
    screen = console()
    rows = []
    for name, found in summary["intervals"].items():
        best = {**summary["best_fit"]["values"], **summary["best_fit"]["derived"]}.get(name)
        rows.append([name, best, found["median"], _spans(found["credible_95"]), _spans(found["profile_95"])])
    screen.print(table("95 % intervals", ["", "best fit", "median", "credible", "profile"], rows))
    if summary["log_evidence"] is not None:
        evidence = f"{summary['log_evidence']:.3f} ± {summary['log_evidence_error']:.3f}"
        screen.print(f"ln evidence {evidence}", highlight=False)
    if not summary["converged"]:
        screen.print("NOT CONVERGED by its own criteria: do not quote these numbers.", style="bold")
    screen.print(f"{summary['calls']:,} points, {summary['failed_points']:,} of them failed.", highlight=False)
    if summary["reject_flags"]:
        cut = ", ".join(summary["reject_flags"])
        screen.print(f"{summary['rejected_points']:,} of them cut for a validity flag: {cut}.", highlight=False)
    screen.print(f"Read {folder / REPORT}", highlight=False, soft_wrap=True)


def _spans(spans: list[list[float]]) -> str:
    return ", ".join(f"{number(float(low))} … {number(float(high))}" for low, high in spans) or "-"
