"""``scanfit status``, ``report`` and ``list``: look at runs and at what is installed."""

from __future__ import annotations

import json
import time
from pathlib import Path
from typing import Any

import click

from scanfit.cli.printing import console, print_json, table
from scanfit.errors import RunFolderError


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
def status(folder: Path, as_json: bool) -> None:
    """Show how far the run in FOLDER is; works from another terminal while it runs."""
    from scanfit.driver.scan import STATUS
    from scanfit.store.lock import RunLock

    try:
        found: dict[str, Any] = json.loads((folder / STATUS).read_text(encoding="utf-8"))
    except OSError:
        raise RunFolderError(f"{folder} holds no scanfit run that has begun: {STATUS} is missing") from None
    if found["phase"] == "running" and RunLock.holder(folder) is None:
        found["phase"] = "dead"
    found["seconds_since_written"] = time.time() - found.pop("written")
    if as_json:
        print_json(found)
        return
    words = {
        "running": "running",
        "dead": "no process holds the folder: it was killed; the same run command carries on",
        "stopped": "stopped; the same run command carries on",
        "finished": "finished",
    }
    rows = [["state", words[found["phase"]]]]
    rows += [[name.replace("_", " "), value] for name, value in found.items() if name not in ("phase", "numbers")]
    rows += [[name, value] for name, value in found["numbers"].items()]
    console().print(table(str(folder), ["", ""], rows))


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
def report(folder: Path) -> None:
    """Draw the figures and the report of the finished run in FOLDER again."""
    from scanfit.driver.scan import draw

    for path in draw(folder):
        click.echo(path)


@click.command(name="list")
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
def list_plugins(as_json: bool) -> None:
    """List the installed models, terms and explorers, with their options."""
    from scanfit.plugins import find, installed
    from scanfit.validation import key_names

    found: dict[str, dict[str, dict[str, Any]]] = {}
    for kind in ("models", "terms", "explorers"):
        found[kind] = {}
        for name in installed(kind):
            plugin = find(kind, name, Path(), kind)
            found[kind][name] = {"summary": plugin.summary, "options": list(key_names(plugin.Options))}
    if as_json:
        print_json(found)
        return
    screen = console()
    for kind, plugins in found.items():
        rows = [[name, about["summary"], ", ".join(about["options"])] for name, about in plugins.items()]
        screen.print(table(kind.capitalize(), ["", "", "options"], rows))
        screen.print()
