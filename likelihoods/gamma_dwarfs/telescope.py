"""The data file of the term: a gamma-ray telescope, its targets, and what it counted.

A TOML file with these keys; "per bin" means one number for all energy bins or an array with one entry per bin::

    title = "..."                     # shown beside results
    invented = true                   # optional: demo data, said wherever results show
    j_systematic = "profile_shape"    # optional: name of a shared shift of all log10 J, see below

    [energy]
    edges = [0.5, 1.0, 2.0]           # GeV, rising, one more than bins
    resolution = 0.1                  # relative standard deviation of the measured energy; 0 for perfect
    # or, instead of resolution, a measured dispersion:
    # dispersion = { true_edges = [...], matrix = [[...], ...] }
    #                                 # one row per true bin, one column per observed bin, rows sum to at most 1

    [telescope]
    exposure = 2.0e11                 # cm^2 s, effective area times live time, per bin
    containment = 0.7                 # fraction of a target's photons that fall into the aperture, per bin

    [[targets]]
    name = "..."
    log10_j = 18.5                    # J in GeV^2 cm^-5 within the aperture
    log10_j_error = 0.2               # dex, or [minus, plus]
    background = [12.3, 4.5]          # expected counts per bin, positive
    background_error = 0.05           # optional: relative error of the whole background, at most 0.5
    observed = [13, 4]                # counts per bin
    exposure = 1.8e11                 # optional, overrides the telescope's
    containment = 0.6                 # optional, overrides the telescope's
    shared_background = "diffuse"     # optional: name of one of [[shared_backgrounds]]
    log10_j_shift = -0.1              # optional: dex by which log10 J moves per unit of the j_systematic
    velocity_dispersion = 9.0         # optional: of the stars along the line of sight, km/s

    [[shared_backgrounds]]            # optional: levels that several targets have in common
    name = "diffuse"
    error = 0.04                      # relative, at most 0.5

A shared background level (mean 1) and the shared systematic of J (standard normal) are nuisance parameters of the scan,
under the names given here: terms that use the same name share them. A target with a velocity dispersion s annihilates
at the relative velocity sqrt(6) s instead of at `candidate.DWARF_VELOCITY`, which is the root mean square of a
Maxwellian and therefore exact for s-wave and p-wave annihilation; near a narrow resonance it is an approximation.

Exposure and containment apply to the bin in which a photon is seen. Bins must have some background: without it
a single stray photon would exclude everything.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any

import numpy as np
from numpy.typing import NDArray
from pydantic import BeforeValidator, Field, NonNegativeFloat, NonNegativeInt, PositiveFloat, model_validator

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options, check, read_toml

from .dispersion import EnergyResponse, normal_response
from .galaxies import (
    GalaxyOptions,
    Name,
    SharedNuisance,
    as_array,
    repeated,
    shared_shift,
    target_problems,
    velocities,
)

PerBin = Annotated[tuple[PositiveFloat, ...], BeforeValidator(as_array), Field(min_length=1)]
Fractions = Annotated[
    tuple[Annotated[float, Field(gt=0.0, le=1.0)], ...], BeforeValidator(as_array), Field(min_length=1)
]


class DispersionOptions(Options):
    """A measured energy dispersion."""

    true_edges: tuple[PositiveFloat, ...] = Field(min_length=2)
    matrix: tuple[tuple[NonNegativeFloat, ...], ...]


class EnergyOptions(Options):
    """Energy bins and how well energies are measured."""

    edges: tuple[PositiveFloat, ...] = Field(min_length=2)
    resolution: float | None = Field(default=None, ge=0.0, le=0.5)
    dispersion: DispersionOptions | None = None

    @model_validator(mode="after")
    def _one_of_two(self) -> EnergyOptions:
        if (self.resolution is None) == (self.dispersion is None):
            raise ValueError("give either 'resolution' or 'dispersion'")
        return self


class TelescopeOptions(Options):
    """What holds for every target that does not say otherwise."""

    exposure: PerBin
    containment: Fractions = (1.0,)


class TargetOptions(GalaxyOptions):
    """One target and its counts."""

    background: PerBin
    background_error: float = Field(default=0.0, ge=0.0, le=0.5)
    observed: tuple[NonNegativeInt, ...]
    exposure: PerBin | None = None
    containment: Fractions | None = None
    shared_background: str | None = None


class SharedBackgroundOptions(Options):
    """A background level that several targets have in common."""

    name: Name
    error: float = Field(gt=0.0, le=0.5)


class DataFile(Options):
    """The whole file."""

    title: str
    invented: bool = False
    j_systematic: Name | None = None
    energy: EnergyOptions
    telescope: TelescopeOptions
    shared_backgrounds: tuple[SharedBackgroundOptions, ...] = ()
    targets: tuple[TargetOptions, ...]


@dataclass(frozen=True)
class Observation:
    """A telescope's data as arrays; n_t targets, n_b energy bins.

    Parameters
    ----------
    title : str
        From the file.
    invented : bool
        Whether the file calls its data invented.
    names : tuple of str
        Targets.
    response : EnergyResponse
        Energy bins and dispersion.
    acceptance : ndarray, shape (n_t, n_b)
        Exposure times containment, cm^2 s.
    log10_j : ndarray, shape (n_t,)
        Measured log10 of J in GeV^2 cm^-5.
    j_minus, j_plus : ndarray, shape (n_t,)
        Its errors in dex.
    background : ndarray, shape (n_t, n_b)
        Expected background counts.
    background_error, background_centre : ndarray, shape (n_t,)
        Relative error of the background and its measured scale (1 in real data; pseudo-data fluctuate it).
    observed : ndarray, shape (n_t, n_b)
        Counts; not integers in expected data.
    shared : tuple of SharedNuisance
        What targets have in common.
    velocity : ndarray, shape (n_t,), or None
        Relative velocity (c = 1) of annihilation; None where `candidate.DWARF_VELOCITY` holds for all.
    """

    title: str
    invented: bool
    names: tuple[str, ...]
    response: EnergyResponse
    acceptance: FloatArray
    log10_j: FloatArray
    j_minus: FloatArray
    j_plus: FloatArray
    background: FloatArray
    background_error: FloatArray
    background_centre: FloatArray
    observed: FloatArray
    shared: tuple[SharedNuisance, ...] = ()
    velocity: FloatArray | None = None


def read_observation(path: Path) -> Observation:
    """Read and check a data file.

    Raises
    ------
    InputError
        With every problem found: first of types and ranges, and if there are none, of lengths and order.
    """
    data = check(DataFile, read_toml(path), source=str(path))
    problems = [*_energy_problems(data.energy), *_length_problems(data)]
    if problems:
        raise InputError(problems, str(path))
    edges = np.array(data.energy.edges)
    bins = edges.size - 1
    targets = data.targets

    def per_bin(values: tuple[float, ...]) -> FloatArray:
        return np.broadcast_to(np.array(values, dtype=float), (bins,))

    return Observation(
        title=data.title,
        invented=data.invented,
        names=tuple(target.name for target in targets),
        response=_response(edges, data.energy),
        acceptance=np.array(
            [
                per_bin(target.exposure or data.telescope.exposure)
                * per_bin(target.containment or data.telescope.containment)
                for target in targets
            ]
        ),
        log10_j=np.array([target.log10_j for target in targets], dtype=float),
        j_minus=np.array([target.log10_j_error[0] for target in targets], dtype=float),
        j_plus=np.array([target.log10_j_error[-1] for target in targets], dtype=float),
        background=np.array([per_bin(target.background) for target in targets]),
        background_error=np.array([target.background_error for target in targets], dtype=float),
        background_centre=np.ones(len(targets)),
        observed=np.array([target.observed for target in targets], dtype=float),
        shared=(
            *shared_shift(data.j_systematic, targets),
            *(
                SharedNuisance(
                    shared.name,
                    "background",
                    np.array([float(target.shared_background == shared.name) for target in targets]),
                    shared.error,
                    1.0,
                )
                for shared in data.shared_backgrounds
            ),
        ),
        velocity=velocities(targets),
    )


def _response(edges: FloatArray, energy: EnergyOptions) -> EnergyResponse:
    if energy.dispersion is None:
        return normal_response(edges, energy.resolution or 0.0)
    matrix: NDArray[np.float64] = np.array(energy.dispersion.matrix, dtype=float).T
    return EnergyResponse(edges, np.array(energy.dispersion.true_edges), np.ascontiguousarray(matrix), None)


def _energy_problems(energy: EnergyOptions) -> list[Problem]:
    problems = []
    if not np.all(np.diff(energy.edges) > 0.0):
        problems.append(Problem("energy.edges", "must rise", energy.edges))
    if energy.dispersion is None:
        return problems
    where, dispersion = "energy.dispersion", energy.dispersion
    if not np.all(np.diff(dispersion.true_edges) > 0.0):
        problems.append(Problem(f"{where}.true_edges", "must rise", dispersion.true_edges))
    if len(dispersion.matrix) != len(dispersion.true_edges) - 1:
        rows = len(dispersion.true_edges) - 1
        problems.append(Problem(f"{where}.matrix", f"must have {rows} rows, one per true bin", len(dispersion.matrix)))
    for number, row in enumerate(dispersion.matrix):
        if len(row) != len(energy.edges) - 1:
            rule = f"must have {len(energy.edges) - 1} entries, one per observed bin"
            problems.append(Problem(f"{where}.matrix.{number}", rule, len(row)))
        elif sum(row) > 1.0 + 1e-6:
            problems.append(Problem(f"{where}.matrix.{number}", "must sum to at most 1", sum(row)))
    return problems


def _length_problems(data: DataFile) -> list[Problem]:
    bins = len(data.energy.edges) - 1
    levels = tuple(level.name for level in data.shared_backgrounds)
    problems = []

    def one_or_all(where: str, values: tuple[Any, ...] | None) -> None:
        if values is not None and len(values) not in (1, bins):
            problems.append(
                Problem(where, f"must be one number or have {bins} entries, one per energy bin", len(values))
            )

    one_or_all("telescope.exposure", data.telescope.exposure)
    one_or_all("telescope.containment", data.telescope.containment)
    for number, target in enumerate(data.targets):
        where = f"targets.{number}"
        one_or_all(f"{where}.exposure", target.exposure)
        one_or_all(f"{where}.containment", target.containment)
        one_or_all(f"{where}.background", target.background)
        if len(target.observed) != bins:
            rule = f"must have {bins} entries, one per energy bin"
            problems.append(Problem(f"{where}.observed", rule, len(target.observed)))
        if target.shared_background is not None and target.shared_background not in levels:
            rule = "not the name of one of shared_backgrounds"
            problems.append(Problem(f"{where}.shared_background", rule, target.shared_background, levels))
    taken = [*levels, *([data.j_systematic] if data.j_systematic else [])]
    problems += [Problem("shared_backgrounds", "this name is taken", name) for name in repeated(taken)]
    return [*problems, *target_problems(data.j_systematic, data.targets)]
