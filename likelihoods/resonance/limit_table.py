"""The limit file of a resonance search: a TOML file that describes a table of limits against mass and width.

Every key is described at `LimitFile`, every column at `LimitTable`; ``runs/demo/brackwater_dijet.toml`` is a commented
example.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Final, Literal

import numpy as np
from pydantic import Field, PositiveFloat

from scanfit.errors import InputError, PointError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options, check, read_toml

from ..columns import read_columns
from ..limit_statistics import Statistic, estimate_behind, limits_expected

Channel = Literal["uu", "dd", "ss", "cc", "bb", "tt", "ee", "mumu", "tautau"]
PICOBARN: Final = {"pb": 1.0, "fb": 1e-3, "ab": 1e-6}


class LimitFile(Options):
    """A search for a bump in an invariant mass."""

    title: str
    source: str
    """Paper by arXiv or journal number; for invented data, how they were made."""
    invented: bool
    """Whether these are no real data; said wherever the result is shown."""
    note: str = ""
    """Anything that a reader must know."""
    channels: Annotated[tuple[Channel, ...], Field(min_length=1)]
    """Decays that the search sees; the limit is on their sum."""
    sqrt_s: PositiveFloat
    """Collision energy, TeV."""
    table: str
    """CSV or Parquet file of the limits, relative to this file."""
    unit: Literal["pb", "fb", "ab"]
    """Of the table's limits, which are upper limits on cross section x branching fraction x acceptance."""
    acceptance: Annotated[float, Field(gt=0.0, le=1.0)] = 1.0
    """Selected over produced signal events; 1 where the limits are already corrected for it, or in the table's column
    of this name."""
    level: Annotated[float, Field(gt=0.5, lt=1.0)] = 0.95
    """Confidence level of the limits."""
    statistic: Statistic = "cls"
    """How they were made: with CLs, or from one-sided intervals."""
    width_ratio_below: PositiveFloat | None = None
    """Largest width over mass that limits for a narrow resonance hold for; needed by a table without widths."""
    outside: Literal["refuse", "ignore"] = "refuse"
    """What a point gets whose mass or width the table does not cover: likelihood zero with a message, or no say."""


class LimitTable:
    """Limits between their nodes: ln(limit) is linear in ln(mass) and in the width.

    The columns are `mass` (GeV), `observed`, and if known `expected`, the median limit without signal (both in the
    file's unit), `width_ratio` (width over mass) and `acceptance`. With widths, every mass must come with every width.
    A narrower resonance than any in the table takes the limits of the narrowest.

    Parameters
    ----------
    path : Path
        Limit file.

    Attributes
    ----------
    mass, width_ratio : ndarray, shape (n_mass,), (n_width,)
        Nodes; one width, infinitely narrow, for a table without widths.
    log_sigma : ndarray, shape (n_mass, n_width)
        ln of the standard deviation of the estimated cross section x branching fraction, pb.
    pull : ndarray, shape (n_mass, n_width)
        Estimate over its standard deviation.

    Raises
    ------
    InputError
        With every broken rule.
    """

    def __init__(self, path: Path) -> None:
        self.file = check(LimitFile, read_toml(path), source=str(path))
        table = path.parent / self.file.table
        self.paths = (path, table)
        columns = read_columns(table, ("mass", "observed"), ("expected", "width_ratio", "acceptance"))
        problems = [
            Problem(name, f"must be positive (row {int(np.argmin(values)) + 1})", float(values.min()))
            for name, values in columns.items()
            if values.min() <= 0.0 and not (name == "width_ratio" and values.min() == 0.0)
        ]
        if "width_ratio" not in columns and self.file.width_ratio_below is None:
            problems.append(
                Problem("width_ratio", "give this column, or the key `width_ratio_below` in the limit file")
            )
        if "acceptance" in columns and self.file.acceptance != 1.0:
            problems.append(Problem("acceptance", "cannot be both a column and a key of the limit file"))
        widths = columns.get("width_ratio", np.zeros_like(columns["mass"]))
        self.mass, self.width_ratio = np.unique(columns["mass"]), np.unique(widths)
        order = np.lexsort((widths, columns["mass"]))
        shape = (len(self.mass), len(self.width_ratio))
        grid = np.stack(np.meshgrid(self.mass, self.width_ratio, indexing="ij"))
        rows = np.stack([columns["mass"][order], widths[order]])
        if rows.shape[1] != grid[0].size or np.any(rows.reshape(grid.shape) != grid):
            problems.append(Problem("mass", f"each of {shape[0]} masses must come once with each of {shape[1]} widths"))
        elif shape[0] < 2:
            problems.append(Problem("mass", "at least two masses are needed"))
        if problems:
            raise InputError(problems, str(table))

        def arranged(name: str) -> FloatArray:
            return columns[name][order].reshape(shape)

        acceptance = arranged("acceptance") if "acceptance" in columns else self.file.acceptance
        scale = PICOBARN[self.file.unit] / acceptance
        median = limits_expected(self.file.level, self.file.statistic)[2]
        # Without expected limits the best guess is a search that saw what it expected.
        sigma = scale * arranged("expected" if "expected" in columns else "observed") / median
        self.log_sigma = np.log(sigma)
        self.pull = estimate_behind(scale * arranged("observed") / sigma, self.file.level, self.file.statistic)
        self.has_expected = "expected" in columns
        self.largest_width = self.file.width_ratio_below or float(self.width_ratio[-1])

    def covers(self, mass: float, width_ratio: float) -> bool:
        """Whether the table says something about this resonance; raises PointError when it is to be refused."""
        if self.mass[0] <= mass <= self.mass[-1] and width_ratio <= self.largest_width:
            return True
        if self.file.outside == "refuse":
            raise PointError(
                f"{self.file.title}: a resonance of {mass:g} GeV with a width of {width_ratio:.3g} of its mass lies "
                f"outside the table ({self.mass[0]:g} to {self.mass[-1]:g} GeV, width up to {self.largest_width:g})"
            )
        return False

    def weights(self, mass: float, width_ratio: float) -> FloatArray:
        """Interpolation weights of all nodes, shape (n_mass, n_width); for a resonance that the table covers."""
        return np.outer(_hats(np.log(self.mass), np.log(mass)), _hats(self.width_ratio, width_ratio))


def _hats(nodes: FloatArray, place: float) -> FloatArray:
    weights = np.zeros(len(nodes))
    upper = int(np.searchsorted(nodes, place))
    if upper == 0 or upper == len(nodes):
        weights[min(upper, len(nodes) - 1)] = 1.0
        return weights
    fraction = (place - nodes[upper - 1]) / (nodes[upper] - nodes[upper - 1])
    weights[upper - 1], weights[upper] = 1.0 - fraction, fraction
    return weights
