"""Make the table of single production of a spin-one mediator at a proton-proton collider.

    python -m scanfit.likelihoods.tables.make_mediator_production [--sqrt-s 13.0] FILE.npz

Needs the optional extra ``tables``; nothing here is imported at run time. About 10 seconds on one core.

What is tabulated is the leading-order cross section in pb of ``q qbar -> V`` on its mass shell at unit quark coupling,

    sigma = (pi/3) g^2/M^2 sum_q int dy [x1 q(x1) x2 qbar(x2) + (1 <-> 2)],   x1,2 = (M/sqrt s) exp(+-y),

which is the spin-one Breit-Wigner cross section with Gamma(V -> q qbar) = N_c g^2 M/(12 pi) in the limit of a narrow
width. Vector and axial couplings to massless quarks give the same rate. Parton densities are those of
`make_mono_jet`, at mu_F = M; copies at M/2 and 2 M are stored beside.
"""

from __future__ import annotations

import argparse
import datetime
import importlib.metadata
import json
from pathlib import Path
from typing import Any, Final

import numpy as np

from scanfit.priors import FloatArray

from ..constants import GEV_M2_TO_PB
from ..mono_x.signal import checksum
from .make_mono_jet import DOWN_TYPE, PARTONS, UP_TYPE, PartonDensities

SCALE_FACTORS: Final[dict[str, float]] = {"nominal": 1.0, "half": 0.5, "double": 2.0}
_LIGHTEST: Final = 80.0
"""GeV: half of it is the lowest factorisation scale of the splined densities."""


def cross_section(densities: PartonDensities, sqrt_s: float, mass: float, factorisation: float) -> FloatArray:
    """Return the cross section in pb at unit coupling, shape (2,), for up-type and down-type quarks."""
    nodes, weights = np.polynomial.legendre.leggauss(96)
    largest = np.log(sqrt_s / mass)
    # Dense towards the ends, where one density falls steeply; the beams are alike, so that half the range is enough.
    y = largest * 0.5 * (nodes + 1.0)
    measure = largest * weights
    log_tau = np.log(mass / sqrt_s)
    density = densities.at(factorisation**2)
    f1, f2 = density(np.minimum(log_tau + y, 0.0)), density(log_tau - y)
    column = {parton: index for index, parton in enumerate(PARTONS)}
    result = np.zeros(2)
    for kind, flavours in enumerate((UP_TYPE, DOWN_TYPE)):
        quark = [column[flavour] for flavour in flavours]
        antiquark = [column[-flavour] for flavour in flavours]
        pairs = (f1[:, quark] * f2[:, antiquark] + f1[:, antiquark] * f2[:, quark]).sum(axis=1)
        result[kind] = np.pi / (3.0 * mass**2) * float(measure @ pairs) * GEV_M2_TO_PB
    return result


def make_table(sqrt_s: float) -> dict[str, Any]:
    """Return the table's arrays and its metadata, ready for ``numpy.savez_compressed``; `sqrt_s` in GeV."""
    # Towards the kinematic end the rate falls by many orders of magnitude: equal steps in ln(M/(sqrt s - M)).
    first, last = (float(np.log(mass / (sqrt_s - mass))) for mass in (_LIGHTEST, 0.77 * sqrt_s))
    odds = np.exp(np.linspace(first, last, 81))
    mass = sqrt_s * odds / (1.0 + odds)
    densities = PartonDensities(smallest_x=1.0e-5)
    table = np.array(
        [
            [cross_section(densities, sqrt_s, float(m), factor * float(m)) for m in mass]
            for factor in SCALE_FACTORS.values()
        ]
    )
    arrays = {"mass": mass, "cross_section": table}
    metadata = {
        "content": "leading-order cross section in pb at unit quark coupling, [scale, mass, up/down]",
        "sqrt_s_gev": sqrt_s,
        "scales": list(SCALE_FACTORS),
        "parton_densities": "NNPDF2.3 QCD+QED LO, alpha_s(MZ) = 0.130, through getPDFPtr(2212).xf",
        "generator": f"pythia8mc {importlib.metadata.version('pythia8mc')}",
        "made": datetime.datetime.now(tz=datetime.UTC).date().isoformat(),
        "sha256": checksum(arrays),
    }
    return {**arrays, "metadata": np.array(json.dumps(metadata))}


def main() -> None:
    """Write one table."""
    parser = argparse.ArgumentParser(description="Make a table of single mediator production.")
    parser.add_argument("file", type=Path)
    parser.add_argument("--sqrt-s", type=float, default=13.0, help="centre-of-mass energy in TeV")
    given = parser.parse_args()
    np.savez_compressed(given.file, **make_table(1000.0 * given.sqrt_s))


if __name__ == "__main__":
    main()
