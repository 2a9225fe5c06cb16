"""Make the signal tables of a spin-one mediator recoiling against one jet or photon at a proton-proton collider.

    python -m scanfit.likelihoods.tables.make_mono_jet [--recoil jet|photon] [--sqrt-s 13.0] [--rapidity 2.4] FILE.npz

Needs the optional extra ``tables``; nothing here is imported at run time. About 20 seconds on one core.

What is tabulated is the leading-order cross section in pb, at unit quark coupling, of ``p p -> V + jet`` with V on its
mass shell at virtuality Q and transverse momentum (at this order the missing momentum) above a cut. Vector and axial
couplings to massless quarks give the same rate. The partonic rates are the textbook ones for a massive photon (for
example Ellis, Stirling & Webber, "QCD and Collider Physics", chapter 9; formulas from memory, re-derived by crossing),
with e_q^2 alpha -> g^2/(4 pi):

    q qbar -> V g :     d sigma/dt = (8/9) (g^2/4) alpha_s/s^2 (t^2 + u^2 + 2 s Q^2)/(t u)
    q g -> V q :        d sigma/dt = (1/3) (g^2/4) alpha_s/s^2 (s^2 + t^2 + 2 u Q^2)/(-s t),  t = (p_q - p_V)^2
    q qbar -> V gamma : d sigma/dt = (2/3) (g^2/4) alpha e_q^2/s^2 (t^2 + u^2 + 2 s Q^2)/(t u)

Parton densities are the NNPDF2.3 leading-order set with alpha_s(M_Z) = 0.130 that the wheel ships. Nominal scales are
mu_R^2 = pT sqrt(pT^2 + Q^2) and mu_F = pT; copies with both halved, both doubled, and with mu_R = mu_F =
(pT + sqrt(pT^2 + Q^2))/2 are stored beside the nominal one: they measure the uncertainty of the leading order.
"""

from __future__ import annotations

import argparse
import datetime
import importlib.metadata
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any, Final, Literal

import numpy as np
from scipy.interpolate import CubicSpline, RectBivariateSpline

from scanfit.priors import FloatArray

from ..constants import FINE_STRUCTURE, GEV_M2_TO_PB, Z_MASS
from ..mono_x.signal import VIRTUALITY_SCALE, checksum

