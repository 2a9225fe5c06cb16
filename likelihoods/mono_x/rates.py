"""Cross sections per bin: from the shipped tables, or from the user's own.

The user's table holds cross section x acceptance on a grid of masses at fixed couplings. It is brought to other
couplings and widths with the shipped tables: their ratio to them varies slowly with the masses, also where the mediator
goes off its mass shell, so that this ratio is what is interpolated.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Final, Literal, Protocol

import numpy as np
from scipy.spatial import Delaunay, QhullError

from scanfit.errors import InputError, PointError, Problem
from scanfit.priors import FloatArray

from ..candidate import SpinOneMediator
from ..columns import read_columns
from ..mediator_widths import FERMION_CHANNELS, FERMION_STATES, spin_one_total_width
from .analysis import Analysis
from .signal import TABLES, SignalTable, SpinOneSignal, load_table

NEUTRINO_COUPLING: Final = math.sqrt(float(FERMION_STATES[FERMION_CHANNELS.index("nunu")]))
"""All neutrinos together, as one Dirac fermion, in units of the lepton coupling."""

LIGHT: Final = 0.1
"""Dark matter below this fraction of the mediator's mass is as good as massless."""

_USUAL_CUT: Final = 200.0
"""GeV of missing momentum, for regions that are not defined by it."""


class Rates(Protocol):
    """What the term asks for the signal."""

    @property
    def files(self) -> tuple[Path, ...]:
        """Every file that was read."""
        ...

    def __call__(self, mediator: SpinOneMediator, dark_mass: float, share: float) -> tuple[FloatArray, FloatArray]:
        """Return cross section x acceptance in pb and its log uncertainty per bin, each of shape (n_bins,).

        Parameters
        ----------
        mediator : SpinOneMediator
            With a positive width.
        dark_mass : float
            GeV.
        share : float
            Factor on the width into a pair of Dirac particles: one half for a Majorana particle.

        Raises
        ------
        PointError
            If the point lies outside the user's table.
        """
        ...


class ShippedRates:
    """Leading order from a shipped table; the uncertainty is the spread among its scale choices.

    Parameters
    ----------
    table : SignalTable
        Cross sections above cuts.
    edges : tuple of float
        As for `SpinOneSignal`.
    """

    def __init__(self, table: SignalTable, edges: tuple[float, ...]) -> None:
        self.files = (table.path,)
        self._spin_one = SpinOneSignal(table, edges)
        self._count = len(edges) - 1

    def __call__(self, mediator: SpinOneMediator, dark_mass: float, share: float) -> tuple[FloatArray, FloatArray]:
        total, weighted = np.zeros(self._count), np.zeros(self._count)
        g_quark = math.sqrt(mediator.g_quark_squared)
        decays = [(share, current.axial, dark_mass, current.g_dark) for current in mediator.currents]
        # Neutrinos are as invisible as dark matter; interference with the Z boson is left out.
        decays.append((1.0, False, 0.0, NEUTRINO_COUPLING * mediator.g_neutrino))
        for factor, axial, mass, coupling in decays:
            if coupling != 0.0:
                rate, scales = self._spin_one(mediator.mass, mediator.width, axial, mass, g_quark, coupling)
                total += factor * rate
                weighted += factor * rate * scales
        return total, np.divide(weighted, total, out=np.zeros_like(total), where=total > 0.0)


