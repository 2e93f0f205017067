"""How exact a walk is in each precision, judged before it starts from the length of the walk alone.

Errors are total variation distances between laws. Both estimates were fitted to the largest errors seen over random
glasses, ferromagnets, chains, independent spins, one huge field, no levels at all and the search problem, k = 8 to 14,
hopping rates from 1/10 to 3 of the heuristic one and half width times time up to 200; the largest error seen was 0.86
of its estimate, at default lengths 0.8 (tests/physics/test_walk.py keeps watch). Rounding of the vectors adds up like
the square root of the number of steps. Single precision is for the hypercube alone: under the other drivers few
levels hold most of the state, and their rounding adds up faster.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.coefficients import DOUBLE_DECAY, SINGLE_DECAY, series_terms
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I64, ClusterBatch
from patchwalk.subsolvers.drivers import HYPERCUBE, driver_range, weight_sums
from patchwalk.subsolvers.spectrum import cluster_energies

DOUBLE_FLOOR = 1e-11
"""The smallest error that double precision is trusted with."""

SINGLE_FROM = 10
"""Smallest cluster for which single precision is worth having."""

LONGEST_REACH = 1e7
"""Half width of the spectrum times time beyond which a walk is refused: it would take minutes a call and more."""

WEAKLY_MOVED = 0.25
"""Where the driver has less than this share of the spectrum, rounding adds up faster in single precision."""


@dataclass(frozen=True, eq=False)
class Plan:
    """What is known of every call of a batch before it starts.

    ``rates`` (B,) in energy units and ``times`` (B, M) in 1/energy; ``reach`` (B,) is a bound of the spectrum's half
    width times the longest time; ``single`` (B,) tells who walks in single precision, ``errors`` (B,) how large the
    total variation distance is then estimated to be.
    """

    driver: int
    rates: F64
    times: F64
    reach: F64
    single: npt.NDArray[np.bool_]
    errors: F64


def plan_calls(
    batch: ClusterBatch, driver: int, rates: F64, times: F64, tolerance: float, exact_spans: bool = False
) -> Plan:
    """The plan of a batch, every row by itself.

    The width of a spectrum is bounded by all weights together. Where that is too coarse to allow single precision,
    ``exact_spans`` looks at the levels themselves. Raises ``ValueError`` for a walk beyond :data:`LONGEST_REACH`.
    """
    assert batch.couplings is not None
    longest = times.max(axis=1)
    lowest, highest = driver_range(driver, batch.size)
    moving, resting = 0.5 * (highest - lowest) * rates, np.empty(len(batch))
    weight_sums(batch.fields, batch.couplings, resting)
    error = single_error(moving, resting, longest)
    eligible = driver == HYPERCUBE and batch.size >= SINGLE_FROM
    if eligible and exact_spans:
        at_best = single_error(moving, 0.0 * resting, longest)
        unsure = np.flatnonzero((error > tolerance) & (at_best <= tolerance))
        if len(unsure):
            half_spans(unsure, batch.fields, batch.couplings, resting)
            error = single_error(moving, resting, longest)
    reach = (moving + resting) * longest
    if reach.max() > LONGEST_REACH:
        raise ValueError(
            f"walk: the spectrum's half width times the longest time is {reach.max():.3g}, simulation stops at "
            f"{LONGEST_REACH:g} (about as many applications of H); measure earlier (time, time_in_hops)"
        )
    single = (error <= tolerance) & eligible
    return Plan(driver, rates, times, reach, single, np.where(single, error, double_error(reach)))


def single_error(moving: F64, resting: F64, longest: F64) -> F64:
    """Estimated error (B,) in single precision on the hypercube.

    ``moving`` and ``resting`` (B,) are half the widths of the driver's spectrum and of the levels, ``longest`` (B,)
    the last measuring time.
    """
    width = moving + resting
    growth = np.where(moving >= WEAKLY_MOVED * width, 0.9, 1.5)
    rounded_levels = 2.0**-34 * width * longest  # of very large clusters, see hamiltonian.BYTE_STEP
    return 2.0**-24 * (2.0 + growth * np.sqrt(width * longest)) + rounded_levels


def double_error(reach: F64) -> F64:
    """Estimated error (B,) in double precision for walks of this half width times longest time."""
    return 1e-12 + 2.0**-53 * reach


@compiled
def applications_needed(reach: F64, single: npt.NDArray[np.bool_]) -> I64:
    """Applications of H (B,) in one recursion of every call."""
    applications = np.empty(len(reach), np.int64)
    for row in range(len(reach)):
        applications[row] = series_terms(reach[row], SINGLE_DECAY if single[row] else DOUBLE_DECAY) - 1
    return applications


@compiled
def half_spans(members: I64, fields: F64, couplings: F64, halves: F64) -> None:
    """Fill ``halves`` of these rows with half the difference between the largest and the smallest energy."""
    energies = np.empty(1 << fields.shape[1])
    for row in members:
        cluster_energies(fields[row], couplings[row], energies)
        lowest = highest = energies[0]
        for energy in energies:
            lowest = min(lowest, energy)
            highest = max(highest, energy)
        halves[row] = 0.5 * (highest - lowest)
