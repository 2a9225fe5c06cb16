"""What one collider search alone excludes in the plane of mediator and dark-matter mass, at fixed couplings."""

from __future__ import annotations

import math
from collections.abc import Mapping
from types import MappingProxyType
from typing import Annotated, Any, Final, Literal, Protocol

import numpy as np
from pydantic import Field, PositiveFloat

from scanfit.contracts import ExclusionPlane, Quantity
from scanfit.errors import InputError, PointError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options, check

from .candidate import Annihilation, Candidate, SpinOneMediator
from .mediator_widths import spin_one_total_width

Coupling = Annotated[float, Field(ge=0.0, le=math.sqrt(4.0 * math.pi))]

MASS_PLANES: Final = MappingProxyType(
    {
        "vector": "mediator mass and dark-matter mass, vector couplings held fixed",
        "axial": "mediator mass and dark-matter mass, axial couplings held fixed",
    }
)
"""Planes of a term that looks for a spin-one mediator."""


class MassPlaneOptions(Options):
    """What can be said about a plane of masses; dark matter is a Dirac fermion."""

    g_quark: Coupling = 0.25
    g_dark: Coupling = 1.0
    g_lepton: Coupling = 0.0
    mediator_mass: tuple[PositiveFloat, PositiveFloat] | None = None
    """Range in GeV; what the search covers when left out."""
    dark_mass: tuple[PositiveFloat, PositiveFloat] | None = None
    """Range in GeV; up to 0.55 of the heaviest mediator when left out."""


class Excludes(Protocol):
    """A term that can say how well a candidate agrees with its data."""

    caveats: tuple[str, ...]

    def confidence(self, prediction: Candidate) -> tuple[float, float]:
        """Observed CLs of a candidate, and the median one without signal."""
        ...


def spin_one_candidate(
    mediator_mass: float,
    dark_mass: float,
    coupling: Literal["vector", "axial"],
    g_quark: float,
    g_dark: float,
    g_lepton: float = 0.0,
) -> Candidate:
    """Dirac dark matter with a spin-one mediator, as far as a collider needs to know it: it does not annihilate."""
    width = spin_one_total_width(mediator_mass, coupling, dark_mass, g_dark, g_quark, g_lepton)
    mediator = SpinOneMediator(mediator_mass, width, coupling, g_quark, g_dark, g_lepton)
    nothing = Annihilation(channels=(), sigma_v=lambda s: np.zeros((0, len(s))), total=np.zeros_like)
    return Candidate(dark_mass, False, 2, nothing, mediator=mediator)


def mass_plane(
    term: Excludes,
    title: str,
    plane: str,
    settings: Mapping[str, Any],
    covered: tuple[float, float],
    points: int,
) -> ExclusionPlane:
    """Compute one of `MASS_PLANES` as the user's settings say.

    Parameters
    ----------
    term, title
        As in `exclusion_plane`.
    plane : str
        One of `MASS_PLANES`.
    settings : mapping
        Keys of `MassPlaneOptions`.
    covered : tuple of float
        Mediator masses that the search covers, GeV.
    points : int
        Points along each axis.

    Raises
    ------
    InputError
        If a setting breaks a rule.
    """
    options = check(MassPlaneOptions, settings, source=f"plane {plane}")
    mediator_range = options.mediator_mass or covered
    dark_range = options.dark_mass or (min(1.0, 0.01 * mediator_range[1]), 0.55 * mediator_range[1])
    problems = [
        Problem(key, "the range must rise", given)
        for key, given in (("mediator_mass", mediator_range), ("dark_mass", dark_range))
        if not given[0] < given[1]
    ]
    if problems:
        raise InputError(problems, f"plane {plane}")
    return exclusion_plane(
        term,
        title,
        np.linspace(*mediator_range, points),
        np.linspace(*dark_range, points),
        "axial" if plane == "axial" else "vector",
        options.g_quark,
        options.g_dark,
        options.g_lepton,
    )


def exclusion_plane(
    term: Excludes,
    title: str,
    mediator_masses: FloatArray,
    dark_masses: FloatArray,
    coupling: Literal["vector", "axial"],
    g_quark: float,
    g_dark: float,
    g_lepton: float = 0.0,
) -> ExclusionPlane:
    """Compute CLs on a grid of masses.

    Parameters
    ----------
    term : Term
        ``mono-x``, ``dijet-resonance`` or ``dilepton-resonance``.
    title : str
        Heading of figure and table.
    mediator_masses, dark_masses : ndarray, shape (n_x,), (n_y,)
        GeV, rising.
    coupling, g_quark, g_dark, g_lepton
        The fixed couplings.

    Returns
    -------
    ExclusionPlane
        NaN where the search refuses a point.
    """
    observed = np.full((len(dark_masses), len(mediator_masses)), math.nan)
    expected = observed.copy()
    for row, dark_mass in enumerate(dark_masses):
        for column, mediator_mass in enumerate(mediator_masses):
            candidate = spin_one_candidate(float(mediator_mass), float(dark_mass), coupling, g_quark, g_dark, g_lepton)
            try:
                observed[row, column], expected[row, column] = term.confidence(candidate)
            except PointError:
                continue
    return ExclusionPlane(
        title=title,
        fixed=f"{coupling} couplings, g_quark = {g_quark:g}, g_dark = {g_dark:g}, g_lepton = {g_lepton:g}",
        x=Quantity("mediator_mass", "GeV", "M", "mediator mass"),
        y=Quantity("mass", "GeV", r"m_\chi", "dark-matter mass"),
        x_values=np.asarray(mediator_masses, dtype=float),
        y_values=np.asarray(dark_masses, dtype=float),
        observed=observed,
        expected=expected,
        caveats=term.caveats,
    )
