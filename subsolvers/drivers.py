"""The part of the Hamiltonian that moves, and how strong it should be when nothing about the answer is known."""

from __future__ import annotations

import math

import numpy as np
from scipy.special import erfinv

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64


def level_spread(size: int) -> float:
    """Expected spread of 2^k Gaussian levels of unit variance: 2 sqrt(2) erfinv(1 - 2^(1-k))."""
    return 2.0 * math.sqrt(2.0) * float(erfinv(1.0 - 2.0 ** (1 - size)))


@compiled
def heuristic_hopping(fields: F64, couplings: F64, spread: float, rates: F64) -> None:
    """Hopping rates (B,) of the hypercube driver: span/(2k), the span of the levels estimated without looking at them.

    ``spread`` is :func:`level_spread` of k. The variance of the levels is sum_{i<j} J_ij^2 + sum_i min(|h_i|,
    sum_j |J_ij|)^2; the clipping keeps one huge boundary field from spoiling it. Where the estimate is zero: the
    largest |h|, else 1.
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
