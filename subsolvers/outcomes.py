"""Drawing a configuration from a state held as real and imaginary parts, and the probability of its minima.

Probabilities are formed in double precision on the spot, whatever the precision of the state: a draw and the
probability that goes with it come from the very same numbers. Partial sums over chunks make a draw cost little more
than one chunk.
"""

from __future__ import annotations

from typing import Any

import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I64

Vector = npt.NDArray[Any]

CHUNK = 256
"""Configurations in one partial sum."""

LEAST_PROBABILITY = 1e-300
"""What stands for zero in the logarithm of a probability, so that no ratio is infinite or nan."""


@compiled
def probability(real: Vector, imaginary: Vector, number: int) -> float:
    """|amplitude|^2 of one configuration."""
    one, other = float(real[number]), float(imaginary[number])
    return one * one + other * other


@compiled
def sum_chunks(real: Vector, imaginary: Vector, chunks: F64) -> float:
    """Fill ``chunks`` (N/256, rounded up) with the probability of each chunk; returns the sum of all."""
    total = 0.0
    for chunk in range(len(chunks)):
        even, odd = 0.0, 0.0  # two chains of additions, so that one need not wait for the other
        begin, end = chunk * CHUNK, min((chunk + 1) * CHUNK, len(real))
        for number in range(begin, end, 2):
            even += probability(real, imaginary, number)
            odd += probability(real, imaginary, number + 1)
        chunks[chunk] = even + odd
        total += chunks[chunk]
    return total


@compiled
def draw_number(real: Vector, imaginary: Vector, chunks: F64, threshold: float) -> int:
    """The configuration at which the running sum of probabilities passes ``threshold``."""
    last = 0
    for chunk in range(len(chunks)):
        if chunks[chunk] <= threshold and chunk + 1 < len(chunks):
            threshold -= chunks[chunk]
            continue
        for number in range(chunk * CHUNK, min((chunk + 1) * CHUNK, len(real))):
            share = probability(real, imaginary, number)
            threshold -= share
            if share > 0.0:
                last = number
            if threshold < 0.0:
                return number
        if last > 0:
            break
    return last


@compiled
def lowest_of(energies: F64) -> float:
    """The smallest energy."""
    lowest = energies[0]
    for energy in energies:
        lowest = min(lowest, energy)
    return lowest


@compiled
def minima_below(energies: F64, ceiling: float, numbers: I64) -> int:
    """How many configurations lie at or below the ceiling; as many of their numbers as there is room for."""
    count = 0
    for number in range(len(energies)):
        if energies[number] <= ceiling:
            if count < len(numbers):
                numbers[count] = number
            count += 1
    return count


@compiled
def share_below(energies: F64, ceiling: float, real: Vector, imaginary: Vector) -> float:
    """The probability of all configurations at or below the ceiling."""
    share = 0.0
    for number in range(len(energies)):
        if energies[number] <= ceiling:
            share += probability(real, imaginary, number)
    return share
