"""Read a finished or unfinished run folder.

Everything that figures, reports and statistics need about a run comes through `Run`; nothing here knows physics.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pandas as pd
import pyarrow.dataset

from scanfit.errors import RunFolderError
from scanfit.priors import FloatArray

SUMMARY = "summary.json"
POSTERIOR = "posterior.parquet"
PROFILE = "profile.parquet"
HISTORY = "history.npz"
POINTS = "points"
EXPLORERS = "explorers"
FIGURES = "figures"
REPORT = "report.html"


@dataclass(frozen=True)
class Axis:
    """How a parameter or a derived quantity is drawn.

    Parameters
    ----------
    name : str
        Column name.
    label : str
        Symbol with unit.
    scale : {"linear", "log"}
        Scale of the axis.
    low, high : float or None
        Prior range where it is bounded.
    """

    name: str
    label: str
    scale: Literal["linear", "log"]
    low: float | None = None
    high: float | None = None


class Run:
    """A run folder, read lazily.

    Parameters
    ----------
    folder : path
        As left by ``scanfit run``.

    Raises
    ------
    RunFolderError
        If the folder holds no finished run.
    """

    def __init__(self, folder: Path | str) -> None:
        self.folder = Path(folder)
        try:
            text = (self.folder / SUMMARY).read_text(encoding="utf-8")
        except OSError:
            raise RunFolderError(f"{self.folder} holds no finished run: {SUMMARY} is missing") from None
        self.summary: dict[str, Any] = json.loads(text)

    @property
    def title(self) -> str:
        """Title given in the run file."""
        return str(self.summary["title"])

    @property
    def explorers(self) -> tuple[str, ...]:
        """Names of the explorers that ran, in order; the first gives the posterior."""
        return tuple(self.summary["explorers"])

    @property
    def planes(self) -> tuple[tuple[str, str], ...]:
        """Planes that the run file asks for."""
        return tuple((x, y) for x, y in self.summary["planes"])

    @property
    def free_names(self) -> tuple[str, ...]:
        """Names of the free parameters."""
        return tuple(item["name"] for item in self.summary["parameters"] if item["free"])

    @property
    def model_names(self) -> tuple[str, ...]:
        """Names of the free parameters that are not nuisances."""
        return tuple(p["name"] for p in self.summary["parameters"] if p["free"] and p["kind"] == "model")

    @property
    def term_names(self) -> tuple[str, ...]:
        """Names of the terms as the run file gives them."""
        return tuple(self.summary["terms"])

    @cached_property
    def axes(self) -> Mapping[str, Axis]:
        """Every free parameter and derived quantity by column name."""
        items = [item for item in self.summary["parameters"] if item["free"]] + self.summary["quantities"]
        return {
            item["name"]: Axis(item["name"], item["label"], item["scale"], item.get("low"), item.get("high"))
            for item in items
        }

    def posterior(self, explorer: str | None = None) -> pd.DataFrame:
        """Weighted posterior points: the archive's columns and ``weight``, which sums to one.

        Parameters
        ----------
        explorer : str, optional
            One of `explorers`; the first by default.
        """
        return pd.read_parquet(self.folder / EXPLORERS / (explorer or self.explorers[0]) / POSTERIOR)

    def history(self, explorer: str) -> dict[str, FloatArray]:
        """Curves for the convergence figure, by name; see `contracts.Exploration`."""
        with np.load(self.folder / EXPLORERS / explorer / HISTORY, allow_pickle=False) as curves:
            return {name: curves[name] for name in curves.files}

    def points(self, columns: list[str] | None = None) -> pd.DataFrame:
        """Every point evaluated, in order of evaluation; `columns` limits what is read."""
        parts = pyarrow.dataset.dataset(self.folder / POINTS, format="parquet")
        frame: pd.DataFrame = parts.to_table(columns).to_pandas()
        return frame
