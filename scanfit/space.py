"""Parameters and the space they span.

Explorers move in the unit cube; physics sees named values. `Space` is the only place where one becomes the other.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from scanfit.errors import InputError, Problem
from scanfit.priors import Fixed, FloatArray, Prior


@dataclass(frozen=True)
class Parameter:
    """One number that a model or a term depends on.

    Parameters
    ----------
    name : str
        Identifier, also the column name in every table.
    unit : str
        Unit as printed, empty when dimensionless.
    symbol : str
        LaTeX without dollar signs.
    prior : Prior or None
        Default prior; None when the run file must give one.
    kind : {"model", "nuisance"}
        What the scan is about, or what it integrates over.
    description : str
        One line for ``scanfit list``; for a published default prior it names the paper.
    """

    name: str
    unit: str = ""
    symbol: str = ""
    prior: Prior | None = None
    kind: Literal["model", "nuisance"] = "model"
    description: str = ""

    @property
    def label(self) -> str:
        """Symbol with unit, for an axis."""
        symbol = f"${self.symbol}$" if self.symbol else self.name.replace("_", " ")
        return f"{symbol} [{self.unit}]" if self.unit else symbol


class Space:
    """An ordered set of parameters, each with its prior.

    Parameters
    ----------
    parameters : iterable of Parameter
        Every parameter with a prior; `Fixed` ones take no dimension.

    Raises
    ------
    InputError
        If two parameters share a name or one has no prior.
    """

    def __init__(self, parameters: Iterable[Parameter]) -> None:
        self.parameters = tuple(parameters)
        names = [parameter.name for parameter in self.parameters]
        problems = [
            Problem(f"parameters.{parameter.name}", "this parameter needs a prior or a fixed value")
            for parameter in self.parameters
            if parameter.prior is None
        ]
        repeated = sorted({name for name in names if names.count(name) > 1})
        problems += [Problem(f"parameters.{name}", "declared twice") for name in repeated]
        if problems:
            raise InputError(problems)
        self._priors = {p.name: p.prior for p in self.parameters if p.prior is not None}
        self.free = tuple(p for p in self.parameters if not isinstance(p.prior, Fixed))
        self.free_names = tuple(p.name for p in self.free)
        self._free_priors = tuple(self._priors[name] for name in self.free_names)
        self.fixed_values = {name: prior.value for name, prior in self._priors.items() if isinstance(prior, Fixed)}

    @property
    def dimension(self) -> int:
        """Number of free parameters."""
        return len(self.free)

    def prior(self, name: str) -> Prior:
        """Prior of the parameter called `name`."""
        return self._priors[name]

    def from_unit(self, unit: FloatArray) -> FloatArray:
        """Map points of the unit cube, shape ``(..., dimension)``, to free-parameter values of the same shape."""
        unit = np.asarray(unit, dtype=float)
        values = np.empty_like(unit)
        for column, prior in enumerate(self._free_priors):
            # Contiguous, because numpy may round strided input differently: a point's bytes must not depend on
            # the batch that it comes in.
            values[..., column] = prior.from_unit(np.ascontiguousarray(unit[..., column]))
        return values

    def to_unit(self, values: FloatArray) -> FloatArray:
        """Inverse of `from_unit`."""
        values = np.asarray(values, dtype=float)
        unit = np.empty_like(values)
        for column, prior in enumerate(self._free_priors):
            unit[..., column] = prior.to_unit(values[..., column])
        return unit

    def log_prior(self, point: FloatArray) -> float:
        """Log of the joint prior density at one point of shape ``(dimension,)``; -inf outside the support."""
        total = 0.0
        for value, prior in zip(point, self._free_priors, strict=True):
            total += prior.log_density(float(value))
        return total

    def values(self, point: FloatArray) -> dict[str, float]:
        """All parameters by name, fixed ones included, for one point of shape ``(dimension,)``."""
        free = np.asarray(point, dtype=float).tolist()
        return {**self.fixed_values, **dict(zip(self.free_names, free, strict=True))}

    def point(self, values: Mapping[str, float]) -> FloatArray:
        """Free-parameter vector from named values; names that are not free are ignored."""
        return np.array([values[name] for name in self.free_names], dtype=float)
