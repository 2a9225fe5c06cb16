"""A model and its terms over a space: from one parameter vector to one row of the archive.

The evaluation path. A row holds everything known about a point; its layout is `Posterior.columns`.
"""

from __future__ import annotations

import enum
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from scanfit.contracts import Model, Observable, Prediction, Quantity, Term
from scanfit.errors import InputError, PointError, Problem
from scanfit.priors import FloatArray
from scanfit.space import Space


class Status(enum.IntEnum):
    """What became of a point."""

    EVALUATED = 0
    FAILED = 1
    """The model or a term raised, or returned something that is not a log-likelihood: likelihood zero, counted."""
    TIMED_OUT = 2
    """Given up after the run file's time limit: likelihood zero, counted."""
    REJECTED = 3
    """A validity flag that the run file rejects is raised: likelihood zero, and nothing failed."""


FAILURES: Final = (Status.FAILED, Status.TIMED_OUT)
"""What counts as a point that could not be evaluated."""


@dataclass(frozen=True)
class Failure:
    """Why a point could not be evaluated.

    Parameters
    ----------
    row : int
        Index of the point in its batch.
    culprit : str
        ``model`` or ``terms.<name>``.
    message : str
        Exception type and text, or the value that is not a log-likelihood.
    """

    row: int
    culprit: str
    message: str


@dataclass(frozen=True)
class Batch:
    """Rows of several points, shape ``(n, len(columns))``, and the failures among them."""

    rows: FloatArray
    failures: tuple[Failure, ...] = ()


class Posterior:
    """Space, model and terms.

    Parameters
    ----------
    space : Space
        Every parameter with its prior.
    model : Model
        Turns values into a prediction.
    terms : mapping of str to Term
        By the names that the run file gives them.
    reject_flags : sequence of str
        Validity flags of the model; where one is raised the likelihood is zero and no term is asked.

    Raises
    ------
    InputError
        If two columns would share a name, or the model has no flag of a name in `reject_flags`.
    """

    def __init__(
        self,
        space: Space,
        model: Model[Prediction],
        terms: Mapping[str, Term[Prediction]],
        reject_flags: Sequence[str] = (),
    ) -> None:
        self.space = space
        self.model = model
        self.terms = dict(terms)
        self.quantities: tuple[Quantity, ...] = tuple(model.quantities)
        self.flag_names = tuple(model.flag_names)
        self.reject_flags = _checked_flags(reject_flags, self.flag_names)
        self._in_order = sorted(self.terms.items(), key=lambda item: item[1].cost)
        self.term_columns = tuple(f"loglike_{name}" for name in self.terms)
        self.flag_columns = tuple(f"flag_{name}" for name in self.flag_names)
        self.columns = (
            *space.free_names,
            "log_prior",
            "log_likelihood",
            "status",
            *self.term_columns,
            *(quantity.name for quantity in self.quantities),
            *self.flag_columns,
        )
        repeated = sorted({name for name in self.columns if self.columns.count(name) > 1})
        if repeated:
            raise InputError([Problem(name, "two columns of the archive would have this name") for name in repeated])
        self._place = {name: column for column, name in enumerate(self.columns)}

    def column(self, name: str) -> int:
        """Index of the column called `name`."""
        return self._place[name]

    def evaluate_many(self, points: FloatArray) -> Batch:
        """Evaluate points given as free-parameter values.

        Parameters
        ----------
        points : ndarray, shape (n, dimension)
            Values in declared units.

        Returns
        -------
        Batch
            One row per point in the same order; nothing that a model or a term raises gets out of here.
        """
        rows = np.full((len(points), len(self.columns)), math.nan)
        failures = []
        for number, point in enumerate(points):
            values = self.space.values(point)
            failure = self._fill(rows[number], values, self.space.log_prior(point), number)
            if failure is not None:
                failures.append(failure)
        return Batch(rows, tuple(failures))

    def evaluate(self, values: Mapping[str, float]) -> Batch:
        """Evaluate one point given by name, also outside the prior and with other values of fixed parameters.

        The terms are asked even where a rejected flag is raised; the likelihood is zero all the same.

        Parameters
        ----------
        values : mapping
            All parameters by name.
        """
        rows = np.full((1, len(self.columns)), math.nan)
        log_prior = self.space.log_prior(self.space.point(values))
        failure = self._fill(rows[0], values, log_prior, 0, everywhere=True)
        return Batch(rows, (failure,) if failure else ())

    def _fill(
        self, row: FloatArray, values: Mapping[str, float], log_prior: float, number: int, *, everywhere: bool = False
    ) -> Failure | None:
        dimension = self.space.dimension
        row[:dimension] = self.space.point(values)
        row[dimension] = log_prior
        row[dimension + 1] = -math.inf
        row[dimension + 2] = Status.EVALUATED
        if log_prior == -math.inf and not everywhere:
            return None
        culprit = "model"
        try:
            prediction = self.model.predict(values)
            total = 0.0
            if self._rejects(prediction):
                row[dimension + 2] = Status.REJECTED
                total = -math.inf
            asked = self._in_order if everywhere or total == 0.0 else ()
            for name, term in asked:
                culprit = f"terms.{name}"
                loglike = float(term.loglike(prediction, values))
                if math.isnan(loglike) or loglike == math.inf:
                    row[dimension + 2] = Status.FAILED
                    return Failure(number, culprit, f"the log-likelihood is {loglike}")
                row[self._place[f"loglike_{name}"]] = loglike
                total += loglike
            culprit = "model"
            derived, flags = prediction.derived(), prediction.flags()
            for quantity in self.quantities:
                row[self._place[quantity.name]] = derived[quantity.name]
            for flag in self.flag_names:
                row[self._place[f"flag_{flag}"]] = float(flags[flag])
        except Exception as error:  # a plug-in may raise anything; the scan must outlive it
            row[dimension + 2] = Status.FAILED
            text = str(error) if isinstance(error, PointError) else f"{type(error).__name__}: {error}"
            return Failure(number, culprit, text)
        row[dimension + 1] = total
        return None

    def _rejects(self, prediction: Prediction) -> bool:
        if not self.reject_flags:
            return False
        flags = prediction.flags()
        return any(flags[name] for name in self.reject_flags)

    def explain(self, values: Mapping[str, float]) -> dict[str, Sequence[Observable]]:
        """Predicted beside observed for every term at one point; exceptions pass through.

        Parameters
        ----------
        values : mapping
            All parameters by name.
        """
        prediction = self.model.predict(values)
        return {name: term.explain(prediction, values) for name, term in self.terms.items()}


def _checked_flags(wanted: Sequence[str], known: Sequence[str]) -> tuple[str, ...]:
    unknown = [name for name in wanted if name not in known]
    if unknown:
        rule = "the model has no validity flag of this name"
        raise InputError([Problem("run.reject_flags", rule, name, known) for name in unknown])
    return tuple(wanted)
