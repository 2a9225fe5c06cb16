"""Matrix elements of quarks in nucleons, as nuisances that models and terms share by name.

Scalar currents: the coupling of the Higgs boson to a nucleon in units of m_N/v is

    f_N = 2/9 + (7/9) (sigma_piN + sigma_s)/m_N,

with the light and strange sigma terms; the heavy quarks enter through the gluons (Phys. Lett. B 78 (1978) 443). A model
takes either `HIGGS_NUCLEON_COUPLING` or `SIGMA_TERMS`.

Axial currents: `AXIAL_CHARGES` are those of the proton; for the neutron u and d change places. They are fixed unless
the run file frees them; hep-ex/0609039 (from memory) measures 0.842 +- 0.012, -0.427 +- 0.013 and -0.085 +- 0.018.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

from scanfit.priors import Fixed, Normal
from scanfit.space import Parameter

from .constants import NUCLEON_MASS

HIGGS_NUCLEON_COUPLING: Final = Parameter(
    "higgs_nucleon_coupling",
    "",
    "f_N",
    Normal(mean=0.308, sigma=0.018),
    kind="nuisance",
    description="coupling of the Higgs boson to a nucleon in units of m_N/v, arXiv:1708.02245",
)

SIGMA_TERMS: Final = (
    Parameter(
        "sigma_pi_nucleon",
        "MeV",
        r"\sigma_{\pi N}",
        Normal(mean=59.1, sigma=3.5),
        kind="nuisance",
        description="light-quark sigma term, arXiv:1506.04142; lattice averages of 40 to 45 MeV disagree (from memory)",
    ),
    Parameter(
        "sigma_strange",
        "MeV",
        r"\sigma_s",
        Normal(mean=45.0, sigma=10.0),
        kind="nuisance",
        description="strange-quark sigma term; default spans lattice averages (from memory)",
    ),
)

AXIAL_CHARGES: Final = tuple(
    Parameter(
        f"delta_{quark}",
        "",
        rf"\Delta {quark}",
        Fixed(value=value),
        kind="nuisance",
        description=f"axial charge of the proton carried by {quark} quarks (usual value, from memory)",
    )
    for quark, value in (("u", 0.84), ("d", -0.43), ("s", -0.09))
)


def higgs_nucleon_coupling(values: Mapping[str, float]) -> float:
    """Return f_N from the parameter values: as it stands there, or from the sigma terms (MeV)."""
    if HIGGS_NUCLEON_COUPLING.name in values:
        return float(values[HIGGS_NUCLEON_COUPLING.name])
    sigma = 1e-3 * float(values["sigma_pi_nucleon"] + values["sigma_strange"])
    return 2.0 / 9.0 + 7.0 / 9.0 * sigma / NUCLEON_MASS


def axial_couplings(values: Mapping[str, float], up: float, down: float, strange: float) -> tuple[float, float]:
    """Axial couplings to protons and neutrons from those to quarks, in the same unit."""
    delta_u, delta_d, delta_s = (float(values[parameter.name]) for parameter in AXIAL_CHARGES)
    proton = up * delta_u + down * delta_d + strange * delta_s
    neutron = up * delta_d + down * delta_u + strange * delta_s
    return proton, neutron
