"""What a model predicts: the particle, how it annihilates, scatters and is produced.

A `Candidate` is the only thing that passes between models and terms. What several terms need (the relic abundance above
all) is computed once, on first use. Masses and widths are in GeV, cross sections in cm^2 or GeV^-2 as named.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import ClassVar, Final, Literal, NamedTuple, Self

import numpy as np
from pydantic import model_validator

from scanfit.contracts import Detail, Quantity
from scanfit.priors import Fixed, FloatArray
from scanfit.space import Parameter
from scanfit.validation import Options

from .constants import GEV_M2_TO_CM2, GEV_M2_TO_CM3_S, NEUTRON_MASS, OMEGA_H2_OBSERVED, PROTON_MASS
from .relic_abundance.degrees_of_freedom import EquationOfState
from .relic_abundance.freeze_out import FreezeOut, freeze_out
from .relic_abundance.plasma import Blend, other_source
from .relic_abundance.thermal_detail import thermal_detail

CHANNELS: Final = (
    "uu", "dd", "ss", "cc", "bb", "tt", "ee", "mumu", "tautau", "nunu", "gg", "WW", "ZZ", "hh", "Zh", "gammagamma",
    "dark",
)  # fmt: skip
"""Names of two-body final states, the same in every model and term. "dark" is anything invisible and long-lived."""

DWARF_VELOCITY: Final = 5.0e-5
"""Relative velocity (c = 1) at which dwarf satellites annihilate: about 15 km/s."""


class CosmologyOptions(Options):
    """Keys that every dark-matter model takes in ``[model]`` besides its own."""

    underabundant: Literal["scale", "assume-all"] = "scale"
    """Whether signals scale with the candidate's fraction f of the dark matter: rates f, annihilation f^2."""
    equation_of_state: EquationOfState = "arxiv-1803.01038"
    """Source of the primordial degrees of freedom; see `relic_abundance.degrees_of_freedom`."""
    equation_of_state_alternative: EquationOfState | None = None
    """Source towards which the nuisance `equation_of_state_shift` moves; by default the next one in the list."""
    omega_h2_observed: float = OMEGA_H2_OBSERVED

    @model_validator(mode="after")
    def _two_sources(self) -> Self:
        if self.equation_of_state_alternative == self.equation_of_state:
            raise ValueError("equation_of_state_alternative must differ from equation_of_state")
        return self

    def plasma(self, shift: float) -> str | Blend:
        """Degrees of freedom with a share `shift` of the alternative source."""
        if shift == 0.0:
            return self.equation_of_state
        second = self.equation_of_state_alternative or other_source(self.equation_of_state)
        return Blend(self.equation_of_state, second, shift)


EQUATION_OF_STATE_SHIFT: Final = Parameter(
    "equation_of_state_shift",
    "",
    r"t_\mathrm{eos}",
    Fixed(value=0.0),
    kind="nuisance",
    description="share of the alternative source of degrees of freedom: 0 is the chosen source, 1 the alternative",
)
"""Nuisance that every model may declare and hand on to its `Candidate`; fixed to 0 unless the run file frees it."""


@dataclass(frozen=True)
class Annihilation:
    """Annihilation into two-body final states.

    Parameters
    ----------
    channels : tuple of str
        Names from `CHANNELS`.
    sigma_v : callable
        Takes s in GeV^2, shape (n,), all >= 4 m^2, ascending or not; returns sigma v_rel in GeV^-2, shape
        (len(channels), n), with v_rel = 2 sqrt(1 - 4 m^2/s). For a Dirac particle this is particle on antiparticle,
        without the factor 1/2 of the number-density equation. Finite at s = 4 m^2.
    total : callable
        Sum of `sigma_v` over channels, shape (n,); a separate kernel because the relic abundance lives on it.
    poles : tuple of (mass, width)
        s-channel resonances, both in GeV.
    thresholds : tuple of float
        Values of sqrt(s) in GeV at which a channel opens (those above 2 m matter).
    """

    channels: tuple[str, ...]
    sigma_v: Callable[[FloatArray], FloatArray]
    total: Callable[[FloatArray], FloatArray]
    poles: tuple[tuple[float, float], ...] = ()
    thresholds: tuple[float, ...] = ()


