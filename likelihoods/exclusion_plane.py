"""What one collider search alone excludes in the plane of mediator and dark-matter mass, at fixed couplings."""

from __future__ import annotations

import math
from typing import Literal, Protocol

import numpy as np

from scanfit.contracts import ExclusionPlane, Quantity
from scanfit.errors import PointError
from scanfit.priors import FloatArray

from .candidate import Annihilation, Candidate, SpinOneMediator
from .mediator_widths import spin_one_total_width


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
