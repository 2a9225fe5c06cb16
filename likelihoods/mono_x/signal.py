"""Production of a spin-one mediator with a recoiling jet or photon, on and off the mass shell.

The table holds the leading-order cross section T(Q) of a mediator of virtuality Q at unit quark coupling, made by
``tables/make_mono_jet.py``. A mediator of mass M and total width Gamma that ends in dark matter X gives in each bin of
missing transverse momentum (derived here; in the limit of a narrow width it is production times branching ratio)

    sigma = g_q^2 int dQ^2 T(Q) Q Gamma_XX(Q) / (pi [(Q^2 - M^2)^2 + M^2 Gamma^2]),   Q from 2 m to the kinematic end.
"""

from __future__ import annotations

import functools
import hashlib
import json
import math
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from numba import njit
from scipy.interpolate import CubicSpline

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from ..mediator_widths import axial_width, vector_width

TABLES: Final = {
    ("mono-jet", 13.0): "mono_jet_13tev.npz",
    ("mono-jet", 13.6): "mono_jet_13p6tev.npz",
    ("mono-jet", 14.0): "mono_jet_14tev.npz",
    ("mono-photon", 13.0): "mono_photon_13tev.npz",
    ("mono-photon", 13.6): "mono_photon_13p6tev.npz",
    ("mono-photon", 14.0): "mono_photon_14tev.npz",
}
"""Shipped tables by signature and collision energy in TeV; a jet has |y| < 2.4, a photon |y| < 2.37."""

VIRTUALITY_SCALE: Final = 150.0
"""GeV; the tables' virtualities are uniform in asinh(Q/scale)."""

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(24)
_NODES, _WEIGHTS = 0.5 * (_NODES + 1.0), 0.5 * _WEIGHTS


@dataclass(frozen=True)
class SignalTable:
    """One generated table.

    Parameters
    ----------
    virtuality : ndarray, shape (n_q,)
        GeV, from 0 (the limit of a light mediator is smooth) to 0.77 of the collision energy, where the rate is nil.
    cut : ndarray, shape (n_cut,)
        Lower cuts on missing transverse momentum, GeV.
    cross_section : ndarray, shape (n_scale, n_q, n_cut, 2)
        Above each cut in pb at unit coupling, for up-type and down-type quarks; the first scale choice is nominal.
    metadata : mapping
        Settings and provenance.
    path : Path
        The file.
    """

    virtuality: FloatArray
    cut: FloatArray
    cross_section: FloatArray
    metadata: dict[str, Any]
    path: Path


@functools.lru_cache
def load_table(signature: str, sqrt_s: float) -> SignalTable:
    """Read a shipped table and prove its checksum.

    Raises
    ------
    InputError
        If there is no such table, or its bytes are damaged.
    """
    name = TABLES.get((signature, sqrt_s))
    if name is None:
        known = ", ".join(f"{signature} at {energy:g} TeV" for signature, energy in TABLES)
        raise InputError(
            [Problem("sqrt_s", f"there is no signal table for a {signature} at this energy; known: {known}", sqrt_s)]
        )
    return read_table(Path(__file__).parents[1] / "tables" / name)


def read_table(path: Path) -> SignalTable:
    """Read the table in `path`; raises InputError when its bytes are not those that were written."""
    arrays, metadata = read_arrays(path, ("cross_section", "cut", "virtuality"))
    return SignalTable(**arrays, metadata=metadata, path=path)


def read_arrays(path: Path, names: tuple[str, ...]) -> tuple[dict[str, FloatArray], dict[str, Any]]:
    """Read a generated table's arrays and metadata; raises InputError when they are not those that were written."""
    try:
        with path.open("rb") as stream, np.load(stream, allow_pickle=False) as file:
            metadata = json.loads(str(file["metadata"]))
            arrays = {name: file[name] for name in names}
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile) as error:
        raise InputError([Problem("", f"the table cannot be read: {error}")], str(path)) from None
    if checksum(arrays) != metadata["sha256"]:
        raise InputError([Problem("", "the table is damaged: its checksum does not hold")], str(path))
    return arrays, metadata


def checksum(arrays: Mapping[str, FloatArray]) -> str:
    """SHA-256 over a table's arrays, in name order."""
    digest = hashlib.sha256()
    for name in sorted(arrays):
        digest.update(name.encode() + np.ascontiguousarray(arrays[name], dtype="<f8").tobytes())
    return digest.hexdigest()