@dataclass(frozen=True)
class SuppressedCouplings:
    """Couplings to nucleons whose amplitude vanishes with the momentum transfer q or the velocity v across it (c = 1).

    `f` multiplies nucleons coherently, `a` multiplies their spins, as in `NucleonCouplings`: the amplitude f there is
    replaced by f_momentum q, f_velocity v, and a by a_momentum q, a_momentum_squared q^2 or a_velocity v. So scalar
    interactions with a pseudoscalar dark current give f_momentum, the reverse gives a_momentum, pseudoscalars on both
    sides give a_momentum_squared, and an axial dark current on vector nucleons gives f_velocity. Rates add without
    interference. The nuclear form factors are those of the unsuppressed interactions: for `a_momentum` and
    `a_momentum_squared`, where only the spin along q counts, that is good to a factor of order one (one third of the
    squared spin at small q is for the model to put into the coupling).

    Momentum in GeV: `*_momentum` are in GeV^-3, `*_momentum_squared` in GeV^-4, `*_velocity` in GeV^-2.
    """

    f_momentum_proton: float = 0.0
    f_momentum_neutron: float = 0.0
    f_velocity_proton: float = 0.0
    f_velocity_neutron: float = 0.0
    a_momentum_proton: float = 0.0
    a_momentum_neutron: float = 0.0
    a_momentum_squared_proton: float = 0.0
    a_momentum_squared_neutron: float = 0.0
    a_velocity_proton: float = 0.0
    a_velocity_neutron: float = 0.0


@dataclass(frozen=True)
class NucleonCouplings:
    """Effective contact couplings to nucleons in GeV^-2, signs kept.

    Cross sections at zero momentum transfer are sigma_SI = 4 mu^2 f^2/pi and sigma_SD = 12 mu^2 a^2/pi. `suppressed`
    holds interactions that vanish there, if the model has any.
    """

    f_proton: float = 0.0
    f_neutron: float = 0.0
    a_proton: float = 0.0
    a_neutron: float = 0.0
    suppressed: SuppressedCouplings | None = None


class Current(NamedTuple):
    """Couplings of a spin-one mediator to either vector or axial currents."""

    axial: bool
    g_quark: float
    g_dark: float
    g_lepton: float


@dataclass(frozen=True)
class SpinOneMediator:
    """A spin-one mediator with universal couplings; all decay widths follow from it (`mediator_widths`).

    The last three are couplings of the other kind, axial beside vector or vector beside axial; zero when it is pure.
    """

    mass: float
    width: float
    coupling: Literal["vector", "axial"]
    g_quark: float
    g_dark: float
    g_lepton: float
    other_g_quark: float = 0.0
    other_g_dark: float = 0.0
    other_g_lepton: float = 0.0

    @property
    def currents(self) -> tuple[Current, ...]:
        """The vector and the axial current, as far as they couple to anything; at least one."""
        axial = self.coupling == "axial"
        first = Current(axial, self.g_quark, self.g_dark, self.g_lepton)
        other = Current(not axial, self.other_g_quark, self.other_g_dark, self.other_g_lepton)
        return (first, other) if any(other[1:]) else (first,)

    @property
    def g_quark_squared(self) -> float:
        """What production from massless quarks is proportional to: g_V^2 + g_A^2."""
        return self.g_quark**2 + self.other_g_quark**2

    @property
    def g_neutrino(self) -> float:
        """Coupling of left-handed neutrinos, g_V - g_A of the leptons; its sign does not matter here."""
        return self.g_lepton - self.other_g_lepton


