"""How far each update of a Metropolis chain may rise, drawn before the chain gets there.

A flip that raises the energy by D is made with probability exp(-D / T), that is, if D <= T e with e an exponential
random number, e = -ln u for u uniform: the same decision as u <= exp(-D / T). The allowances e of a whole sweep depend
on the random stream alone and are drawn at one go, in a loop that the compiler turns into vector instructions; what is
left of a decision is one comparison. Scaling energies and temperature by a power of two scales both sides alike.
"""

from __future__ import annotations

import math

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, U64
from patchwalk.subsolvers.draws import GOLDEN, combine, mix
from patchwalk.subsolvers.fused import plus_product
from patchwalk.subsolvers.neighbours import TIE_CHANCE

TIE_ALLOWANCE = -math.log(TIE_CHANCE)
"""A flip that leaves the energy as it is gets made if its allowance is at least this: with probability TIE_CHANCE."""

_HALF_STEP = 1.0 - 2.0**-53
_ROOT_OF_TWO = math.sqrt(2.0)


@compiled
def open_streams(seed: np.uint64, shot: int, lane: int, lanes: int, states: U64) -> None:
    """Begin a chain's stream in every ``lanes``-th of ``states`` u64 (k * lanes,), from ``lane`` on.

    The n-th update of the chain takes the n-th word of the splitmix64 sequence of (seed, shot), whoever runs beside it.
    """
    size = len(states) // lanes
    state = combine(seed, np.uint64(shot)) - GOLDEN * np.uint64(size - 1)
    for i in range(size):
        states[i * lanes + lane] = state
        state += GOLDEN


@compiled
def draw_allowances(states: U64, size: int, allowances: F64) -> None:
    """Move every stream on by ``size`` words and fill ``allowances`` f64 (len(states),) from the words they come to."""
    advance = GOLDEN * np.uint64(size)
    for n in range(len(states)):
        state = states[n] + advance
        states[n] = state
        allowances[n] = minus_log_of_unit(mix(state))


@compiled
def minus_log_of_unit(word: np.uint64) -> float:
    """-ln u for u = (n + 1/2) / 2^52, n the upper 52 bits of a random word, to 4e-16 of itself.

    The library's logarithm keeps a loop from being vectorised; this one does not. u = 2^p m with m between sqrt(1/2)
    and sqrt(2), and ln m = 2 artanh((m - 1) / (m + 1)) by its power series. Whole numbers below 2^52 are turned into
    doubles by writing them into the fraction of one whose last bit counts 1.
    """
    one = np.uint64(0x3FF0000000000000)
    fraction = np.uint64(0x000FFFFFFFFFFFFF)
    unit = np.uint64((word >> np.uint64(12)) | one).view(np.float64) - _HALF_STEP
    bits = np.float64(unit).view(np.uint64)
    mantissa = np.uint64((bits & fraction) | one).view(np.float64)
    power = np.uint64((bits >> np.uint64(52)) | np.uint64(0x4330000000000000)).view(np.float64) - 4503599627371519.0
    large = mantissa > _ROOT_OF_TWO
    m = 0.5 * mantissa if large else mantissa
    p = power + 1.0 if large else power
    f = (m - 1.0) / (m + 1.0)
    g = f * f
    series = plus_product(1.0 / 19.0, g, 1.0 / 21.0)
    series = plus_product(1.0 / 17.0, g, series)
    series = plus_product(1.0 / 15.0, g, series)
    series = plus_product(1.0 / 13.0, g, series)
    series = plus_product(1.0 / 11.0, g, series)
    series = plus_product(1.0 / 9.0, g, series)
    series = plus_product(1.0 / 7.0, g, series)
    series = plus_product(1.0 / 5.0, g, series)
    series = plus_product(1.0 / 3.0, g, series)
    logarithm = 2.0 * plus_product(f, f * g, series)
    return -plus_product(logarithm, p, 0.6931471805599453)
