"""The part of the Hamiltonian that moves, and how strong it should be when nothing about the answer is known.

The moving part is ``-hopping * D`` with one of three matrices D on the 2^k configurations:

=============  ============================================  ==========================================
``hypercube``  sum_i X_i: single flips                       eigenvalues from -k to k
``complete``   the all-ones matrix: from any configuration   2^k once, else 0
               to any other
``pairs``      sum_i X_i + sum_{i<j} X_i X_j: single and     from -floor((k+1)/2) to k(k+1)/2
               double flips
=============  ============================================  ==========================================

One rule sets the rate of all three: the spectrum of the moving part is as wide as the levels of the cluster are
expected to be. One *hop* is the time 2k / (width of the moving part's spectrum), which is 1/hopping on the hypercube;
so equal times in hops mean walks of equal length under every driver.
"""

from __future__ import annotations

import math
from typing import Literal, get_args

import numpy as np
from scipy.special import erfinv

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64

Driver = Literal["hypercube", "complete", "pairs"]

DRIVERS: tuple[str, ...] = get_args(Driver)

HYPERCUBE, COMPLETE, PAIRS = range(3)
"""The drivers as numbers, for kernels: places in ``DRIVERS``."""


@compiled
def driver_range(driver: int, spins: int) -> tuple[float, float]:
    """The smallest and largest eigenvalue of the matrix D on ``spins`` spins.

    With M = sum_i X_i, which takes the values -k, -k+2, ..., k, the pairs are D = ((M + 1)^2 - k - 1) / 2.
    """
    if driver == COMPLETE:
        return 0.0, float(1 << spins)
    if driver == PAIRS:
        return -float((spins + 1) // 2), 0.5 * spins * (spins + 1)
    return -float(spins), float(spins)


def hop_scale(driver: int, spins: int) -> float:
    """2k / (width of D's spectrum): 1 on the hypercube. One hop is this over the hopping rate."""
    lowest, highest = driver_range(driver, spins)
    return 2.0 * spins / (highest - lowest)


def level_spread(size: int) -> float:
    """Expected spread of 2^k Gaussian levels of unit variance: 2 sqrt(2) erfinv(1 - 2^(1-k))."""
    return 2.0 * math.sqrt(2.0) * float(erfinv(1.0 - 2.0 ** (1 - size)))


@compiled
def heuristic_hopping(fields: F64, couplings: F64, spread: float, rates: F64) -> None:
    """Hopping rates (B,) of the hypercube driver: span/(2k), the span of the levels estimated without looking at them.

    ``spread`` is :func:`level_spread` of k. The variance of the levels is sum_{i<j} J_ij^2 + sum_i min(|h_i|,
    sum_j |J_ij|)^2; the clipping keeps one huge boundary field from spoiling it. Where the estimate is zero: the
    largest |h|, else 1. Another driver's rate is this one times its :func:`hop_scale`, so that its spectrum has the
    same width.
    """
    rows, size = fields.shape
    for row in range(rows):
        variance = 0.0
        largest = 0.0
        for i in range(size):
            reach = 0.0
            for j in range(size):
                reach += abs(couplings[row, i, j])
                if j < i:
                    variance += couplings[row, i, j] ** 2
            variance += min(abs(fields[row, i]), reach) ** 2
            largest = max(largest, abs(fields[row, i]))
        rates[row] = spread * np.sqrt(variance) / (2 * size)
        if rates[row] == 0.0:
            rates[row] = largest if largest > 0.0 else 1.0


@compiled
def weight_sums(fields: F64, couplings: F64, sums: F64) -> None:
    """Fill ``sums`` (B,) with sum_{i<j} |J_ij| + sum_i |h_i|: no energy of the cluster lies further from zero."""
    rows, size = fields.shape
    for row in range(rows):
        sums[row] = 0.0
        for i in range(size):
            sums[row] += abs(fields[row, i])
            for j in range(i):
                sums[row] += abs(couplings[row, i, j])


def driver_matrix(driver: str, spins: int) -> F64:
    """The matrix D itself, f64 (2^k, 2^k), for small k.

    >>> driver_matrix("hypercube", 1).tolist(), driver_matrix("complete", 1).tolist()
    ([[0.0, 1.0], [1.0, 0.0]], [[1.0, 1.0], [1.0, 1.0]])
    """
    numbers = np.arange(1 << spins)
    differing = numbers[:, None] ^ numbers[None, :]
    flips = np.zeros(differing.shape, np.int64)
    for bit in range(spins):
        flips += differing >> bit & 1
    allowed = {"hypercube": flips == 1, "complete": flips >= 0, "pairs": (flips == 1) | (flips == 2)}
    return allowed[driver].astype(np.float64)