class SpinOneSignal:
    """Cross sections of one analysis's bins for any spin-one mediator with universal quark couplings.

    Parameters
    ----------
    table : SignalTable
        Cross sections above cuts.
    edges : sequence of float
        Lower edges of the bins in missing transverse momentum, GeV, then the last upper edge: finite or infinity. Edges
        need not be among the table's cuts; between them log sigma is a cubic spline in log cut, good to 1e-4.

    Raises
    ------
    InputError
        If an edge lies outside the table.
    """

    def __init__(self, table: SignalTable, edges: tuple[float, ...]) -> None:
        low, high = float(table.cut[0]), float(table.cut[-1])
        problems = [
            Problem(
                f"edges.{index}", f"the signal table covers missing momenta from {low:g} to {high:g} GeV only", edge
            )
            for index, edge in enumerate(edges)
            if not (low <= edge <= high or (index == len(edges) - 1 and math.isinf(edge)))
        ]
        if problems:
            raise InputError(problems)
        # Up-type and down-type quarks are summed: couplings are universal.
        log_above = CubicSpline(np.log(table.cut), np.log(table.cross_section.sum(axis=-1)), axis=2)
        finite = [edge for edge in edges if math.isfinite(edge)]
        above = np.exp(log_above(np.log(finite)))
        if len(finite) < len(edges):
            above = np.concatenate([above, np.zeros_like(above[..., :1])], axis=-1)
        log_bins = np.log(-np.diff(above, axis=-1))
        position = np.arcsinh(table.virtuality / VIRTUALITY_SCALE)
        self._step = float(position[1])
        self._log_bins = np.ascontiguousarray(CubicSpline(position, log_bins[0]).c.transpose(1, 2, 0))
        envelope = np.abs(log_bins[1:] - log_bins[0]).max(axis=0)
        self._envelope = np.ascontiguousarray(CubicSpline(position, envelope).c.transpose(1, 2, 0))
        self._end = float(table.virtuality[-1])

    def __call__(
        self,
        mediator_mass: float,
        width: float,
        axial: bool,
        dark_mass: float,
        g_quark: float,
        g_dark: float,
    ) -> tuple[FloatArray, FloatArray]:
        """Return cross sections per bin and their scale uncertainty.

        Parameters
        ----------
        mediator_mass, width, dark_mass : float
            GeV. The dark matter is a Dirac fermion.
        axial : bool
            Axial couplings rather than vector ones.
        g_quark, g_dark : float
            Couplings.

        Returns
        -------
        cross_section : ndarray, shape (n_bins,)
            pb.
        log_uncertainty : ndarray, shape (n_bins,)
            Half width of ln(cross section): the largest change among the table's scale choices.
        """
        cross_section, log_uncertainty = _cross_sections(
            self._log_bins, self._envelope, self._step, self._end,
            mediator_mass, width, axial, dark_mass, g_quark, g_dark,
        )  # fmt: skip
        return cross_section, log_uncertainty


@njit(cache=True, error_model="numpy")
def _cross_sections(
    log_bins: np.ndarray,
    envelope: np.ndarray,
    step: float,
    end: float,
    mediator_mass: float,
    width: float,
    axial: bool,
    dark_mass: float,
    g_quark: float,
    g_dark: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Integrate over the virtuality; spline coefficients have shape (n_q - 1, n_bins, 4), highest power first."""
    n_bins = log_bins.shape[1]
    cross_section, spread = np.zeros(n_bins), np.zeros(n_bins)
    threshold = 2.0 * dark_mass
    if threshold >= end or g_quark == 0.0 or g_dark == 0.0:
        return cross_section, spread
    mass2, mass_width = mediator_mass**2, mediator_mass * width

    # Near the pole Q^2 = M^2 + M Gamma sinh(y): a bell of unit width in y, with tails that stay resolved however narrow
    # the mediator. A heavy mediator is produced far below its mass as well: below M/sqrt(2) the variable is ln Q.
    # Columns: whether in ln Q, from, to, whether the pair threshold (a power of the velocity) is the lower end.
    pieces = np.zeros((3, 4))
    count = 0
    split = math.sqrt(0.5) * mediator_mass
    if threshold < min(split, end):
        pieces[count] = (1.0, math.log(max(threshold, 2e-4 * split)), math.log(min(split, end)), 1.0)
        count += 1
    if end > split:
        low = math.asinh((max(threshold, split) ** 2 - mass2) / mass_width)
        high = math.asinh((end**2 - mass2) / mass_width)
        from_threshold = 1.0 if threshold >= split else 0.0
        if low < -2.0 and high > 2.0:
            pieces[count] = (0.0, low, 0.0, from_threshold)
            pieces[count + 1] = (0.0, 0.0, high, 0.0)
            count += 2
        else:
            pieces[count] = (0.0, low, high, from_threshold)
            count += 1

    last = log_bins.shape[0] - 1
    for piece in range(count):
        in_log, low, high, from_threshold = pieces[piece]
        for node, weight in zip(_NODES, _WEIGHTS):  # noqa: B905 - compiled code knows no `strict`
            # Quadratic stretching removes the square root at the threshold.
            place = low + (high - low) * (node**2 if from_threshold > 0.0 else node)
            measure = (high - low) * weight * (2.0 * node if from_threshold > 0.0 else 1.0)
            if in_log > 0.0:
                virtuality = math.exp(place)
                measure *= 2.0 * virtuality**2 / ((virtuality**2 - mass2) ** 2 + mass_width**2)
            else:
                virtuality = math.sqrt(mass2 + mass_width * math.sinh(place))
                measure /= mass_width * math.cosh(place)
            if axial:
                partial = axial_width(virtuality, dark_mass, g_dark)
            else:
                partial = vector_width(virtuality, dark_mass, g_dark)
            measure *= g_quark**2 * virtuality * partial / math.pi
            position = math.asinh(virtuality / VIRTUALITY_SCALE)
            cell = min(int(position / step), last)
            x = position - cell * step
            for index in range(n_bins):
                c = log_bins[cell, index]
                rate = measure * math.exp(((c[0] * x + c[1]) * x + c[2]) * x + c[3])
                cross_section[index] += rate
                c = envelope[cell, index]
                spread[index] += rate * (((c[0] * x + c[1]) * x + c[2]) * x + c[3])
    for index in range(n_bins):
        if cross_section[index] > 0.0:
            spread[index] /= cross_section[index]
    return cross_section, spread
