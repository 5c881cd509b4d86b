"""Random numbers with the same bytes on any machine: raw PCG64 words and integer arithmetic only.

NumPy promises that a bit generator's raw words never change; it promises no more than that for its distributions.
"""

from __future__ import annotations

from decimal import Decimal, localcontext
from typing import Final

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .frames import FloatArray, IntArray

_LOW_32: Final = np.uint64(0xFFFFFFFF)
_32: Final = np.uint64(32)
_11: Final = np.uint64(11)
_LARGEST_BOUND: Final = 2**31
# Doubles of up to 2**45 are right to 1e-2 of this after a logarithm that errs by a few units in the last place.
_TOO_CLOSE: Final = 1e-4
# One independent stream a purpose: adding a purpose never changes what the others draw.
STREAMS: Final = {"region": 1, "order": 2, "interval": 3, "sham": 4, "repair": 5, "rows": 6}


def _exact_exponential(word: int, mean: int, most: int | None) -> int:
    """The same inversion with 50 digits."""
    with localcontext() as context:
        context.prec = 50
        share = Decimal(1) if most is None else 1 - (-Decimal(most) / mean).exp()
        return int(-mean * (1 - Decimal(word) / 2**53 * share).ln())


class Draws:
    """A stream of raw words for one purpose.

    Parameters
    ----------
    seed : int
        Zero or more.
    purpose : str
        A key of `STREAMS`.

    Examples
    --------
    >>> Draws(7, "order").shuffled(5).tolist()
    [4, 0, 1, 3, 2]
    """

    def __init__(self, seed: int, purpose: str) -> None:
        if not seed >= 0:
            raise InputError(f"seed: expected zero or more, got {seed}")
        self._bits = np.random.PCG64(np.random.SeedSequence([seed, STREAMS[purpose]]))

    def words(self, count: int) -> NDArray[np.uint64]:
        """Return `count` raw 64-bit words."""
        return np.asarray(self._bits.random_raw(count), dtype=np.uint64)

    def below(self, bound: int, count: int) -> IntArray:
        """Return integers from 0 to bound - 1, the high half of word times bound: uniform to bound / 2**64."""
        if not 0 < bound < _LARGEST_BOUND:
            raise InputError(f"a draw needs a bound from 1 to {_LARGEST_BOUND - 1}, got {bound}")
        words, factor = self.words(count), np.uint64(bound)
        high = (words >> _32) * factor + (((words & _LOW_32) * factor) >> _32)
        return np.asarray(high >> _32).astype(np.int64)

    def unit(self, count: int) -> FloatArray:
        """Return doubles in [0, 1) with 53 random bits."""
        return np.asarray((self.words(count) >> _11).astype(np.float64) * 2.0**-53)

    def exponential(self, mean: int, count: int, *, most: int | None = None) -> IntArray:
        """Return exponential integers, rounded down; with `most`, of the distribution cut off there.

        By inversion in doubles. NumPy's logarithm may differ in its last bits between machines, so values that lie
        within 1e-4 of an integer are worked out again with 50 decimal digits: the integers are the same everywhere.

        Parameters
        ----------
        mean : int
            Of the distribution that is not cut off; at most 2**40.
        count : int
        most : int, optional
        """
        words = self.words(count) >> _11
        share = 1.0 if most is None else -np.expm1(-most / mean)
        value = -mean * np.log1p(-(words.astype(np.float64) * 2.0**-53) * share)
        result: IntArray = np.floor(value).astype(np.int64)
        for i in np.flatnonzero(np.abs(value - np.rint(value)) < _TOO_CLOSE):
            result[i] = _exact_exponential(int(words[i]), mean, most)
        return result

    def shuffled(self, count: int) -> IntArray:
        """Return 0 .. count - 1 in random order: the order that sorts as many words (equal words keep their order)."""
        return np.argsort(self.words(count), kind="stable").astype(np.int64)
