"""Prior densities, each a map from the unit interval and a normalised density.

A prior is written in a run file as one inline table, ``{ prior = "log-uniform", from = 10.0, to = 3000.0 }``; a plain
number fixes the parameter. Each class here is at once the schema of that table and the density itself.
"""

from __future__ import annotations

import math
from typing import Literal, TypeAlias, cast

import numpy as np
from numpy.typing import NDArray
from pydantic import Field, PositiveFloat, field_validator, model_validator
from scipy.special import log_ndtr, ndtr, ndtri

from scanfit.validation import Options

FloatArray: TypeAlias = NDArray[np.float64]

# The largest and smallest unit coordinates used: normal priors stay finite at the cube's faces.
_UNIT_FLOOR = 1e-15


class Prior(Options):
    """Base of all priors. Arrays go in and come out with the same shape."""

    def from_unit(self, unit: FloatArray) -> FloatArray:
        """Map coordinates in [0, 1] to parameter values by the inverse cumulative distribution."""
        raise NotImplementedError

    def to_unit(self, value: FloatArray) -> FloatArray:
        """Inverse of `from_unit`: the cumulative distribution."""
        raise NotImplementedError

    def log_density(self, value: float) -> float:
        """Natural logarithm of the normalised density; -inf outside the support."""
        raise NotImplementedError

    @property
    def support(self) -> tuple[float, float]:
        """Closed interval outside which the density vanishes."""
        raise NotImplementedError

    @property
    def median(self) -> float:
        """The value with equal probability on both sides."""
        return float(self.from_unit(np.array(0.5)))


class _Interval(Prior):
    low: float = Field(alias="from")
    high: float = Field(alias="to")

    @model_validator(mode="after")
    def _ordered(self) -> _Interval:
        if not self.low < self.high:
            raise ValueError(f"'from' must be below 'to' (given: from = {self.low:g}, to = {self.high:g})")
        return self

    @property
    def support(self) -> tuple[float, float]:
        return self.low, self.high


class Uniform(_Interval):
    """Constant density between `from` and `to`."""

    prior: Literal["uniform"] = "uniform"

    def from_unit(self, unit: FloatArray) -> FloatArray:
        return np.clip(self.low + (self.high - self.low) * unit, self.low, self.high)

    def to_unit(self, value: FloatArray) -> FloatArray:
        return np.clip((value - self.low) / (self.high - self.low), 0.0, 1.0)

    def log_density(self, value: float) -> float:
        return -math.log(self.high - self.low) if self.low <= value <= self.high else -math.inf


class LogUniform(_Interval):
    """Constant density in the logarithm between `from` and `to`, both positive."""

    prior: Literal["log-uniform"] = "log-uniform"

    @field_validator("low")
    @classmethod
    def _positive(cls, low: float) -> float:
        if low <= 0.0:
            raise ValueError("must be greater than 0 for a log-uniform prior")
        return low

    def from_unit(self, unit: FloatArray) -> FloatArray:
        value = self.low * np.exp(unit * math.log(self.high / self.low))
        return np.clip(value, self.low, self.high)

    def to_unit(self, value: FloatArray) -> FloatArray:
        return np.clip(np.log(np.asarray(value) / self.low) / math.log(self.high / self.low), 0.0, 1.0)

    def log_density(self, value: float) -> float:
        if not self.low <= value <= self.high:
            return -math.inf
        return -math.log(value) - math.log(math.log(self.high / self.low))


class Normal(Prior):
    """Gaussian with `mean` and `sigma`."""

    prior: Literal["normal"] = "normal"
    mean: float
    sigma: PositiveFloat

    def from_unit(self, unit: FloatArray) -> FloatArray:
        return self.mean + self.sigma * _standard_normal(unit)

    def to_unit(self, value: FloatArray) -> FloatArray:
        return ndtr((np.asarray(value) - self.mean) / self.sigma)

    def log_density(self, value: float) -> float:
        return _normal_log_density(value, self.mean, self.sigma)

    @property
    def support(self) -> tuple[float, float]:
        return -math.inf, math.inf