@dataclass(frozen=True)
class Candidate:
    """A dark-matter particle and its interactions at one point of parameter space.

    Parameters
    ----------
    mass : float
        GeV.
    self_conjugate : bool
        Whether the particle is its own antiparticle.
    spin_degrees_of_freedom : int
        Of the particle alone: 1 real scalar, 2 Majorana or Dirac, 3 real vector.
    annihilation : Annihilation
        Into everything that the relic abundance counts.
    nucleon : NucleonCouplings or None
        None when the model says nothing about scattering.
    mediator : SpinOneMediator or None
        What a collider would produce.
    higgs_invisible_width : float or None
        Partial width of the Higgs boson into the dark sector in GeV; None when the model leaves the Higgs boson alone.
    cosmology : CosmologyOptions
        Treatment of the abundance.
    equation_of_state_shift : float
        See `EQUATION_OF_STATE_SHIFT`.
    own_flags : mapping
        The model's validity flags.
    own_quantities : mapping
        The model's further derived quantities.
    """

    mass: float
    self_conjugate: bool
    spin_degrees_of_freedom: int
    annihilation: Annihilation
    nucleon: NucleonCouplings | None = None
    mediator: SpinOneMediator | None = None
    higgs_invisible_width: float | None = None
    cosmology: CosmologyOptions = field(default_factory=CosmologyOptions)
    equation_of_state_shift: float = 0.0
    own_flags: Mapping[str, bool] = field(default_factory=dict)
    own_quantities: Mapping[str, float] = field(default_factory=dict)

    details: ClassVar[Mapping[str, str]] = {
        "thermal": "freeze-out: temperature, yield and thermal average against x, and the spread of published plasmas"
    }

    @cached_property
    def relic(self) -> FreezeOut:
        """Freeze-out solution, with its flags."""
        return freeze_out(
            mass=self.mass,
            degrees_of_freedom=self.spin_degrees_of_freedom,
            self_conjugate=self.self_conjugate,
            annihilation=self.annihilation,
            equation_of_state=self.cosmology.plasma(self.equation_of_state_shift),
        )

    @property
    def omega_h2(self) -> float:
        """Relic abundance of particles and antiparticles together."""
        return self.relic.omega_h2

    @cached_property
    def dm_fraction(self) -> float:
        """Fraction of the dark matter, by which rates scale (annihilation by its square)."""
        if self.cosmology.underabundant == "assume-all":
            return 1.0
        return min(1.0, self.omega_h2 / self.cosmology.omega_h2_observed)

    @cached_property
    def sigma_v_channels(self) -> FloatArray:
        """Cross section times velocity today by channel, cm^3/s, shape (n_channels,), at `DWARF_VELOCITY`."""
        s = 4.0 * self.mass**2 / (1.0 - 0.25 * DWARF_VELOCITY**2)
        return self.annihilation.sigma_v(np.array([s]))[:, 0] * GEV_M2_TO_CM3_S

    @property
    def sigma_v_today(self) -> float:
        """Total cross section times velocity today, cm^3/s, without any rescaling."""
        return float(self.sigma_v_channels.sum())

    def nucleon_cross_sections(self) -> dict[str, float]:
        """Zero-momentum cross sections on nucleons in cm^2; NaN when the model does not predict them."""
        if self.nucleon is None:
            return dict.fromkeys(
                ("sigma_si_proton", "sigma_si_neutron", "sigma_sd_proton", "sigma_sd_neutron"), math.nan
            )
        mu_proton = self.mass * PROTON_MASS / (self.mass + PROTON_MASS)
        mu_neutron = self.mass * NEUTRON_MASS / (self.mass + NEUTRON_MASS)
        scale = GEV_M2_TO_CM2 / math.pi
        return {
            "sigma_si_proton": 4.0 * scale * (mu_proton * self.nucleon.f_proton) ** 2,
            "sigma_si_neutron": 4.0 * scale * (mu_neutron * self.nucleon.f_neutron) ** 2,
            "sigma_sd_proton": 12.0 * scale * (mu_proton * self.nucleon.a_proton) ** 2,
            "sigma_sd_neutron": 12.0 * scale * (mu_neutron * self.nucleon.a_neutron) ** 2,
        }

    def derived(self) -> dict[str, float]:
        """Values of `QUANTITIES` and of the model's own quantities."""
        return {
            "omega_h2": self.omega_h2,
            "dm_fraction": self.dm_fraction,
            **self.nucleon_cross_sections(),
            "sigma_v_today": self.sigma_v_today,
            **self.own_quantities,
        }

    def flags(self) -> dict[str, bool]:
        """Validity flags of the relic abundance and of the model."""
        return {**self.relic.flags, **self.own_flags}

    def detail(self, name: str) -> Detail:
        """Work out one of `details`; see `scanfit.contracts.Detailed`."""
        if name != "thermal":
            raise KeyError(name)
        return thermal_detail(self)


QUANTITIES: Final = (
    Quantity("omega_h2", "", r"\Omega h^2", "relic abundance"),
    Quantity("dm_fraction", "", r"f_\mathrm{DM}", "fraction of the dark matter that scales the signals"),
    Quantity("sigma_si_proton", "cm²", r"\sigma^\mathrm{SI}_p", "spin-independent cross section on protons"),
    Quantity("sigma_si_neutron", "cm²", r"\sigma^\mathrm{SI}_n", "spin-independent cross section on neutrons"),
    Quantity("sigma_sd_proton", "cm²", r"\sigma^\mathrm{SD}_p", "spin-dependent cross section on protons"),
    Quantity("sigma_sd_neutron", "cm²", r"\sigma^\mathrm{SD}_n", "spin-dependent cross section on neutrons"),
    Quantity("sigma_v_today", "cm³/s", r"\langle\sigma v\rangle_0", "annihilation cross section times velocity today"),
)
"""Derived quantities that every dark-matter model has."""
