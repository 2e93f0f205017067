"""Random numbers from a seed, in kernels and out: the one place.

Every stream is a splitmix64 sequence (Steele, Lea & Flood, OOPSLA 2014; constants from memory, checked by the
published first outputs in the tests): a 64-bit counter passed through a mixing function. Streams are told apart by
hashing what they are for into the starting state, so that a draw depends on (run seed, purpose, replica, round,
index) and never on who computed it or when.

In kernels a stream is a one-element uint64 array that the drawing functions advance.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import U64

GOLDEN = np.uint64(0x9E3779B97F4A7C15)
MASK = (1 << 64) - 1


@compiled
def mix(z: np.uint64) -> np.uint64:
    """A bijection of 64-bit words whose output bits each depend on every input bit."""
    z = np.uint64(z)
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return z ^ (z >> np.uint64(31))


@compiled
def combine(seed: np.uint64, word: np.uint64) -> np.uint64:
    """A new seed from a seed and one more word."""
    return mix((np.uint64(seed) ^ mix(np.uint64(word) + GOLDEN)) + GOLDEN)


@compiled
def next_word(stream: U64) -> np.uint64:
    """The next 64 random bits of a stream."""
    stream[0] += GOLDEN
    return mix(stream[0])


@compiled
def next_unit(stream: U64) -> float:
    """A number in [0, 1) with 53 random bits."""
    return float(next_word(stream) >> np.uint64(11)) * 1.1102230246251565e-16


@compiled
def happens(stream: U64, exponent: float) -> bool:
    """True with probability exp(-exponent), for exponents above zero, and mostly without computing the exponential.

    The first terms of the series of exp lie below it, so that they alone can tell most refusals.
    """
    unit = next_unit(stream)
    if unit * (1.0 + exponent * (1.0 + exponent * (0.5 + exponent * 0.16666666666666666))) >= 1.0:
        return False
    return unit < math.exp(-exponent)


@compiled
def next_gaussian(stream: U64) -> float:
    """A standard Gaussian number (Box & Muller, Ann. Math. Stat. 29 (1958) 610, from memory)."""
    radius = math.sqrt(-2.0 * math.log(1.0 - next_unit(stream)))
    return radius * math.cos(2.0 * math.pi * next_unit(stream))


@compiled
def next_below(stream: U64, limit: int) -> int:
    """A whole number from 0 to ``limit - 1``, ``limit`` below 2^31 (bias below 2^-32 times the limit)."""
    return int(np.int64((next_word(stream) >> np.uint64(32)) * np.uint64(limit) >> np.uint64(32)))


@compiled
def call_seeds(base: np.uint64, count: int, first: int = 0) -> U64:
    """Seeds (count,) of the calls ``first`` and following of one round: 63 bits each, so that any database keeps them
    as plain integers.
    """
    seeds = np.empty(count, np.uint64)
    for index in range(count):
        seeds[index] = combine(base, np.uint64(first + index)) >> np.uint64(1)
    return seeds


def one_in(share: int, seeds: U64, word: int) -> npt.NDArray[np.bool_]:
    """Whether each seed belongs to the one in ``share`` that a purpose (``word``) picks: bool (B,)."""
    z = (seeds ^ np.uint64(_mix((word + int(GOLDEN)) & MASK))) + GOLDEN
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return np.asarray((z ^ (z >> np.uint64(31))) % np.uint64(share) == 0)


def _mix(z: int) -> int:
    z = ((z ^ (z >> 30)) * 0xBF58476D1CE4E5B9) & MASK
    z = ((z ^ (z >> 27)) * 0x94D049BB133111EB) & MASK
    return z ^ (z >> 31)


def seed_for(seed: int, *words: int) -> int:
    """A 64-bit seed for a purpose named by whole numbers; the same function as ``combine``, outside kernels.

    >>> seed_for(1, 2, 3) == seed_for(1, 2, 3) != seed_for(1, 3, 2)
    True
    """
    state = seed & MASK
    for word in words:
        state = _mix(((state ^ _mix((word + int(GOLDEN)) & MASK)) + int(GOLDEN)) & MASK)
    return state


def stream_for(seed: int, *words: int) -> U64:
    """A stream to hand to a kernel."""
    return np.array([seed_for(seed, *words)], np.uint64)


def generator_for(seed: int, *words: int) -> np.random.Generator:
    """A numpy generator for work outside kernels, such as making instances."""
    return np.random.Generator(np.random.PCG64(seed_for(seed, *words)))
