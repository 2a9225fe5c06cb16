"""Dirac dark matter with a spin-one mediator to quarks and leptons: the usual simplified model (arXiv:1507.00966).

Couplings are universal: one for six quarks, one for dark matter, one for three lepton doublets (arXiv:1703.05703), all
vector or all axial. Neutrinos carry the coupling of the charged leptons but are left-handed only.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping
from typing import Final, Literal

import numpy as np

from scanfit.contracts import BuildContext, Model, Quantity
from scanfit.errors import PointError
from scanfit.priors import Fixed
from scanfit.space import Parameter

from ..candidate import (
    DWARF_VELOCITY,
    EQUATION_OF_STATE_SHIFT,
    QUANTITIES,
    Annihilation,
    Candidate,
    CosmologyOptions,
    NucleonCouplings,
    SpinOneMediator,
)
from ..constants import TAU_MASS, TOP_MASS
from ..mediator_widths import FERMION_CHANNELS, FERMION_MASSES, spin_one_widths
from ..nucleon_elements import AXIAL_CHARGES, axial_couplings
from ..relic_abundance.freeze_out import RELIC_FLAGS
from .spin_one_annihilation import mediator_pairs, spin_one_by_channel, spin_one_total

_FIXED_THRESHOLDS: Final = tuple(sorted(2.0 * float(mass) for mass in FERMION_MASSES if mass > 0.0))
_LARGEST_COUPLING: Final = math.sqrt(4.0 * math.pi)
_HADRONIC_SCALE: Final = 2.0
_BROAD: Final = 0.3

_MODEL_PARAMETERS: Final[tuple[Parameter, ...]] = (
    Parameter("mass", "GeV", r"m_\chi", description="dark-matter mass"),
    Parameter("mediator_mass", "GeV", "M", description="mediator mass"),
    Parameter("g_quark", "", "g_q", description="coupling of the mediator to every quark"),
    Parameter("g_dark", "", r"g_\chi", description="coupling of the mediator to dark matter"),
    Parameter("g_lepton", "", r"g_\ell", Fixed(value=0.0), description="coupling of the mediator to every lepton"),
    EQUATION_OF_STATE_SHIFT,
)


class SpinOneMediatorModel(Model[Candidate]):
    """Dirac dark matter, spin-one mediator, universal vector or axial couplings."""

    class Options(CosmologyOptions):
        """Keys of ``[model]``."""

        coupling: Literal["vector", "axial"] = "vector"

    name = "spin-one-mediator"
    summary = "Dirac dark matter that talks to quarks and leptons through a vector or axial-vector mediator"
    parameters = _MODEL_PARAMETERS
    quantities = (
        *QUANTITIES,
        Quantity("mediator_width_ratio", "", r"\Gamma/M", "total width of the mediator over its mass"),
        Quantity(
            "branching_invisible",
            "",
            r"\mathrm{BR}_\mathrm{inv}",
            "branching fraction of the mediator into dark matter and neutrinos",
            scale="linear",
        ),
    )
    flag_names = {
        **RELIC_FLAGS,
        "strong_coupling": "a coupling exceeds the square root of 4 pi: perturbation theory fails",
        "broad_mediator": "the mediator is wider than 0.3 of its mass: a Breit-Wigner with a fixed width is a guess",
        "axial_unitarity": "a fermion is too heavy for the axial mediator, m_f > sqrt(pi/2) M/g_f: perturbative "
        "unitarity fails unless further particles appear (arXiv:1510.02110)",
        "mediator_pairs": "more than a tenth of today's annihilation goes into mediator pairs, whose four decay "
        "products are treated as two of twice the energy",
        "long_range_force": "the mediator is lighter than g_dark^2/(4 pi) times the dark-matter mass: Sommerfeld "
        "enhancement and bound states are neglected",
        "hadronic_regime": "the mediator or the annihilating pair is lighter than 2 GeV, where hadrons should replace "
        "free quarks",
    }

    def __init__(self, options: Options, context: BuildContext) -> None:
        self._options = options
        self._axial = options.coupling == "axial"
        if self._axial:
            self.parameters = (*_MODEL_PARAMETERS, *AXIAL_CHARGES)

    def predict(self, values: Mapping[str, float]) -> Candidate:
        """Predict widths, annihilation and scattering; see `scanfit.contracts.Model.predict`."""
        mass, mediator_mass = float(values["mass"]), float(values["mediator_mass"])
        g_quark, g_dark, g_lepton = float(values["g_quark"]), float(values["g_dark"]), float(values["g_lepton"])
        if not (mass > 0.0 and mediator_mass > 0.0):
            raise PointError("dark matter and mediator need positive masses")
        if g_dark == 0.0 or (g_quark == 0.0 and g_lepton == 0.0):
            raise PointError("without couplings on both sides dark matter never meets the thermal bath")

        widths = spin_one_widths(mediator_mass, self._axial, mass, g_dark, g_quark, g_lepton)
        width, visible = float(widths.sum()), widths[:-1]
        visible_width = float(visible.sum())
        if visible_width == 0.0:
            raise PointError("the mediator is too light to decay into anything that it couples to")
        mediator = SpinOneMediator(mediator_mass, width, self._options.coupling, g_quark, g_dark, g_lepton)
        couplings = (mass, mediator_mass, width, g_dark, g_quark, g_lepton, self._axial)
        annihilation = Annihilation(
            channels=FERMION_CHANNELS,
            sigma_v=functools.partial(spin_one_by_channel, *couplings, visible / visible_width),
            total=functools.partial(spin_one_total, *couplings),
            poles=((mediator_mass, width),),
            thresholds=(*_FIXED_THRESHOLDS, 2.0 * mediator_mass),
        )
        return Candidate(
            mass=mass,
            self_conjugate=False,
            spin_degrees_of_freedom=2,
            annihilation=annihilation,
            nucleon=self._nucleon_couplings(values, g_dark * g_quark / mediator_mass**2),
            mediator=mediator,
            cosmology=self._options,
            equation_of_state_shift=float(values.get("equation_of_state_shift", 0.0)),
            own_flags=self._flags(mediator, mass, annihilation),
            own_quantities={
                "mediator_width_ratio": width / mediator_mass,
                "branching_invisible": float(widths[-1] + widths[-2]) / width,
            },
        )

    def _nucleon_couplings(self, values: Mapping[str, float], contact: float) -> NucleonCouplings:
        """Contact couplings from ``contact`` (chi Gamma chi)(q Gamma q), with `contact` in GeV^-2.

        The vector current counts three quarks in either nucleon, and a Dirac particle scatters with
        sigma_SI = mu^2 (3 contact)^2/pi; the axial current counts spin, sigma_SD = 3 mu^2 (contact sum Delta_q)^2/pi.
        In the convention of `NucleonCouplings` either one brings a factor 1/2.
        """
        if not self._axial:
            return NucleonCouplings(f_proton=1.5 * contact, f_neutron=1.5 * contact)
        proton, neutron = axial_couplings(values, 0.5 * contact, 0.5 * contact, 0.5 * contact)
        return NucleonCouplings(a_proton=proton, a_neutron=neutron)

    def _flags(self, mediator: SpinOneMediator, mass: float, annihilation: Annihilation) -> dict[str, bool]:
        couplings = (abs(mediator.g_dark), abs(mediator.g_quark), abs(mediator.g_lepton))
        s_today = 4.0 * mass**2 / (1.0 - 0.25 * DWARF_VELOCITY**2)
        pairs = mediator_pairs(s_today, mass, mediator.mass, mediator.g_dark, self._axial)
        heaviest = zip(couplings, (mass, TOP_MASS, TAU_MASS), strict=True)
        return {
            "strong_coupling": max(couplings) > _LARGEST_COUPLING,
            "broad_mediator": mediator.width > _BROAD * mediator.mass,
            "axial_unitarity": self._axial
            and max(coupling * fermion for coupling, fermion in heaviest) > math.sqrt(0.5 * math.pi) * mediator.mass,
            "mediator_pairs": pairs > 0.0 and pairs > 0.1 * float(annihilation.total(np.array([s_today]))[0]),
            "long_range_force": mediator.mass < mediator.g_dark**2 / (4.0 * math.pi) * mass,
            "hadronic_regime": min(mediator.mass, 2.0 * mass) < _HADRONIC_SCALE,
        }
