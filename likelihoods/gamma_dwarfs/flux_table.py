"""Likelihood from published tables: profiled log-likelihood against flux, per target and energy bin.

Collaborations publish dwarf results in this form: counts, exposures and backgrounds are folded in already. The data
file is TOML, as in `telescope`, with a table ``flux_table`` in place of ``energy`` and ``telescope``::

    title = "..."
    invented = true                   # optional
    j_systematic = "profile_shape"    # optional, as in `telescope`

    [flux_table]
    file = "skua_fluxes.csv"          # beside this file
    flux = "energy"                   # or "photons": what the column flux holds

    [[targets]]                       # with log10_j_shift and velocity_dispersion, as in `telescope`
    name = "..."
    log10_j = 18.5
    log10_j_error = 0.2

The CSV file has one header line and five columns, in any order of rows::

    target,energy_low,energy_high,flux,log_likelihood

energy_low and energy_high are the edges of an energy bin in GeV; flux is the flux of the target in that bin, in photons
per cm^2 and s or in GeV per cm^2 and s, at least zero; log_likelihood is the natural logarithm of the likelihood with
the background profiled, up to a constant per target and bin. All targets have the same bins, which join without gaps;
each target and bin has at least four fluxes.

Between its points the log-likelihood is a monotone-preserving cubic in the flux; outside them it goes on along the
tangent at the end, which is too high, never too low, where the true one is concave: limits from there are too weak
rather than too strong. Pseudo-data cannot be drawn from such a table, so there is no expected band.
"""

from __future__ import annotations

import csv
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Literal, NoReturn

import numpy as np
from pydantic import Field
from scipy.interpolate import PchipInterpolator

from scanfit.contracts import InnerNuisances
from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options, check, read_toml

from . import j_factor
from .dispersion import EnergyResponse
from .flux_statistics import table_log_likelihoods
from .galaxies import GalaxyOptions, Name, SharedNuisance, shared_shift, target_problems, velocities
from .likelihood import NOTHING_SHARED

COLUMNS = ("target", "energy_low", "energy_high", "flux", "log_likelihood")
_FEWEST_FLUXES = 4
_PIECES = 12
"""Parts of an energy bin within which photons count with their mean energy."""


class TableOptions(Options):
    """Where the table is and what it holds."""

    file: str
    flux: Literal["photons", "energy"]


class FluxFile(Options):
    """The whole file."""

    title: str
    invented: bool = False
    j_systematic: Name | None = None
    flux_table: TableOptions
    targets: tuple[GalaxyOptions, ...] = Field(min_length=1)


@dataclass(frozen=True)
class FluxTable:
    """The file as arrays; n_t targets, n_b energy bins, n_f fluxes (short columns are padded with their last point).

    Parameters
    ----------
    title, invented, names, log10_j, j_minus, j_plus, shared, velocity
        As in `telescope.Observation`.
    response : EnergyResponse
        From photons to the flux of the table in each bin.
    sizes : ndarray of int, shape (n_t, n_b)
        Number of fluxes.
    flux, log_likelihood, slope : ndarray, shape (n_t, n_b, n_f)
        The table, ascending in flux, and the derivative at its points.
    """

    title: str
    invented: bool
    names: tuple[str, ...]
    response: EnergyResponse
    log10_j: FloatArray
    j_minus: FloatArray
    j_plus: FloatArray
    shared: tuple[SharedNuisance, ...]
    velocity: FloatArray | None
    sizes: np.ndarray[tuple[int, int], np.dtype[np.int64]]
    flux: FloatArray
    log_likelihood: FloatArray
    slope: FloatArray


