"""A real scalar singlet that couples to the Standard Model through the Higgs boson alone (arXiv:1306.4710).

The Lagrangian adds -(1/2) mu^2 S^2 - (1/2) lambda S^2 |H|^2 with an unbroken symmetry S -> -S; then
m_S^2 = mu^2 + lambda v^2/2, and `mass` = m_S, `portal` = lambda.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping
from typing import Final, Literal

from scanfit.contracts import BuildContext, Model, Quantity
from scanfit.errors import PointError
from scanfit.space import Parameter

from ..candidate import (
    EQUATION_OF_STATE_SHIFT,
    QUANTITIES,
    Annihilation,
    Candidate,
    CosmologyOptions,
    NucleonCouplings,
)
from ..constants import HIGGS_MASS, HIGGS_VEV, NEUTRON_MASS, PROTON_MASS, TAU_MASS, TOP_MASS, W_MASS, Z_MASS
from ..higgs_width import (
    BOTTOM_POLE_MASS,
    CHARM_POLE_MASS,
    LOWEST_VIRTUALITY,
    TREE_LEVEL_FROM,
    higgs_width_on_shell,
    higgs_width_table,
)
from ..nucleon_elements import HIGGS_NUCLEON_COUPLING, SIGMA_TERMS, higgs_nucleon_coupling
from ..relic_abundance.freeze_out import RELIC_FLAGS
from .higgs_portal_annihilation import PORTAL_CHANNELS, portal_by_channel, portal_total

# Where the cross section has a kink: pair thresholds and the end of the tabulated width.
_THRESHOLDS: Final = tuple(
    sorted(
        [2.0 * mass for mass in (CHARM_POLE_MASS, TAU_MASS, BOTTOM_POLE_MASS, W_MASS, Z_MASS, HIGGS_MASS, TOP_MASS)]
        + [TREE_LEVEL_FROM]
    )
)
_QUARKONIUM_END: Final = 12.0


def higgs_to_singlets_width(mass: float, portal: float) -> float:
    """Width of the Higgs boson into two singlets of the given mass (GeV), GeV; zero above half the Higgs mass."""
    square = 1.0 - 4.0 * (mass / HIGGS_MASS) ** 2
    if square <= 0.0:
        return 0.0
    width: float = (portal * HIGGS_VEV) ** 2 / (32.0 * math.pi * HIGGS_MASS) * math.sqrt(square)
    return width


class ScalarSinglet(Model[Candidate]):
    """Real scalar dark matter with a Higgs portal."""

    class Options(CosmologyOptions):
        """Keys of ``[model]``."""

        nucleon: Literal["higgs-coupling", "sigma-terms"] = "higgs-coupling"
        """Nuisances behind the scattering on nucleons: f_N itself, or the sigma terms that it follows from."""

    name = "scalar-singlet"
    summary = "real scalar dark matter that talks to the Standard Model through the Higgs boson"
    parameters: tuple[Parameter, ...] = (
        Parameter("mass", "GeV", "m_S", description="mass of the singlet, 2 GeV or more"),
        Parameter("portal", "", r"\lambda", description="coupling to the Higgs field, (1/2) lambda S^2 |H|^2"),
        HIGGS_NUCLEON_COUPLING,
        EQUATION_OF_STATE_SHIFT,
    )
    quantities = (
        *QUANTITIES,
        Quantity(
            "branching_higgs_invisible",
            "",
            r"\mathrm{BR}(h \to SS)",
            "branching fraction of the Higgs boson into singlets",
        ),
    )
    flag_names = {
        **RELIC_FLAGS,
        "strong_coupling": "the portal coupling exceeds 4 pi: perturbation theory fails",
        "negative_bare_mass": "portal v^2/2 exceeds the squared mass: the bare mass squared is negative, and the "
        "vacuum without a singlet condensate must be checked for stability",
        "hadronic_regime": "the pair annihilates below 12 GeV, where quarkonia and hadrons matter",
    }

    def __init__(self, options: Options, context: BuildContext) -> None:
        self._options = options
        self._table = higgs_width_table()
        self._width = higgs_width_on_shell()
        if options.nucleon == "sigma-terms":
            self.parameters = (*(p for p in self.parameters if p is not HIGGS_NUCLEON_COUPLING), *SIGMA_TERMS)

    def predict(self, values: Mapping[str, float]) -> Candidate:
        """Predict widths, annihilation and scattering; see `scanfit.contracts.Model.predict`."""
        mass, portal = float(values["mass"]), float(values["portal"])
        if not 2.0 * mass >= LOWEST_VIRTUALITY:
            raise PointError(f"the singlet must weigh at least {0.5 * LOWEST_VIRTUALITY:g} GeV")
        if portal == 0.0:
            raise PointError("without a portal coupling the singlet never meets the thermal bath")

        invisible = higgs_to_singlets_width(mass, portal)
        width = self._width + invisible
        couplings = (mass, portal, width, self._table)
        contact = portal * higgs_nucleon_coupling(values) / (4.0 * HIGGS_MASS**2 * mass)
        return Candidate(
            mass=mass,
            self_conjugate=True,
            spin_degrees_of_freedom=1,
            annihilation=Annihilation(
                channels=PORTAL_CHANNELS,
                sigma_v=functools.partial(portal_by_channel, *couplings),
                total=functools.partial(portal_total, *couplings),
                poles=((HIGGS_MASS, width),),
                thresholds=_THRESHOLDS,
            ),
            # sigma_SI = portal^2 f_N^2 mu^2 m_N^2/(4 pi m_h^4 m_S^2)
            nucleon=NucleonCouplings(f_proton=contact * PROTON_MASS, f_neutron=contact * NEUTRON_MASS),
            higgs_invisible_width=invisible,
            cosmology=self._options,
            equation_of_state_shift=float(values.get("equation_of_state_shift", 0.0)),
            own_flags={
                "strong_coupling": abs(portal) > 4.0 * math.pi,
                "negative_bare_mass": 0.5 * portal * HIGGS_VEV**2 > mass**2,
                "hadronic_regime": 2.0 * mass < _QUARKONIUM_END,
            },
            own_quantities={"branching_higgs_invisible": invisible / width},
        )