class TruncatedNormal(_Interval):
    """Gaussian cut at `from` and `to` and renormalised."""

    prior: Literal["truncated-normal"] = "truncated-normal"
    mean: float
    sigma: PositiveFloat

    @property
    def _edges(self) -> tuple[float, float]:
        return (self.low - self.mean) / self.sigma, (self.high - self.mean) / self.sigma

    def from_unit(self, unit: FloatArray) -> FloatArray:
        below, above = self._edges
        # Work in the tail that keeps precision when both cuts lie far above the mean.
        if below > 0.0:
            quantile = -ndtri(ndtr(-below) + unit * (ndtr(-above) - ndtr(-below)))
        else:
            quantile = ndtri(ndtr(below) + unit * (ndtr(above) - ndtr(below)))
        return cast(FloatArray, np.clip(self.mean + self.sigma * quantile, self.low, self.high))

    def to_unit(self, value: FloatArray) -> FloatArray:
        below, above = self._edges
        place = (np.asarray(value) - self.mean) / self.sigma
        if below > 0.0:
            return np.clip((ndtr(-below) - ndtr(-place)) / (ndtr(-below) - ndtr(-above)), 0.0, 1.0)
        return np.clip((ndtr(place) - ndtr(below)) / (ndtr(above) - ndtr(below)), 0.0, 1.0)

    def log_density(self, value: float) -> float:
        if not self.low <= value <= self.high:
            return -math.inf
        below, above = self._edges
        if below > 0.0:
            below, above = -above, -below
        log_mass = log_ndtr(above) + math.log1p(-math.exp(log_ndtr(below) - log_ndtr(above)))
        return _normal_log_density(value, self.mean, self.sigma) - float(log_mass)


class LogNormal(Prior):
    """Gaussian in the logarithm: `median` times or divided by `factor` at one standard deviation."""

    prior: Literal["log-normal"] = "log-normal"
    centre: PositiveFloat = Field(alias="median")
    factor: float = Field(gt=1.0)

    def from_unit(self, unit: FloatArray) -> FloatArray:
        return self.centre * np.exp(math.log(self.factor) * _standard_normal(unit))

    def to_unit(self, value: FloatArray) -> FloatArray:
        return ndtr(np.log(np.asarray(value) / self.centre) / math.log(self.factor))

    def log_density(self, value: float) -> float:
        if value <= 0.0:
            return -math.inf
        return _normal_log_density(math.log(value), math.log(self.centre), math.log(self.factor)) - math.log(value)

    @property
    def support(self) -> tuple[float, float]:
        return 0.0, math.inf


class Fixed(Prior):
    """A parameter held at one value; it has no density and takes no dimension."""

    prior: Literal["fixed"] = "fixed"
    value: float

    def from_unit(self, unit: FloatArray) -> FloatArray:
        return np.full_like(unit, self.value)

    def to_unit(self, value: FloatArray) -> FloatArray:
        return np.full_like(np.asarray(value, dtype=float), 0.5)

    def log_density(self, value: float) -> float:
        return 0.0 if value == self.value else -math.inf

    @property
    def support(self) -> tuple[float, float]:
        return self.value, self.value


PRIORS: dict[str, type[Prior]] = {
    "uniform": Uniform,
    "log-uniform": LogUniform,
    "normal": Normal,
    "truncated-normal": TruncatedNormal,
    "log-normal": LogNormal,
    "fixed": Fixed,
}


def _standard_normal(unit: FloatArray) -> FloatArray:
    return ndtri(np.clip(unit, _UNIT_FLOOR, 1.0 - _UNIT_FLOOR))


def _normal_log_density(value: float, mean: float, sigma: float) -> float:
    return -0.5 * ((value - mean) / sigma) ** 2 - math.log(sigma) - 0.5 * math.log(2.0 * math.pi)
