"""Turn many sequential chains into batches of likelihood evaluations.

Samplers are written one call after the other: propose, ask for a likelihood, decide, propose again. `LockstepPool` runs
several such computations side by side, each in a greenlet of its own. One that asks for a likelihood is suspended; when
all of them wait, their questions are answered as one batch. What is computed, and in which order, depends only on the
computations themselves, never on the number of workers behind `evaluate`.
"""

from __future__ import annotations

import contextlib
import io
from collections.abc import Callable, Iterable, Iterator
from typing import Any, TypeVar

import numpy as np
from greenlet import getcurrent, greenlet

from scanfit.contracts import Evaluate
from scanfit.priors import FloatArray

ArgumentT = TypeVar("ArgumentT")
ResultT = TypeVar("ResultT")


class LockstepPool:
    """A pool in the shape that sampler libraries expect, whose members advance together.

    Parameters
    ----------
    evaluate : Evaluate
        Answers a batch of points of the unit cube, shape ``(n, dimension)``, with ``n`` log-likelihoods.
    """

    def __init__(self, evaluate: Evaluate) -> None:
        self._evaluate = evaluate
        self._members: set[greenlet] = set()

    def log_likelihood(self, point: FloatArray) -> float:
        """Log-likelihood of one point, shape ``(dimension,)``; outside `map` it is a batch of one."""
        return float(self.log_likelihood_many(np.asarray(point)[np.newaxis])[0])

    def log_likelihood_many(self, unit_points: FloatArray) -> FloatArray:
        """Log-likelihoods of several points, shape ``(n, dimension)`` to ``(n,)``."""
        member = getcurrent()
        if member not in self._members:
            return self._evaluate(unit_points)
        answer: FloatArray = member.parent.switch(unit_points)  # type: ignore[union-attr]  # a member has a parent
        return answer

    def map(self, function: Callable[[ArgumentT], ResultT], arguments: Iterable[ArgumentT]) -> Iterator[ResultT]:
        """Apply `function` to all `arguments`, in lockstep.

        Parameters
        ----------
        function : callable
            May call `log_likelihood` and `log_likelihood_many` any number of times.
        arguments : iterable
            One call is made for each.

        Returns
        -------
        iterator
            The results, in the order of `arguments`.

        Raises
        ------
        Exception
            Whatever the first failing call, or `evaluate`, raises; the other calls are ended first.
        """
        hub = getcurrent()
        calls = [(greenlet(function, hub), argument) for argument in arguments]
        results: list[Any] = [None] * len(calls)
        waiting: list[tuple[int, greenlet, FloatArray]] = []

        def resume(number: int, member: greenlet, value: Any) -> None:
            said = member.switch(value)
            if member.dead:
                self._members.discard(member)
                results[number] = said
            else:
                waiting.append((number, member, said))

        self._members.update(member for member, _ in calls)
        try:
            for number, (member, argument) in enumerate(calls):
                resume(number, member, argument)
            while waiting:
                asked, waiting = waiting, []
                answers = self._evaluate(np.concatenate([points for _, _, points in asked]))
                place = 0
                for number, member, points in asked:
                    resume(number, member, answers[place : place + len(points)])
                    place += len(points)
        finally:
            self._close(member for member, _ in calls)
        return iter(results)

    def _close(self, members: Iterable[greenlet]) -> None:
        for member in members:
            self._members.discard(member)
            if member:
                # Libraries that wrap the likelihood print a traceback of whatever leaves it; this ending is no error.
                with contextlib.redirect_stdout(io.StringIO()), contextlib.redirect_stderr(io.StringIO()):
                    member.throw()
