"""Build the page to read: one self-contained HTML file with all figures in it, without scripts or outside links."""

from __future__ import annotations

import base64
from collections.abc import Mapping
from importlib import resources
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from scanfit.results import REPORT
from scanfit.statistics.decides import DECISIVE, term_records
from scanfit.statistics.goodness import pull, share_of_limit
from scanfit.statistics.profile import CAVEAT

from ..material import Material, Picture
from ..style import FULL_WIDTH
from . import numbers
from .pictures import draw_all
from .symbols import rich_text


def build_report(folder: Path) -> list[Path]:
    """Draw every figure of a finished run and write its page.

    Parameters
    ----------
    folder : Path
        Run folder.

    Returns
    -------
    list of Path
        Everything written: the page first, then the figures.

    Raises
    ------
    RunFolderError
        If the folder holds no finished run.
    """
    material = Material.read(Path(folder))
    pictures = draw_all(material)
    page = material.run.folder / REPORT
    page.write_text(render(material, pictures), encoding="utf-8")
    return [page, *(path for group in pictures.values() for picture in group for path in picture.paths)]


def render(material: Material, pictures: Mapping[str, list[Picture]]) -> str:
    """Return the page as text."""
    source = resources.files(__package__)
    environment = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    environment.filters |= {
        "number": numbers.number,
        "fixed": numbers.fixed,
        "intervals": numbers.intervals,
        "percent": numbers.percent,
        "whole": numbers.whole,
        "duration": numbers.duration,
        "rich": rich_text,
        "embedded": _embedded,
    }
    environment.globals |= {"with_error": numbers.with_error}
    template = environment.from_string(source.joinpath("template.html").read_text(encoding="utf-8"))
    records, undecided = term_records(material.points, material.posterior, material.archive)
    summary = material.run.summary
    return template.render(
        summary=summary,
        style=Markup(source.joinpath("style.css").read_text(encoding="utf-8")),  # our own file, no user text
        pictures=pictures,
        caveats=caveats(summary),
        records=records,
        undecided=undecided,
        decisive=DECISIVE,
        profile_caveat=CAVEAT,
        full_width=FULL_WIDTH,
        symbols=_symbols(summary),
        observables=_observables(summary),
        posterior_from=material.run.explorers[0],
    )


def caveats(summary: Mapping[str, Any]) -> list[tuple[str, str]]:
    """All caveats, each once: (where it comes from, text); the run's own come first, from "run"."""
    of_terms = [(name, text) for name, term in summary["terms"].items() for text in term.get("caveats", [])]
    # The summary's list repeats those of the terms with the term's name before them.
    repeated = {f"{name}: {text}" for name, text in of_terms}
    found = dict.fromkeys((text for text in summary["caveats"] if text not in repeated), "run")
    for name, text in of_terms:
        found.setdefault(text, name)
    return [(origin, text) for text, origin in found.items()]


def _symbols(summary: Mapping[str, Any]) -> dict[str, Markup]:
    items = [*summary["parameters"], *summary["quantities"]]
    return {item["name"]: rich_text(f"${item['symbol']}$") if item["symbol"] else Markup("") for item in items}


def _observables(summary: Mapping[str, Any]) -> dict[str, list[dict[str, Any]]]:
    """Lines of predicted beside observed for each term, with pull or share of the limit."""
    explained = summary["best_fit"].get("explain", {})
    return {
        name: [
            {
                **line,
                "pull": pull(line["predicted"], line["observed"], line["uncertainty"]),
                "share": share_of_limit(line["predicted"], line["limit"]),
            }
            for line in explained.get(name, [])
        ]
        for name in summary["terms"]
    }


def _embedded(picture: Picture) -> Markup:
    data = base64.b64encode(picture.png.read_bytes()).decode("ascii")
    return Markup("data:image/png;base64,") + Markup(data)
