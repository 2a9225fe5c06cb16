"""The lockstep pool: many sequential computations, one batch at a time."""

from __future__ import annotations

import numpy as np
import pytest

from scanfit.explorers.lockstep import LockstepPool


class Recorder:
    """Answers with the sum of the coordinates and remembers the batches."""

    def __init__(self) -> None:
        self.batches: list[np.ndarray] = []

    def __call__(self, unit_points: np.ndarray) -> np.ndarray:
        self.batches.append(unit_points.copy())
        return unit_points.sum(axis=1)


def test_calls_advance_together_and_results_keep_their_order() -> None:
    recorder = Recorder()
    pool = LockstepPool(recorder)

    def chain(length: int) -> list[float]:
        return [pool.log_likelihood(np.array([length, step])) for step in range(length)]

    assert list(pool.map(chain, [1, 3, 0, 2])) == [[1.0], [3.0, 4.0, 5.0], [], [2.0, 3.0]]
    assert [len(batch) for batch in recorder.batches] == [3, 2, 1]
    assert recorder.batches[1].tolist() == [[3.0, 1.0], [2.0, 1.0]]


def test_questions_of_different_length_share_a_batch() -> None:
    recorder = Recorder()
    pool = LockstepPool(recorder)
    answers = list(pool.map(lambda count: pool.log_likelihood_many(np.full((count, 2), count)), [2, 3]))
    assert [answer.tolist() for answer in answers] == [[4.0, 4.0], [6.0, 6.0, 6.0]]
    assert [len(batch) for batch in recorder.batches] == [5]


def test_outside_the_pool_a_question_is_a_batch_of_its_own() -> None:
    recorder = Recorder()
    assert LockstepPool(recorder).log_likelihood(np.array([0.25, 0.5])) == 0.75
    assert recorder.batches[0].shape == (1, 2)


def test_an_exception_in_one_call_ends_the_others_quietly(capsys: pytest.CaptureFixture[str]) -> None:
    pool = LockstepPool(Recorder())
    ended = []

    def call(number: int) -> None:
        try:
            pool.log_likelihood(np.zeros(2))
            if number == 1:
                raise ValueError("the second call fails")
            pool.log_likelihood(np.zeros(2))
        except BaseException:
            # Libraries print whatever passes through their likelihood wrappers.
            print("a traceback")
            ended.append(number)
            raise

    with pytest.raises(ValueError, match="the second call fails"):
        pool.map(call, [0, 1, 2])
    assert sorted(ended) == [0, 1, 2]
    assert capsys.readouterr().out.count("a traceback") == 1


def test_an_exception_of_the_evaluation_passes_through() -> None:
    def evaluate(unit_points: np.ndarray) -> np.ndarray:
        raise RuntimeError("stopped by a signal")

    pool = LockstepPool(evaluate)
    with pytest.raises(RuntimeError, match="stopped by a signal"):
        pool.map(lambda _: pool.log_likelihood(np.zeros(2)), range(3))