@dataclass(frozen=True)
class FluxLikelihood:
    """Joint likelihood of all targets; see `likelihood.DwarfLikelihood` for the methods.

    Parameters
    ----------
    observation : FluxTable
        The tables.
    inner : {"marginal", "profile"}
        How J-factors are removed.
    """

    observation: FluxTable
    inner: InnerNuisances

    @property
    def shared(self) -> tuple[SharedNuisance, ...]:
        """What targets have in common."""
        return self.observation.shared

    def fluxes(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> FloatArray:
        """Flux of each target in each bin at the measured J-factors, shape (n_targets, n_bins)."""
        log10_j = self.observation.log10_j
        for nuisance in self.shared:
            log10_j = log10_j + values.get(nuisance.name, nuisance.centre) * nuisance.response
        return np.ascontiguousarray((10.0**log10_j)[:, None] * flux_per_j)

    def by_target(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> FloatArray:
        """Log-likelihood of each target, shape (n_targets,)."""
        data = self.observation
        found = table_log_likelihoods(
            self.fluxes(flux_per_j, values), data.sizes, data.flux, data.log_likelihood, data.slope, data.j_minus,
            data.j_plus, self.inner == "marginal",
        )  # fmt: skip
        return found + j_factor.log_normalisation(data.j_minus, data.j_plus)  # type: ignore[no-any-return]  # numba

    def total(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> float:
        """Sum of `by_target`."""
        return float(self.by_target(flux_per_j, values).sum())

    def photons(self, flux_per_j: FloatArray) -> float:
        """A scale for searches: the flux in units of the smallest positive one of the tables, summed."""
        smallest = np.where(self.observation.flux > 0.0, self.observation.flux, np.inf).min(axis=2)
        return float((self.fluxes(flux_per_j) / smallest).sum())

    def simulate(
        self, flux_per_j: FloatArray, rng: np.random.Generator, values: Mapping[str, float] = NOTHING_SHARED
    ) -> NoReturn:
        """Tables of likelihoods do not tell how data fluctuate."""
        raise NotImplementedError("pseudo-data cannot be drawn from tables of log-likelihoods")

    def expected(self, flux_per_j: FloatArray, values: Mapping[str, float] = NOTHING_SHARED) -> NoReturn:
        """Tables of likelihoods do not tell what was to be expected."""
        raise NotImplementedError("tables of log-likelihoods hold no expected data")


def read_flux_table(path: Path) -> FluxTable:
    """Read and check a data file and the CSV file that it names.

    Raises
    ------
    InputError
        With every problem found.
    """
    data = check(FluxFile, read_toml(path), source=str(path))
    problems = target_problems(data.j_systematic, data.targets)
    if problems:
        raise InputError(problems, str(path))
    names = tuple(target.name for target in data.targets)
    table = path.parent / data.flux_table.file
    columns = _columns(table, names)
    edges = _edges(table, columns)
    shape = (len(names), edges.size - 1)
    widest = max(len(column) for column in columns.values())
    sizes = np.zeros(shape, dtype=np.int64)
    flux, log_likelihood, slope = (np.zeros((*shape, widest)) for _ in range(3))
    for (name, low, _), rows in columns.items():
        at = names.index(name), int(np.searchsorted(edges, low))
        points = np.array(sorted(rows))
        sizes[at] = len(points)
        pad = (0, widest - len(points))
        flux[at] = np.pad(points[:, 0], pad, mode="edge")
        log_likelihood[at] = np.pad(points[:, 1], pad, mode="edge")
        slope[at] = np.pad(PchipInterpolator(*points.T).derivative()(points[:, 0]), pad, mode="edge")
    return FluxTable(
        title=data.title,
        invented=data.invented,
        names=names,
        response=_response(edges, data.flux_table.flux),
        log10_j=np.array([target.log10_j for target in data.targets]),
        j_minus=np.array([target.log10_j_error[0] for target in data.targets]),
        j_plus=np.array([target.log10_j_error[-1] for target in data.targets]),
        shared=shared_shift(data.j_systematic, data.targets),
        velocity=velocities(data.targets),
        sizes=sizes,
        flux=flux,
        log_likelihood=log_likelihood,
        slope=slope,
    )


_Columns = dict[tuple[str, float, float], list[tuple[float, float]]]


def _columns(path: Path, names: tuple[str, ...]) -> _Columns:
    """Points (flux, log-likelihood) by target and energy bin; targets that the TOML file leaves out are ignored."""
    try:
        with path.open(newline="", encoding="utf-8") as file:
            rows = list(csv.reader(file))
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "it is not UTF-8 text"
        raise InputError([Problem("flux_table.file", f"the file cannot be read: {reason}", str(path))]) from None
    if not rows or tuple(rows[0]) != COLUMNS:
        raise InputError(
            [Problem("line 1", f"must be '{','.join(COLUMNS)}'", ",".join(rows[0] if rows else []))], str(path)
        )
    problems, columns = [], _Columns()
    for number, row in enumerate(rows[1:], start=2):
        try:
            name, low, high, flux, value = row[0], *(float(cell) for cell in row[1:])
        except (ValueError, IndexError):
            problems.append(Problem(f"line {number}", "must hold a name and four numbers", ",".join(row)))
            continue
        if not (0.0 < low < high < np.inf and 0.0 <= flux < np.inf and np.isfinite(value)):
            rule = "energies must be positive and rise, the flux must not be negative, all must be finite"
            problems.append(Problem(f"line {number}", rule, ",".join(row)))
        elif name in names:
            columns.setdefault((name, low, high), []).append((flux, value))
    for (name, low, high), points in columns.items():
        where = f"{name}, {low:g} to {high:g} GeV"
        if len(points) < _FEWEST_FLUXES:
            problems.append(Problem(where, f"needs at least {_FEWEST_FLUXES} fluxes", len(points)))
        if len({flux for flux, _ in points}) < len(points):
            problems.append(Problem(where, "a flux occurs twice"))
    bins = {(low, high) for _, low, high in columns}
    problems += [
        Problem(name, f"has no rows from {low:g} to {high:g} GeV")
        for name in names
        for low, high in sorted(bins)
        if (name, low, high) not in columns
    ]
    if problems or not columns:
        raise InputError(problems or [Problem("", "holds no row of any target", None, names)], str(path))
    return columns


def _edges(path: Path, columns: _Columns) -> FloatArray:
    bins = sorted({(low, high) for _, low, high in columns})
    for (_, high), (low, _) in pairwise(bins):
        if high != low:
            raise InputError(
                [Problem("energy bins", f"must join: one ends at {high:g} GeV, the next starts at", low)], str(path)
            )
    return np.array([low for low, _ in bins] + [bins[-1][1]])


def _response(edges: FloatArray, flux: str) -> EnergyResponse:
    """Energy bins in pieces; for an energy flux each photon counts with the geometric mean energy of its piece."""
    fine = np.exp(np.interp(np.arange((edges.size - 1) * _PIECES + 1) / _PIECES, np.arange(edges.size), np.log(edges)))
    weight = np.sqrt(fine[1:] * fine[:-1]) if flux == "energy" else np.ones(fine.size - 1)
    matrix = np.kron(np.eye(edges.size - 1), np.ones(_PIECES)) * weight
    return EnergyResponse(edges, fine, matrix, None)
