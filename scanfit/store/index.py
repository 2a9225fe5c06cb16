"""Find a point among millions by its exact bytes.

An open-addressing hash table of row numbers beside the points themselves: 4 bytes a slot, at least two slots a point.
Equal means equal in every bit, so that 0.0 and -0.0 are two points and a NaN is equal to itself.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from numba import njit

from scanfit.priors import FloatArray

Rows = npt.NDArray[np.int64]
_Words = npt.NDArray[np.uint64]
_Slots = npt.NDArray[np.int32]

_EMPTY = -1
_FIRST_CAPACITY = 1024
_LARGEST = 2**30


class PointIndex:
    """Row numbers of points in the order in which they were added, with one number kept for each.

    Parameters
    ----------
    dimension : int
        Length of a point.
    expected : int
        Number of points for which to make room at once.
    """

    def __init__(self, dimension: int, expected: int = 0) -> None:
        self._dimension = dimension
        self._count = 0
        self._words: _Words = np.empty((0, dimension), dtype=np.uint64)
        self._answers: FloatArray = np.empty(0)
        self._make_room(max(_FIRST_CAPACITY, expected + expected // 4))

    def __len__(self) -> int:
        return self._count

    def find(self, points: FloatArray) -> Rows:
        """Row numbers of `points`, shape ``(n, dimension)``; -1 where a point is unknown."""
        return _find(self._slots, self._words, self._as_words(points))

    def answers(self, rows: Rows) -> FloatArray:
        """The numbers kept for `rows`; NaN for row -1."""
        return np.where(rows >= 0, self._answers[rows], np.nan)

    def add(self, points: FloatArray, answers: FloatArray) -> int:
        """Add points with one number each.

        Returns
        -------
        int
            -1, or the place of the first point that is already known; then nothing was added.
        """
        words = self._as_words(points)
        count = self._count + len(words)
        if count > _LARGEST:
            raise ValueError(f"more than {_LARGEST} points in one archive")
        if count > len(self._words):
            self._make_room(2 * count)
        self._words[self._count : count] = words
        self._answers[self._count : count] = answers
        repeated = int(_insert(self._slots, self._words, self._count, count))
        if repeated >= 0:
            # Slots taken by this call still point beyond the count: rebuild the table without them.
            self._slots[:] = _EMPTY
            _insert(self._slots, self._words, 0, self._count)
            return repeated - self._count
        self._count = count
        return -1

    def _as_words(self, points: FloatArray) -> _Words:
        points = np.ascontiguousarray(points, dtype=float)
        if points.ndim != 2 or points.shape[1] != self._dimension:
            raise ValueError(f"points have shape {points.shape}, not (n, {self._dimension})")
        return points.view(np.uint64)

    def _make_room(self, capacity: int) -> None:
        words = np.empty((capacity, self._dimension), dtype=np.uint64)
        words[: self._count] = self._words[: self._count]
        answers = np.empty(capacity)
        answers[: self._count] = self._answers[: self._count]
        self._words, self._answers = words, answers
        # A power of two, so that a bit mask wraps around, and never more than half full, so that probes stay short.
        self._slots = np.full(1 << (2 * capacity - 1).bit_length(), _EMPTY, dtype=np.int32)
        _insert(self._slots, self._words, 0, self._count)


@njit(cache=True, fastmath=False, error_model="numpy")
def _home(point: _Words, mask: int) -> int:
    """First slot to try for a point."""
    # Multiply and shift after every word: doubles that differ in few high bits must not share low bits.
    mixed = np.uint64(0x9E3779B97F4A7C15)
    for word in point:
        mixed = (mixed ^ word) * np.uint64(0xFF51AFD7ED558CCD)
        mixed ^= mixed >> np.uint64(32)
    mixed *= np.uint64(0xC4CEB9FE1A85EC53)
    mixed ^= mixed >> np.uint64(29)
    return np.int64(mixed & np.uint64(mask))  # type: ignore[return-value]  # int64 is numba's int


@njit(cache=True, fastmath=False, error_model="numpy")
def _place(slots: _Slots, words: _Words, point: _Words) -> int:
    """Slot that holds `point`, or the empty one where it belongs."""
    mask = len(slots) - 1
    slot = _home(point, mask)
    while slots[slot] != _EMPTY:
        row = slots[slot]
        same = True
        for column in range(point.shape[0]):
            if words[row, column] != point[column]:
                same = False
                break
        if same:
            return slot
        slot = (slot + 1) & mask
    return slot


@njit(cache=True, fastmath=False, error_model="numpy")
def _insert(slots: _Slots, words: _Words, begin: int, end: int) -> int:
    for row in range(begin, end):
        slot = _place(slots, words, words[row])
        if slots[slot] != _EMPTY:
            return row
        slots[slot] = row
    return -1


@njit(cache=True, fastmath=False, error_model="numpy")
def _find(slots: _Slots, words: _Words, points: _Words) -> Rows:
    rows = np.empty(len(points), dtype=np.int64)
    for number in range(len(points)):
        rows[number] = slots[_place(slots, words, points[number])]
    return rows
