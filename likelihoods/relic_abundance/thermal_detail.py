"""The thermal history of one candidate, for people: what `scanfit point --show thermal` tells and draws."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Final

import numpy as np

from scanfit.contracts import Detail, Quantity
from scanfit.priors import FloatArray

from ..constants import GEV_M2_TO_CM3_S
from .degrees_of_freedom import EQUATIONS_OF_STATE
from .freeze_out import freeze_out, thermal_history
from .unitarity import s_wave_bound

if TYPE_CHECKING:
    from ..candidate import Candidate

_SIGMA_V: Final = r"\langle\sigma v\rangle"
_ROUND_X: Final = (1, 2, 5, 10, 12, 14, 16, 18, 20, 22, 24, 26, 28, 30, 35, 40, 50, 70, 100, 300, 1e3, 1e4, 1e5, 1e6)


def thermal_detail(candidate: Candidate) -> Detail:
    """Freeze-out with its numbers, its curves against x = m/T, and the abundance in every published plasma."""
    relic, mass = candidate.relic, candidate.mass
    numbers = [(Quantity("omega_h2", "", r"\Omega h^2", "relic abundance"), relic.omega_h2)]
    notes = [f"The degrees of freedom are those of {candidate.cosmology.equation_of_state}."]
    if candidate.equation_of_state_shift != 0.0:
        plasma = candidate.cosmology.plasma(candidate.equation_of_state_shift)
        notes = [f"The degrees of freedom are blended: {plasma}."]
    if not math.isfinite(relic.omega_h2):
        return Detail("Thermal history", tuple(numbers), notes=("The abundance could not be computed.",))
    bound = s_wave_bound(mass, relic.x_freeze_out) * GEV_M2_TO_CM3_S
    numbers += [
        (Quantity("numerical_error", "", "", "relative, of the method alone"), relic.error),
        (Quantity("x_freeze_out", "", r"x_f", "m/T at which Y = 2.5 Y_eq"), relic.x_freeze_out),
        (Quantity("freeze_out_temperature", "GeV", r"T_f", "m/x_freeze_out"), relic.temperature),
        (Quantity("sigma_v_freeze_out", "cm³/s", _SIGMA_V, "thermal average there"), relic.sigma_v_freeze_out),
        (Quantity("unitarity_bound", "cm³/s", "", "largest thermal average of one s-wave there"), bound),
    ]
    numbers += [(_elsewhere(source), _omega_h2(candidate, source)) for source in EQUATIONS_OF_STATE]
    notes.append("Y = n/s and Y_eq count particles and antiparticles together.")
    if not candidate.self_conjugate:
        notes.append("sigma_v is that of particle on antiparticle; half of it drives the number density.")

    history = thermal_history(
        mass=mass,
        degrees_of_freedom=candidate.spin_degrees_of_freedom,
        self_conjugate=candidate.self_conjugate,
        annihilation=candidate.annihilation,
        equation_of_state=candidate.cosmology.plasma(candidate.equation_of_state_shift),
    )
    curves = (
        (Quantity("x", "", "x = m/T", "mass over temperature"), history.x),
        (Quantity("temperature", "GeV", "T", "of the plasma"), mass / history.x),
        (Quantity("sigma_v", "cm³/s", _SIGMA_V, "thermal average"), history.sigma_v),
        (Quantity("yield", "", "Y", "number density over entropy density"), history.number_yield),
        (Quantity("equilibrium_yield", "", r"Y_\mathrm{eq}", "the same in equilibrium"), history.equilibrium_yield),
    )
    return Detail("Thermal history", tuple(numbers), curves, tuple(notes), _rows_to_print(history.x))


def _rows_to_print(x: FloatArray) -> tuple[int, ...]:
    """Steps nearest to round values of x, closest together where things freeze out."""
    nearest = [int(np.argmin(np.abs(np.log(x / wanted)))) for wanted in _ROUND_X if wanted <= 1.01 * x[-1]]
    return tuple(sorted({*nearest, len(x) - 1}))


def _elsewhere(source: str) -> Quantity:
    return Quantity(f"omega_h2_{source}", "", "", f"relic abundance with the degrees of freedom of {source}")


def _omega_h2(candidate: Candidate, source: str) -> float:
    return freeze_out(
        mass=candidate.mass,
        degrees_of_freedom=candidate.spin_degrees_of_freedom,
        self_conjugate=candidate.self_conjugate,
        annihilation=candidate.annihilation,
        equation_of_state=source,
    ).omega_h2
