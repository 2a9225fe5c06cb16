"""Single production of a spin-one mediator, q qbar -> V, in the limit of a narrow width and at leading order.

The table is made by ``tables/make_mediator_production.py`` from the same parton densities as the mono-jet tables.
"""

from __future__ import annotations

import functools
import math
from pathlib import Path
from typing import Final

import numpy as np
from scipy.interpolate import CubicSpline

from scanfit.errors import InputError, PointError, Problem

from ..mono_x.signal import read_arrays

TABLES: Final = {
    13.0: "mediator_production_13tev.npz",
    13.6: "mediator_production_13p6tev.npz",
    14.0: "mediator_production_14tev.npz",
}
"""Shipped tables by collision energy in TeV."""


class MediatorProduction:
    """Cross section of on-shell production with universal quark couplings.

    Parameters
    ----------
    path : Path
        Generated table.

    Raises
    ------
    InputError
        If the table cannot be read or is damaged.
    """

    def __init__(self, path: Path) -> None:
        arrays, self.metadata = read_arrays(path, ("cross_section", "mass"))
        self.path = path
        self.lightest, self.heaviest = float(arrays["mass"][0]), float(arrays["mass"][-1])
        # ln sigma against ln(M/(sqrt s - M)), in which the table's nodes are equally spaced.
        self._sqrt_s = float(self.metadata["sqrt_s_gev"])
        position = np.log(arrays["mass"] / (self._sqrt_s - arrays["mass"]))
        universal = np.log(arrays["cross_section"].sum(axis=2))
        envelope = np.abs(universal[1:] - universal[0]).max(axis=0)
        self._spline = CubicSpline(position, np.column_stack([universal[0], envelope]))

    def __call__(self, mass: float) -> tuple[float, float]:
        """Return the cross section in pb at unit coupling, and its scale uncertainty: the half width of its logarithm.

        Raises
        ------
        PointError
            If `mass` (GeV) lies outside the table.
        """
        if not self.lightest <= mass <= self.heaviest:
            raise PointError(
                f"the mediator mass of {mass:g} GeV lies outside the production table, {self.lightest:g} to "
                f"{self.heaviest:g} GeV"
            )
        log_cross_section, envelope = self._spline(math.log(mass / (self._sqrt_s - mass)))
        return math.exp(log_cross_section), float(envelope)


@functools.lru_cache
def load_production(sqrt_s: float) -> MediatorProduction:
    """Read the shipped table at collision energy `sqrt_s` in TeV; raises InputError when there is none."""
    if sqrt_s not in TABLES:
        known = ", ".join(f"{energy:g}" for energy in TABLES)
        raise InputError(
            [Problem("sqrt_s", f"there is no production table at this energy; known: {known} TeV", sqrt_s)]
        )
    return MediatorProduction(Path(__file__).parents[1] / "tables" / TABLES[sqrt_s])