Recoil = Literal["jet", "photon"]
Scales = Callable[[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]

ALPHA_S_MZ: Final = 0.130
"""Value with which the parton densities were fitted; one loop, five flavours."""
UP_TYPE: Final = (2, 4)
DOWN_TYPE: Final = (1, 3, 5)
GLUON: Final = 21
PARTONS: Final = (1, 2, 3, 4, 5, -1, -2, -3, -4, -5, GLUON)


def half_ht(virtuality: FloatArray, pt: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Both scales at half the scalar sum of transverse masses, squared."""
    scale2 = 0.25 * (np.hypot(virtuality, pt) + pt) ** 2
    return scale2, scale2


def nominal_times(factor: float) -> Scales:
    """Nominal squared scales, renormalisation and factorisation, times factor^2."""

    def scales(virtuality: FloatArray, pt: FloatArray) -> tuple[FloatArray, FloatArray]:
        return factor**2 * pt * np.hypot(virtuality, pt), factor**2 * pt**2

    return scales


SCALE_CHOICES: Final[dict[str, Scales]] = {
    "nominal": nominal_times(1.0),
    "half": nominal_times(0.5),
    "double": nominal_times(2.0),
    "half-ht": half_ht,
}


def alpha_s(scale2: FloatArray) -> FloatArray:
    """One-loop strong coupling with five flavours."""
    slope = (33.0 - 2.0 * 5.0) / (12.0 * np.pi)
    return np.asarray(ALPHA_S_MZ / (1.0 + ALPHA_S_MZ * slope * np.log(scale2 / Z_MASS**2)))


class PartonDensities:
    """x f(x, mu^2) of the proton on a grid, splined; `at` freezes the scale.

    Parameters
    ----------
    smallest_x : float
        Lower end of the grid.
    """

    def __init__(self, smallest_x: float) -> None:
        import pythia8mc

        pythia = pythia8mc.Pythia("", False)
        pythia.readString("Print:quiet = on")
        pythia.readString("ProcessLevel:all = off")
        if not pythia.init():
            raise RuntimeError("the generator did not initialise")
        density = pythia.getPDFPtr(2212)
        # Dense towards x = 1, where heavy mediators live and the densities fall by many orders of magnitude.
        self.log_x = np.log(smallest_x) * np.linspace(1.0, 0.0, 241) ** 2
        self.log_scale2 = np.log(np.geomspace(40.0, 3.0e4, 61) ** 2)
        x = np.minimum(np.exp(self.log_x), 1.0 - 1e-9)
        grids = {
            parton: np.array([[density.xf(parton, xi, np.exp(m)) for m in self.log_scale2] for xi in x])
            for parton in PARTONS
        }
        self._splines = {
            parton: RectBivariateSpline(self.log_x, self.log_scale2, grid, s=0) for parton, grid in grids.items()
        }

    def at(self, scale2: float) -> CubicSpline:
        """Spline in ln x of all partons at one scale; its values have shape (..., len(PARTONS))."""
        columns = [self._splines[parton](self.log_x, np.log(scale2))[:, 0] for parton in PARTONS]
        return CubicSpline(self.log_x, np.column_stack(columns))


def spectrum(
    densities: PartonDensities, recoil: Recoil, sqrt_s: float, rapidity: float, virtuality: float, pt: float
) -> FloatArray:
    """Return d sigma/dpT in pb/GeV, shape (len(SCALE_CHOICES), 2), for up-type and down-type quarks."""
    mt = np.hypot(virtuality, pt)
    nodes, weights = np.polynomial.legendre.leggauss(24)
    # The two beams are alike: the recoil's rapidity needs positive values only.
    y_recoil = (0.5 * rapidity * (nodes + 1.0))[:, None]
    upper = np.log(np.maximum(sqrt_s - pt * np.exp(y_recoil), 1e-30) / mt)
    lower = -np.log(np.maximum(sqrt_s - pt * np.exp(-y_recoil), 1e-30) / mt)
    half = np.maximum(0.5 * (upper - lower), 0.0)
    y_mediator = 0.5 * (upper + lower) + half * nodes
    measure = rapidity * weights[:, None] * half * weights * 2.0 * pt * GEV_M2_TO_PB

    x1 = (mt * np.exp(y_mediator) + pt * np.exp(y_recoil)) / sqrt_s
    x2 = (mt * np.exp(-y_mediator) + pt * np.exp(-y_recoil)) / sqrt_s
    s = x1 * x2 * sqrt_s**2
    t = virtuality**2 - sqrt_s * x1 * mt * np.exp(-y_mediator)
    u = virtuality**2 - sqrt_s * x2 * mt * np.exp(y_mediator)
    annihilation = 0.25 / s**2 * (t * t + u * u + 2.0 * s * virtuality**2) / (t * u)
    compton_1 = 0.25 / s**2 * (s * s + t * t + 2.0 * u * virtuality**2) / (-s * t)
    compton_2 = 0.25 / s**2 * (s * s + u * u + 2.0 * t * virtuality**2) / (-s * u)

    column = {parton: index for index, parton in enumerate(PARTONS)}
    result = np.zeros((len(SCALE_CHOICES), 2))
    for row, scales in enumerate(SCALE_CHOICES.values()):
        renormalisation2, factorisation2 = scales(np.array(virtuality), np.array(pt))
        density = densities.at(float(factorisation2))
        f1, f2 = density(np.log(np.minimum(x1, 1.0))), density(np.log(np.minimum(x2, 1.0)))
        for kind, (flavours, charge) in enumerate(((UP_TYPE, 2.0 / 3.0), (DOWN_TYPE, -1.0 / 3.0))):
            quark = [column[flavour] for flavour in flavours]
            antiquark = [column[-flavour] for flavour in flavours]
            pairs = (f1[..., quark] * f2[..., antiquark] + f1[..., antiquark] * f2[..., quark]).sum(axis=-1)
            if recoil == "photon":
                rate = 2.0 / 3.0 * FINE_STRUCTURE * charge**2 * pairs * annihilation
            else:
                matter1 = f1[..., quark].sum(axis=-1) + f1[..., antiquark].sum(axis=-1)
                matter2 = f2[..., quark].sum(axis=-1) + f2[..., antiquark].sum(axis=-1)
                gluon1, gluon2 = f1[..., column[GLUON]], f2[..., column[GLUON]]
                rate = 8.0 / 9.0 * pairs * annihilation
                rate = rate + (matter1 * gluon2 * compton_1 + matter2 * gluon1 * compton_2) / 3.0
                rate = rate * alpha_s(renormalisation2)
            result[row, kind] = float((measure * rate).sum())
    return result


def cross_sections(
    densities: PartonDensities, recoil: Recoil, sqrt_s: float, rapidity: float, virtuality: float, cuts: FloatArray
) -> FloatArray:
    """Return sigma(pT > cut) in pb, shape (len(SCALE_CHOICES), len(cuts), 2)."""
    end = 0.999999 * (sqrt_s**2 - virtuality**2) / (2.0 * sqrt_s)
    edges = np.log(np.append(cuts, end))
    result = np.zeros((len(SCALE_CHOICES), len(cuts), 2))
    above = np.zeros((len(SCALE_CHOICES), 2))
    for index in range(len(cuts) - 1, -1, -1):
        nodes, weights = np.polynomial.legendre.leggauss(20 if index == len(cuts) - 1 else 3)
        half = 0.5 * (edges[index + 1] - edges[index])
        for node, weight in zip(nodes, weights, strict=True):
            pt = float(np.exp(edges[index] + half * (1.0 + node)))
            above = above + half * weight * pt * spectrum(densities, recoil, sqrt_s, rapidity, virtuality, pt)
        result[:, index] = above
    return result


def make_table(recoil: Recoil, sqrt_s: float, rapidity: float) -> dict[str, Any]:
    """Return the table's arrays and its metadata, ready for ``numpy.savez_compressed``; `sqrt_s` in GeV."""
    cuts = np.geomspace(100.0, 2000.0, 31)
    # The cross section is flat in Q below the scale and falls as a power above.
    virtuality = VIRTUALITY_SCALE * np.sinh(np.linspace(0.0, np.arcsinh(0.77 * sqrt_s / VIRTUALITY_SCALE), 61))
    densities = PartonDensities(smallest_x=1.0e-4)
    table = np.stack([cross_sections(densities, recoil, sqrt_s, rapidity, float(q), cuts) for q in virtuality], axis=1)
    arrays = {"virtuality": virtuality, "cut": cuts, "cross_section": table}
    metadata = {
        "content": "leading-order cross section in pb at unit quark coupling, [scale, virtuality, cut, up/down]",
        "recoil": recoil,
        "sqrt_s_gev": sqrt_s,
        "recoil_rapidity_below": rapidity,
        "scales": list(SCALE_CHOICES),
        "parton_densities": "NNPDF2.3 QCD+QED LO, alpha_s(MZ) = 0.130, through getPDFPtr(2212).xf",
        "generator": f"pythia8mc {importlib.metadata.version('pythia8mc')}",
        "made": datetime.datetime.now(tz=datetime.UTC).date().isoformat(),
        "sha256": checksum(arrays),
    }
    return {**arrays, "metadata": np.array(json.dumps(metadata))}


def main() -> None:
    """Write one table."""
    parser = argparse.ArgumentParser(description="Make a mono-jet or mono-photon signal table.")
    parser.add_argument("file", type=Path)
    parser.add_argument("--recoil", choices=("jet", "photon"), default="jet")
    parser.add_argument("--sqrt-s", type=float, default=13.0, help="centre-of-mass energy in TeV")
    parser.add_argument("--rapidity", type=float, default=2.4, help="largest |rapidity| of the jet or photon")
    given = parser.parse_args()
    np.savez_compressed(given.file, **make_table(given.recoil, 1000.0 * given.sqrt_s, given.rapidity))


if __name__ == "__main__":
    main()
