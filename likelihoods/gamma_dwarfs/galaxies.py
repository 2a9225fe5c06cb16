"""What is known of targets without their photons, and the nuisances that targets have in common."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import BeforeValidator, Field, PositiveFloat

from scanfit.errors import Problem
from scanfit.priors import FloatArray, Normal, TruncatedNormal
from scanfit.space import Parameter
from scanfit.validation import Options

from ..constants import SPEED_OF_LIGHT_KM_S


def as_array(value: Any) -> Any:
    """One number stands for an array of one."""
    return (value,) if isinstance(value, int | float) and not isinstance(value, bool) else value


Name = Annotated[str, Field(pattern=r"^[A-Za-z_][A-Za-z0-9_]*$")]
JError = Annotated[tuple[PositiveFloat, ...], BeforeValidator(as_array), Field(min_length=1, max_length=2)]


class GalaxyOptions(Options):
    """One target; the keys are explained in `telescope`."""

    name: str = Field(min_length=1)
    log10_j: float = Field(ge=10.0, le=25.0)
    log10_j_error: JError
    log10_j_shift: float = Field(default=0.0, ge=-2.0, le=2.0)
    velocity_dispersion: float | None = Field(default=None, gt=0.0, le=1000.0)


@dataclass(frozen=True)
class SharedNuisance:
    """Something uncertain that several targets have in common: a parameter of the scan.

    Parameters
    ----------
    name : str
        Of the parameter.
    acts_on : {"background", "j"}
        Multiplies backgrounds, or shifts log10 J.
    response : ndarray, shape (n_targets,)
        1 where the background takes part and 0 elsewhere; or dex per unit.
    error : float
        Standard deviation of its measurement.
    centre : float
        Its measured value: 1 or 0 in real data; pseudo-data fluctuate it.
    """

    name: str
    acts_on: Literal["background", "j"]
    response: FloatArray
    error: float
    centre: float

    @property
    def parameter(self) -> Parameter:
        """The parameter that the term declares."""
        if self.acts_on == "j":
            prior = Normal(mean=0.0, sigma=1.0)
            return Parameter(self.name, prior=prior, kind="nuisance", description="shared systematic of J-factors")
        level = TruncatedNormal(mean=1.0, sigma=self.error, low=0.01, high=1.0 + 8.0 * self.error)
        return Parameter(self.name, prior=level, kind="nuisance", description="level of a shared gamma-ray background")

    def background_factor(self, value: float) -> FloatArray:
        """Factor on the background of each target."""
        return (
            np.where(self.response > 0.0, value, 1.0) if self.acts_on == "background" else np.ones_like(self.response)
        )


def shared_shift(name: str | None, galaxies: Sequence[GalaxyOptions]) -> tuple[SharedNuisance, ...]:
    """The shared systematic of J, if there is one."""
    shifts = np.array([galaxy.log10_j_shift for galaxy in galaxies])
    return (SharedNuisance(name, "j", shifts, 1.0, 0.0),) if name is not None else ()


def velocities(galaxies: Sequence[GalaxyOptions]) -> FloatArray | None:
    """Relative velocities (c = 1), sqrt(6) times the dispersion along the line of sight; None if none is given.

    The square of the relative velocity of two particles of a Maxwellian has the mean 6 sigma^2.
    """
    dispersions = [galaxy.velocity_dispersion for galaxy in galaxies]
    if all(value is None for value in dispersions):
        return None
    return np.array(
        [math.nan if value is None else math.sqrt(6.0) * value / SPEED_OF_LIGHT_KM_S for value in dispersions]
    )


def repeated(names: Sequence[str]) -> list[str]:
    """Names that occur more than once."""
    return sorted({name for name in names if names.count(name) > 1})


def target_problems(j_systematic: str | None, galaxies: Sequence[GalaxyOptions]) -> list[Problem]:
    """Problems of the targets that need more than one field to see."""
    problems = [] if galaxies else [Problem("targets", "there must be at least one target")]
    problems += [
        Problem("targets", "two targets have this name", name)
        for name in repeated([galaxy.name for galaxy in galaxies])
    ]
    shifted = [number for number, galaxy in enumerate(galaxies) if galaxy.log10_j_shift != 0.0]
    if j_systematic is None:
        rule = "needs j_systematic at the top of the file, the name of the parameter that shifts"
        problems += [Problem(f"targets.{number}.log10_j_shift", rule) for number in shifted]
    elif not shifted:
        problems.append(Problem("j_systematic", "no target has a log10_j_shift", j_systematic))
    return problems