class OwnRates:
    """The user's table.

    Columns: `mediator_mass` and `dark_mass` (GeV), `bin` (1 for the first), `cross_section` (times acceptance, in the
    unit of the analysis file) and, if known, `relative_uncertainty`. Every pair of masses must come once with every
    bin; the pairs need not form a rectangle. Between them the ratio to the shipped rates is linear on triangles in
    ln max(M, 2 m), the least energy that must be produced, and ln(m/M). Shipped rates are those of the same bin, or
    above 200 GeV of missing momentum when the bins are `regions`. Dark matter lighter than any in the table is taken as
    the lightest there if that is below a tenth of the mediator's mass.

    Parameters
    ----------
    analysis : Analysis
        With its `signal`.
    folder : Path
        Of the analysis file.

    Raises
    ------
    InputError
        With every broken rule.
    """

    def __init__(self, analysis: Analysis, folder: Path) -> None:
        own = analysis.signal
        if own is None:
            raise ValueError("the analysis has no signal table of its own")
        path = folder / own.table
        reference = nearest_table(analysis.signature, analysis.sqrt_s)
        self._reference = ShippedRates(reference, analysis.bin_edges or (_USUAL_CUT, math.inf))
        self.files = (path, *self._reference.files)
        columns = read_columns(path, ("mediator_mass", "dark_mass", "bin", "cross_section"), ("relative_uncertainty",))
        problems = [
            Problem(name, f"must not be negative (row {int(np.argmin(values)) + 1})", float(values.min()))
            for name, values in columns.items()
            if values.min() < 0.0
        ]
        problems += [
            Problem(name, f"must be positive (row {int(np.argmin(columns[name])) + 1})", 0.0)
            for name in ("mediator_mass", "dark_mass")
            if columns[name].min() == 0.0
        ]
        bins = np.arange(1, analysis.count + 1)
        foreign = np.setdiff1d(columns["bin"], bins)
        if len(foreign):
            problems.append(Problem("bin", f"the analysis has bins 1 to {analysis.count}", float(foreign[0])))
        if problems:
            raise InputError(problems, str(path))
        order = np.lexsort((columns["bin"], columns["dark_mass"], columns["mediator_mass"]))
        masses = np.column_stack([columns["mediator_mass"], columns["dark_mass"]])[order]
        points, counts = np.unique(masses, axis=0, return_counts=True)
        odd = np.flatnonzero(counts != analysis.count)
        if len(odd) or np.any(columns["bin"][order].reshape(len(points), -1) != bins):
            where = points[odd[0]] if len(odd) else points[0]
            rule = f"each pair of masses must come once with each of the {analysis.count} bins"
            raise InputError([Problem("bin", rule, f"mediator {where[0]:g}, dark matter {where[1]:g} GeV")], str(path))

        scale = 1.0 if own.unit == "pb" else 1e-3
        cross_section = scale * columns["cross_section"][order].reshape(len(points), -1)
        spread = columns.get("relative_uncertainty", np.zeros(len(order)))[order].reshape(cross_section.shape)
        shipped = np.array([self._shipped_at(own.coupling, own.g_quark, own.g_dark, own.g_lepton, *p) for p in points])
        dead = np.flatnonzero(np.any(shipped == 0.0, axis=1))
        if len(dead):
            m, d = points[dead[0]]
            rule = "the shipped rate vanishes here, beyond the kinematic end: leave out such masses"
            raise InputError([Problem("dark_mass", rule, f"mediator {m:g}, dark matter {d:g} GeV")], str(path))
        try:
            self._triangles = Delaunay(_position(points[:, 0], points[:, 1]))
        except QhullError:
            rule = "the pairs of masses must span an area: at least three, not in line"
            raise InputError([Problem("mediator_mass", rule)], str(path)) from None
        self._values = np.concatenate([cross_section / shipped, np.log1p(spread)], axis=1)
        self._lowest, self._highest = points.min(axis=0), points.max(axis=0)
        self._title = path.name

    def _shipped_at(
        self,
        coupling: Literal["vector", "axial"],
        g_quark: float,
        g_dark: float,
        g_lepton: float,
        mediator_mass: float,
        dark_mass: float,
    ) -> FloatArray:
        width = spin_one_total_width(mediator_mass, coupling, dark_mass, g_dark, g_quark, g_lepton)
        mediator = SpinOneMediator(mediator_mass, width, coupling, g_quark, g_dark, g_lepton)
        return self._reference(mediator, dark_mass, 1.0)[0]

    def __call__(self, mediator: SpinOneMediator, dark_mass: float, share: float) -> tuple[FloatArray, FloatArray]:
        masses = np.array([mediator.mass, dark_mass])
        if dark_mass < self._lowest[1] <= LIGHT * mediator.mass:
            masses[1] = self._lowest[1]
        position = _position(masses[0], masses[1])
        inside = bool(np.all((masses >= self._lowest) & (masses <= self._highest)))
        triangle = int(self._triangles.find_simplex(position, tol=1e-9)) if inside else -1
        if triangle < 0:
            raise PointError(
                f"a mediator of {mediator.mass:g} GeV with dark matter of {dark_mass:g} GeV lies outside the signal "
                f"table {self._title}"
            )
        transform = self._triangles.transform[triangle]
        weights = transform[:2] @ (position - transform[2])
        weights = np.append(weights, 1.0 - weights.sum())
        ratio, spread = np.split(weights @ self._values[self._triangles.simplices[triangle]], 2)
        return np.maximum(ratio, 0.0) * self._reference(mediator, dark_mass, share)[0], spread


def _position(mediator_mass: FloatArray, dark_mass: FloatArray) -> FloatArray:
    return np.stack([np.log(np.maximum(mediator_mass, 2.0 * dark_mass)), np.log(dark_mass / mediator_mass)], axis=-1)


def nearest_table(signature: str, sqrt_s: float) -> SignalTable:
    """Return the shipped table that is nearest in energy among those of the signature."""
    energies = [energy for kind, energy in TABLES if kind == signature]
    return load_table(signature, min(energies, key=lambda energy: abs(energy - sqrt_s)))
