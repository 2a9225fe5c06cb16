"""A model and terms without physics, as a user would bring them: for tests of the engine."""

from __future__ import annotations

import math
import os
import signal
import time
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from scanfit.contracts import BuildContext, Model, Observable, Quantity, Term
from scanfit.errors import MissingPrediction, PointError
from scanfit.priors import Normal
from scanfit.space import Parameter
from scanfit.validation import Options


@dataclass(frozen=True)
class Place:
    x: float
    y: float

    def derived(self) -> dict[str, float]:
        return {"radius": math.hypot(self.x, self.y)}

    def flags(self) -> dict[str, bool]:
        return {"far": math.hypot(self.x, self.y) > 1.0}


class Plane(Model[Place]):
    class Options(Options):
        hole: float = 0.0

    name = "plane"
    summary = "two coordinates"
    parameters = (Parameter("x", "m"), Parameter("y", "m"))
    quantities = (Quantity("radius", "m", "r"),)
    flag_names = {"far": "further than one from the origin"}

    def __init__(self, options: Plane.Options, context: BuildContext) -> None:
        self.hole = options.hole

    def predict(self, values: Mapping[str, float]) -> Place:
        if math.hypot(values["x"], values["y"]) < self.hole:
            raise PointError("inside the hole")
        return Place(values["x"], values["y"])


class Bump(Term[Place]):
    """Correlated Gaussian, normalised in the plane, with a nuisance that shifts x."""

    class Options(Options):
        sigma: float = 0.1
        correlation: float = 0.0
        milliseconds: float = 0.0
        data: str | None = None

    name = "bump"
    summary = "a Gaussian bump"

    def __init__(self, options: Bump.Options, context: BuildContext) -> None:
        self.options = options
        self.nuisances = (Parameter("shift", "m", prior=Normal(mean=0.0, sigma=0.05), kind="nuisance"),)
        self.caveats = ("invented",)
        self.data_files: tuple[Path, ...] = () if options.data is None else (context.folder / options.data,)

    def loglike(self, prediction: Place, values: Mapping[str, float]) -> float:
        if self.options.milliseconds:
            until = time.perf_counter() + 1e-3 * self.options.milliseconds
            while time.perf_counter() < until:
                pass
        rho, sigma = self.options.correlation, self.options.sigma
        u, v = (prediction.x - values["shift"]) / sigma, prediction.y / sigma
        square = (u * u - 2.0 * rho * u * v + v * v) / (1.0 - rho * rho)
        return -0.5 * square - math.log(2.0 * math.pi * sigma * sigma * math.sqrt(1.0 - rho * rho))

    def explain(self, prediction: Place, values: Mapping[str, float]) -> tuple[Observable, ...]:
        return (Observable("x", prediction.x, 0.0, self.options.sigma, unit="m"),)


class Trouble(Term[Place]):
    """Fails in the way asked for wherever x > `above`."""

    class Options(Options):
        how: str
        above: float = 0.5

    name = "trouble"
    cost = 0.1

    def __init__(self, options: Trouble.Options, context: BuildContext) -> None:
        self.options = options

    def loglike(self, prediction: Place, values: Mapping[str, float]) -> float:
        if prediction.x <= self.options.above:
            return 0.0
        match self.options.how:
            case "nan":
                return math.nan
            case "infinity":
                return math.inf
            case "raise":
                raise ZeroDivisionError("one over nothing")
            case "missing":
                raise MissingPrediction("a third coordinate")
            case "hang":
                time.sleep(3600.0)
            case "die":
                os.kill(os.getpid(), signal.SIGKILL)
        return -math.inf
