"""From true photon energies to the telescope's energy bins."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from scanfit.priors import FloatArray

from .spectra import LINE_PHOTONS, PhotonTable

_REACH = 5.0
"""How many standard deviations a photon may stray into an energy bin."""
_FINEST = 0.02
"""Smallest relative resolution that true bins follow; below it photons are still moved, but in steps of this size."""


@dataclass(frozen=True)
class EnergyResponse:
    """Probability that a photon of some true energy lands in each energy bin.

    Parameters
    ----------
    edges : ndarray, shape (n_bins + 1,)
        Edges of the observed bins in GeV.
    true_edges : ndarray, shape (n_true + 1,)
        Edges of the bins in true energy, GeV.
    matrix : ndarray, shape (n_bins, n_true)
        Probabilities; columns sum to at most one.
    resolution : float or None
        Relative standard deviation of the measured energy; None where only the matrix is known.
    """

    edges: FloatArray
    true_edges: FloatArray
    matrix: FloatArray
    resolution: float | None

    def photons(self, table: PhotonTable, weights: FloatArray, line_weight: float, mass: float) -> FloatArray:
        """Photons per annihilation in each observed bin, summed over final states.

        Parameters
        ----------
        table : PhotonTable
            Continuous spectra.
        weights : ndarray, shape (n_channels,)
            Weights of the table's channels.
        line_weight : float
            Weight of annihilation into two photons.
        mass : float
            GeV.

        Returns
        -------
        ndarray, shape (n_bins,)
        """
        above = table.photons_above(weights, mass, self.true_edges)
        counts = self.matrix @ (above[:-1] - above[1:])
        if line_weight > 0.0:
            counts = counts + LINE_PHOTONS * line_weight * self.line(mass)
        return counts

    def line(self, energy: float) -> FloatArray:
        """Distribution over the observed bins of a photon of `energy` (GeV), shape (n_bins,)."""
        if self.resolution is None:
            column = int(np.searchsorted(self.true_edges, energy, side="right")) - 1
            inside = 0 <= column < self.matrix.shape[1]
            return self.matrix[:, column] if inside else np.zeros(self.edges.size - 1)
        if self.resolution == 0.0:
            return np.diff(np.where(self.edges > energy, 1.0, 0.0))
        return np.diff(ndtr((self.edges / energy - 1.0) / self.resolution))


def normal_response(edges: FloatArray, resolution: float) -> EnergyResponse:
    """Normal smearing with a constant relative standard deviation.

    True bins are a third of the resolution wide, and photons are spread evenly in ln E within each; three-point Gauss
    averages over it. The spectrum varies little over such a bin, so the smearing is exact to a few 1e-4.
    """
    if resolution == 0.0:
        return EnergyResponse(edges, edges, np.eye(edges.size - 1), 0.0)
    low = math.log(edges[0] / (1.0 + _REACH * resolution))
    high = math.log(edges[-1] / max(1.0 - _REACH * resolution, 0.2))
    count = math.ceil((high - low) / (max(resolution, _FINEST) / 3.0))
    true_edges = np.exp(np.linspace(low, high, count + 1))
    nodes, node_weights = np.polynomial.legendre.leggauss(3)
    matrix = np.zeros((edges.size - 1, count))
    middle = 0.5 * (np.log(true_edges[1:]) + np.log(true_edges[:-1]))
    half = 0.5 * (high - low) / count
    for node, weight in zip(nodes, node_weights, strict=True):
        energy = np.exp(middle + half * node)
        matrix += 0.5 * weight * np.diff(ndtr((edges[:, None] / energy - 1.0) / resolution), axis=0)
    return EnergyResponse(edges, true_edges, matrix, resolution)
