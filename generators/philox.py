"""Philox4x64-10 compiled: counter-based random words, many at a time.

The generator and its constants are those of Salmon, Moraes, Dror and Shaw ("Parallel random numbers: as
easy as 1, 2, 3", SC 2011). A counter of four words is mixed by ten rounds of two multiplications into
four random words. numpy's ``Philox`` is the same generator, drawn one counter at a time.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up

Words = NDArray[np.uint64]

ROUNDS = 10
MULTIPLIER_0 = np.uint64(0xD2E7470EE14C6C93)
MULTIPLIER_1 = np.uint64(0xCA5A826395121157)
KEY_STEP_0 = np.uint64(0x9E3779B97F4A7C15)  # the golden ratio's fraction
KEY_STEP_1 = np.uint64(0xBB67AE8584CAA73B)  # that of the square root of 3

_LOW_HALF = np.uint64(0xFFFFFFFF)
_HALF = np.uint64(32)
_LOW_0, _HIGH_0 = MULTIPLIER_0 & _LOW_HALF, MULTIPLIER_0 >> _HALF
_LOW_1, _HIGH_1 = MULTIPLIER_1 & _LOW_HALF, MULTIPLIER_1 >> _HALF


@kernel
def draw_words(key: Words, stream: int, first: int, n: int, words: Words) -> None:
    """Fill an array with the words of successive counters.

    Parameters
    ----------
    key : uint64 array, shape (2,)
    stream : int
        The second word of every counter.
    first : int
        The first word of the first counter; the third and the fourth word are 0.
    n : int
        How many counters.
    words : uint64 array, shape (4, n or more), C-contiguous
        ``words[:, i]`` becomes what the counter (first + i, stream, 0, 0) gives.

    Examples
    --------
    >>> words = np.empty((4, 2), dtype=np.uint64)
    >>> draw_words(np.zeros(2, dtype=np.uint64), 0, 1, 2, words)
    >>> bool((words.T.ravel() == np.random.Philox(key=0).random_raw(8)).all())
    True
    """
    c0, c1, c2, c3 = words[0, :n], words[1, :n], words[2, :n], words[3, :n]
    for i in range(n):
        c0[i] = first + i
        c1[i] = stream
        c2[i] = 0
        c3[i] = 0
    key_0, key_1 = key[0], key[1]
    # Rounds outside, counters inside: so the processor mixes several counters with one instruction.
    for _ in range(ROUNDS):
        for i in range(n):
            high_0, low_0 = _product(c0[i], _LOW_0, _HIGH_0)
            high_1, low_1 = _product(c2[i], _LOW_1, _HIGH_1)
            c0[i] = high_1 ^ c1[i] ^ key_0
            c1[i] = low_1
            c2[i] = high_0 ^ c3[i] ^ key_1
            c3[i] = low_0
        key_0 += KEY_STEP_0
        key_1 += KEY_STEP_1


@inlined
def _product(a: np.uint64, low: np.uint64, high: np.uint64) -> tuple[np.uint64, np.uint64]:
    # The upper and the lower word of a product, from products of halves: none of these overflows.
    a_low, a_high = a & _LOW_HALF, a >> _HALF
    lowest = a_low * low
    middle = a_high * low + (lowest >> _HALF)
    other = a_low * high + (middle & _LOW_HALF)
    return (
        a_high * high + (middle >> _HALF) + (other >> _HALF),
        (other << _HALF) | (lowest & _LOW_HALF),
    )


@warm_up
def _warm_up() -> None:
    draw_words(np.zeros(2, dtype=np.uint64), 0, 1, 1, np.empty((4, 1), dtype=np.uint64))
