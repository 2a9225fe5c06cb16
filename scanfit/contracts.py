"""What a model, a term and an explorer must do to take part in a scan.

The engine knows no physics: a model turns parameter values into a `Prediction`, a term turns a prediction into a
log-likelihood. Both must be pure: the same values give the same answer in any process and in any order, which is what
makes resuming and parallel work exact.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, ClassVar, Generic, Literal, Protocol, Self, TypeVar, runtime_checkable

import numpy as np

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray
from scanfit.space import Parameter
from scanfit.validation import Options

InnerNuisances = Literal["marginal", "profile"]


@dataclass(frozen=True)
class BuildContext:
    """Where and how a model or a term is built.

    Parameters
    ----------
    folder : Path
        Folder of the run file; relative data paths start here.
    inner_nuisances : {"marginal", "profile"}
        How a term removes the nuisances that it keeps to itself (J-factors, correlated backgrounds).
    """

    folder: Path
    inner_nuisances: InnerNuisances = "marginal"


@dataclass(frozen=True)
class Quantity:
    """A derived quantity: a column of the archive and possibly an axis of a figure."""

    name: str
    unit: str = ""
    symbol: str = ""
    description: str = ""
    scale: Literal["linear", "log"] = "log"

    @property
    def label(self) -> str:
        """Symbol with unit, for an axis."""
        symbol = f"${self.symbol}$" if self.symbol else self.name.replace("_", " ")
        return f"{symbol} [{self.unit}]" if self.unit else symbol


@dataclass(frozen=True)
class ExclusionPlane:
    """What one search alone excludes in a plane: confidence (CLs) of every point, small where it is excluded.

    `observed` and `expected` (the median without signal) have shape (n_y, n_x); a point is excluded at confidence level
    L where they are below 1 - L, and NaN where the search refuses it.
    """

    title: str
    fixed: str
    """What is held fixed, in words."""
    x: Quantity
    y: Quantity
    x_values: FloatArray
    y_values: FloatArray
    observed: FloatArray
    expected: FloatArray
    caveats: tuple[str, ...] = ()

    def table(self) -> dict[str, FloatArray]:
        """Columns of the plane, one row a point; ready for ``pandas.DataFrame``."""
        x, y = np.meshgrid(self.x_values, self.y_values)
        return {
            self.x.name: x.ravel(),
            self.y.name: y.ravel(),
            "cls_observed": self.observed.ravel(),
            "cls_expected": self.expected.ravel(),
        }


@runtime_checkable
class Prediction(Protocol):
    """What a model predicts at one point."""

    def derived(self) -> Mapping[str, float]:
        """Values of all `Model.quantities`, by name. NaN where a quantity does not exist at this point."""
        ...

    def flags(self) -> Mapping[str, bool]:
        """Values of all `Model.flag_names`, by name."""
        ...


@dataclass(frozen=True)
class Detail:
    """More about one point than a row of the archive holds: numbers, one table of curves, and sentences.

    Parameters
    ----------
    title : str
        What it shows.
    numbers : tuple of (Quantity, float)
        Single values, in the order in which to show them.
    curves : tuple of (Quantity, ndarray)
        Columns of one table, all of shape (n,); the first is what the others are functions of.
    notes : tuple of str
        What a reader must know.
    rows : tuple of int
        Rows of the table worth printing, ascending; evenly spread ones are printed when there are none.
    """

    title: str
    numbers: tuple[tuple[Quantity, float], ...] = ()
    curves: tuple[tuple[Quantity, FloatArray], ...] = ()
    notes: tuple[str, ...] = ()
    rows: tuple[int, ...] = ()


@runtime_checkable
class Detailed(Protocol):
    """A prediction that can tell details for people (``scanfit point --show NAME``). No prediction has to.

    A plug-in of the entry-point group ``scanfit.drawings`` with the same name draws the detail.
    """

    @property
    def details(self) -> Mapping[str, str]:
        """Names of the details, each with one line that says what it shows."""
        ...

    def detail(self, name: str) -> Detail:
        """Work out the detail called `name`, one of `details`."""
        ...


PredictionT = TypeVar("PredictionT", bound=Prediction)


class Model(ABC, Generic[PredictionT]):
    """A candidate with its parameters.

    Parameters
    ----------
    options : Options
        An instance of the class's own `Options`, checked.
    context : BuildContext
        Where the run file is.
    """

    Options: ClassVar[type[Options]]
    name: ClassVar[str]
    summary: ClassVar[str] = ""
    parameters: tuple[Parameter, ...]
    quantities: tuple[Quantity, ...] = ()
    flag_names: Mapping[str, str] = {}
    """Validity flags by name, each with the sentence that explains it."""

    @abstractmethod
    def __init__(self, options: Any, context: BuildContext) -> None: ...

    @abstractmethod
    def predict(self, values: Mapping[str, float]) -> PredictionT:
        """Predict everything at one point.

        Parameters
        ----------
        values : mapping
            All parameters by name, in their declared units.

        Raises
        ------
        PointError
            If the model has no meaning at this point; the point gets likelihood zero and is counted.
        """


@dataclass(frozen=True)
class Observable:
    """One line of "predicted beside observed", for people.

    `observed` and `uncertainty` are None where nothing was measured; `limit` is an upper limit, its level in `note`.
    """

    name: str
    predicted: float
    observed: float | None = None
    uncertainty: float | None = None
    limit: float | None = None
    unit: str = ""
    note: str = ""


@dataclass(frozen=True)
class LimitCurve:
    """Upper limits of one search alone.

    Arrays have shape (n,); `bands` has shape (n, 5): quantiles 2.5, 16, 50, 84, 97.5 % of background-only limits, or
    None. Infinite where the search says nothing.
    """

    title: str
    x: Quantity
    y: Quantity
    level: float
    x_values: FloatArray
    observed: FloatArray | None
    bands: FloatArray | None
    caveats: tuple[str, ...] = ()


class Term(ABC, Generic[PredictionT]):
    """One search: data, and the likelihood of the data given a prediction.

    Log-likelihoods keep their full normalisation, constants included, so that evidences can be compared between models.
    """

    Options: ClassVar[type[Options]]
    name: ClassVar[str]
    summary: ClassVar[str] = ""
    cost: ClassVar[float] = 1.0
    """Rough cost relative to other terms: the cheapest run first."""
    nuisances: tuple[Parameter, ...] = ()
    caveats: tuple[str, ...] = ()
    """What a reader of the result must know: invented data, an approximate likelihood, an extrapolated table."""
    data_files: tuple[Path, ...] = ()
    """Every file the term read; they are part of the run's fingerprint."""
    curves: ClassVar[Mapping[str, str]] = {}
    """Names of the upper limits that the term can draw alone, each with one line that describes it."""
    planes: ClassVar[Mapping[str, str]] = {}
    """Names of the planes in which the term knows alone what it excludes, each with one line that describes it."""

    @abstractmethod
    def __init__(self, options: Any, context: BuildContext) -> None: ...

    @abstractmethod
    def loglike(self, prediction: PredictionT, values: Mapping[str, float]) -> float:
        """Natural log of the likelihood; -inf only where the data are impossible.

        Raises
        ------
        MissingPrediction
            If the model does not predict what this term needs.
        """

    def explain(self, prediction: PredictionT, values: Mapping[str, float]) -> Sequence[Observable]:
        """Predicted beside observed, for ``scanfit point`` and the report."""
        return ()

    def simulate(self, prediction: PredictionT, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """Return the same term holding pseudo-data drawn at this point."""
        raise NotImplementedError(f"{self.name} cannot simulate data")

    def expected(self, prediction: PredictionT, values: Mapping[str, float]) -> Self:
        """Return the same term holding the expected (Asimov) data of this point."""
        raise NotImplementedError(f"{self.name} has no expected data")

    def limit_curve(
        self,
        curve: str,
        *,
        level: float | None = None,
        points: int = 40,
        pseudo_experiments: int = 200,
        rng: np.random.Generator | None = None,
    ) -> LimitCurve:
        """Upper limits of this search alone, observed and expected without a signal.

        Parameters
        ----------
        curve : str
            One of `curves`.
        level : float, optional
            Confidence or credibility; None for what the field usually quotes.
        points : int
            Points of the abscissa.
        pseudo_experiments : int
            Background-only data sets behind the bands; 0 leaves the bands out.
        rng : Generator, optional
            Source of the pseudo-data; None for a fixed seed.

        Raises
        ------
        InputError
            If the term has no curve of this name.
        """
        raise InputError([Problem("curve", f"{self.name} has no limit curve of this name", curve, tuple(self.curves))])

    def exclusion_plane(self, plane: str, settings: Mapping[str, Any], *, points: int = 40) -> ExclusionPlane:
        """Return what this search alone excludes in a plane.

        Parameters
        ----------
        plane : str
            One of `planes`.
        settings : mapping
            What the user says about the plane (values held fixed, ranges), unchecked; the term knows the keys.
        points : int
            Points along each axis.

        Raises
        ------
        InputError
            If the term has no plane of this name, or a setting breaks a rule.
        """
        raise InputError([Problem("plane", f"{self.name} has no plane of this name", plane, tuple(self.planes))])


class Evaluate(Protocol):
    """The driver's promise to an explorer: log-likelihoods of points, archived, in order."""

    def __call__(self, unit_points: FloatArray) -> FloatArray:
        """Evaluate points of the unit cube.

        Parameters
        ----------
        unit_points : ndarray, shape (n, dimension)
            Points in [0, 1].

        Returns
        -------
        ndarray, shape (n,)
            Log-likelihoods; -inf for points with likelihood zero and for points that failed.
        """
        ...


@dataclass(frozen=True)
class Progress:
    """Where an explorer stands: `fraction` in [0, 1] or None when unknown, and a few numbers worth showing."""

    phase: str
    fraction: float | None = None
    numbers: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class Exploration:
    """What an explorer found.

    Parameters
    ----------
    unit_points : ndarray, shape (n, dimension)
        Posterior points in the unit cube.
    log_weights : ndarray, shape (n,)
        Log of their posterior weights, normalised to sum to one.
    converged : bool
        Whether the explorer's own criteria were all met.
    verdict : str
        The criteria and their values, in one or two sentences.
    log_evidence, log_evidence_error : float or None
        Log of the evidence with prior normalised to one, and its standard error.
    diagnostics : mapping
        JSON-ready numbers behind the verdict.
    history : mapping of str to ndarray
        Curves for the convergence figure; each array has shape (m,) or (m, k), and ``"calls"`` is the shared x axis.
    """

    unit_points: FloatArray
    log_weights: FloatArray
    converged: bool
    verdict: str
    log_evidence: float | None = None
    log_evidence_error: float | None = None
    diagnostics: Mapping[str, Any] = field(default_factory=dict)
    history: Mapping[str, FloatArray] = field(default_factory=dict)


class Explorer(ABC):
    """A way of moving through the unit cube.

    The driver calls `start` once, then `advance` until `finished`, then `result`. All randomness comes from `seed`; no
    state lives outside the object. A scan resumes by making the same calls again: known points are answered from the
    archive, so an explorer must be deterministic given its seed, its options and the answers.
    """

    Options: ClassVar[type[Options]]
    name: ClassVar[str]
    summary: ClassVar[str] = ""

    @abstractmethod
    def __init__(self, options: Any) -> None: ...

    @abstractmethod
    def start(self, names: Sequence[str], seed: np.random.SeedSequence, evaluate: Evaluate) -> None:
        """Prepare to explore the cube spanned by the free parameters `names`."""

    @abstractmethod
    def advance(self) -> Progress:
        """Do one bounded piece of work (seconds, not minutes) and report."""

    @property
    @abstractmethod
    def finished(self) -> bool:
        """Whether the stopping rule is met or the stated maximum is reached."""

    @abstractmethod
    def result(self) -> Exploration:
        """Return what has been found so far; callable at any time after the first `advance`."""
