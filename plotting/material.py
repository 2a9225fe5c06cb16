"""Everything that the figures draw on, read once, and what a drawn figure is."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import pandas as pd
from matplotlib.figure import Figure

from scanfit.priors import PRIORS, Prior
from scanfit.results import FIGURES, Axis, Run
from scanfit.statistics.binned import TERM_PREFIX, Archive

INVENTED: Final = "Invented demo data, not a measurement"


@dataclass(frozen=True)
class Material:
    """A finished run in memory.

    Parameters
    ----------
    run : Run
        The run folder.
    posteriors : mapping of str to DataFrame
        Weighted posterior points by explorer; the first is the one that figures show.
    points : DataFrame
        The archive, as far as figures need it.
    archive : Archive
        Its ranking.
    """

    run: Run
    posteriors: Mapping[str, pd.DataFrame]
    points: pd.DataFrame
    archive: Archive

    @classmethod
    def read(cls, folder: Path) -> Material:
        """Read a run folder.

        Raises
        ------
        RunFolderError
            If it holds no finished run.
        """
        run = Run(folder)
        columns = [*run.axes, "log_likelihood", "status", *(TERM_PREFIX + term for term in run.term_names)]
        points = run.points(columns)
        posteriors = {name: run.posterior(name) for name in run.explorers}
        return cls(run, posteriors, points, Archive(points, nuisance_priors(run)))

    @property
    def posterior(self) -> pd.DataFrame:
        """Posterior points of the first explorer."""
        return self.posteriors[self.run.explorers[0]]

    @property
    def axes(self) -> Mapping[str, Axis]:
        """Every free parameter and derived quantity by column name."""
        return self.run.axes

    @property
    def footnote(self) -> str:
        """Small print for every figure."""
        return INVENTED if invented(self.run) else ""

    def best_fit(self, name: str) -> float:
        """Value of a parameter or derived quantity at the best fit; NaN where it does not exist."""
        best = self.run.summary["best_fit"]
        value = {**best["derived"], **best["values"]}.get(name)
        return float("nan") if value is None else float(value)


def free_priors(run: Run) -> dict[str, Prior]:
    """Priors of the free parameters by name."""
    free = [item for item in run.summary["parameters"] if item["free"]]
    return {item["name"]: PRIORS[item["prior"]["prior"]].model_validate(item["prior"]) for item in free}


def nuisance_priors(run: Run) -> dict[str, Prior]:
    """Priors of the free nuisances, which stand for measurements made elsewhere."""
    return {name: prior for name, prior in free_priors(run).items() if name not in run.model_names}


def invented(run: Run) -> bool:
    """Whether any caveat of the run or of a term says that its data are invented."""
    caveats = list(run.summary["caveats"])
    for term in run.summary["terms"].values():
        caveats += term.get("caveats", [])
    return any("invented" in caveat.lower() for caveat in caveats)


@dataclass(frozen=True)
class Picture:
    """A figure on disk.

    Parameters
    ----------
    name : str
        File name without suffix.
    alt : str
        What the picture shows, in words, with its main numbers.
    caption : str
        What a reader needs to read it.
    png, pdf : Path
        The files.
    width : float
        Inches.
    """

    name: str
    alt: str
    caption: str
    png: Path
    pdf: Path
    width: float

    @property
    def paths(self) -> list[Path]:
        """Both files."""
        return [self.png, self.pdf]


def save(figure: Figure, folder: Path, name: str, alt: str, caption: str) -> Picture:
    """Write a figure as PNG (200 dots per inch) and PDF into the run's ``figures`` folder.

    The files carry neither date nor version, so that equal results are equal bytes. Call within `figure_style`.
    """
    target = folder / FIGURES
    target.mkdir(exist_ok=True)
    png, pdf = target / f"{name}.png", target / f"{name}.pdf"
    figure.savefig(png, metadata={"Software": None})
    figure.set_layout_engine("none")  # the layout is made; making it again for the second file doubles the time
    figure.savefig(pdf, metadata={"CreationDate": None, "Creator": None, "Producer": None})
    return Picture(name, alt, caption, png, pdf, float(figure.get_figwidth()))
