"""Choosing how strongly a cluster is driven, by the mean energy of shots on sample clusters."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from patchwalk.subsolvers.contract import F64, ClusterBatch
from patchwalk.subsolvers.drivers import weight_sums
from patchwalk.subsolvers.propagate import level_table

FACTORS = tuple(2.0 ** (half / 2) for half in range(-4, 5))
"""Factors on the heuristic hopping rate, from 1/4 to 4 in steps of sqrt(2)."""

SAMPLED_LEVELS = 1 << 18
"""Levels over all sample clusters: 16 clusters up to k = 14, then fewer, and never fewer than 2."""


def few_clusters(sample: ClusterBatch) -> ClusterBatch:
    """As many of the first clusters as a calibration looks at."""
    return sample.rows(0, min(len(sample), max(2, min(16, SAMPLED_LEVELS >> sample.size))))


def best_factor(sample: ClusterBatch, distribution: Callable[[float], F64]) -> float:
    """The factor whose laws ``distribution(factor)`` (B, 2^k) give shots of the lowest mean energy.

    No law is asked which configuration is the minimum. Energies are in units of each cluster's own weights, so that
    every cluster counts alike; ties go to the factor nearest to 1.
    """
    assert sample.couplings is not None
    weights = np.empty(len(sample))
    weight_sums(sample.fields, sample.couplings, weights)
    weights[weights == 0.0] = 1.0
    energies = np.stack([level_table(sample.fields[row], sample.couplings[row]) for row in range(len(sample))])
    best, lowest = 1.0, math.inf
    for factor in sorted(FACTORS, key=lambda value: (abs(math.log(value)), value)):
        mean = float(((distribution(factor) * energies).sum(axis=1) / weights).mean())
        if mean < lowest - 1e-9:
            best, lowest = factor, mean
    return best
