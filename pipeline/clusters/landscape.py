"""The energy landscape of a cluster in full: its minima, how far the incumbent is from them, and the walk's gap."""

from __future__ import annotations

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import eigsh

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, ClusterBatch
from patchwalk.subsolvers.drivers import heuristic_hopping, level_spread
from patchwalk.subsolvers.spectrum import cluster_energies, configuration_number, lowest_of, tie_tolerance

EXACT_LIMIT = 20
"""Largest cluster whose energies are all looked at: 2^20 of them in some tens of milliseconds."""

GAP_LIMIT = 14
"""Largest cluster whose gap is computed; a matrix of 2^k rows."""

DENSE_GAP = 8
"""Up to here all levels are found at once, above only the two lowest, by iteration."""

COLUMNS = ("distance", "excess", "stable", "degeneracy")


def surveys(batch: ClusterBatch) -> dict[str, F64]:
    """Distance to the nearest minimum, energy above it, numbers of stable configurations and of minima, f64 (B,) each.

    Minima are all configurations tied with the lowest energy, and a configuration is stable where no single flip lowers
    its energy by more than the tolerance for ties. Raises ``ValueError`` above ``EXACT_LIMIT`` spins.
    """
    _refuse_above(batch.size, EXACT_LIMIT, "exact features stop")
    found = np.empty((len(batch), len(COLUMNS)))
    _survey(batch.fields, _dense(batch), batch.spins, np.empty(1 << batch.size), found)
    return {name: found[:, column].copy() for column, name in enumerate(COLUMNS)}


def spectral_gaps(batch: ClusterBatch, hopping: F64 | None = None) -> F64:
    """E_1 - E_0 of ``-hopping sum_i X_i + H_P`` for every cluster, f64 (B,), in energy units.

    ``hopping`` f64 (B,) is by default the rate at which the walk is driven without knowing more. The lowest level of
    such a matrix is never degenerate (Perron and Frobenius), so that the gap is above zero, if perhaps below what
    numbers can tell. Raises ``ValueError`` above ``GAP_LIMIT`` spins.
    """
    _refuse_above(batch.size, GAP_LIMIT, "the gap stops")
    couplings, gaps = _dense(batch), np.empty(len(batch))
    if hopping is None:
        hopping = np.empty(len(batch))
        heuristic_hopping(batch.fields, couplings, level_spread(batch.size), hopping)
    flips, energies = _flips(batch.size), np.empty(1 << batch.size)
    for row in range(len(batch)):
        cluster_energies(batch.fields[row], couplings[row], energies)
        matrix = sparse.diags_array(energies) - hopping[row] * flips
        if batch.size <= DENSE_GAP:
            levels = np.linalg.eigvalsh(matrix.toarray())
        else:
            start = np.random.default_rng(1).normal(size=len(energies))
            levels = np.sort(eigsh(matrix.tocsr(), k=2, which="SA", v0=start, return_eigenvectors=False))
        gaps[row] = levels[1] - levels[0]
    return gaps


def _refuse_above(size: int, limit: int, sentence: str) -> None:
    if size > limit:
        raise ValueError(f"a cluster has {size} spins, {sentence} at {limit} (2^k numbers); use smaller clusters")


def _dense(batch: ClusterBatch) -> F64:
    """The couplings as matrices (B, k, k), whichever way they came."""
    if batch.couplings is not None:
        return batch.couplings
    assert batch.edges is not None
    couplings = np.zeros((len(batch), batch.size, batch.size))
    rows = np.repeat(np.arange(len(batch)), np.diff(batch.edges.offsets))
    first, second = batch.edges.pairs.T
    couplings[rows, first, second] = couplings[rows, second, first] = batch.edges.weights
    couplings.flags.writeable = False
    return couplings


def _flips(size: int) -> sparse.csr_array:
    """sum_i X_i: one between configurations that differ in a single spin."""
    numbers = np.arange(1 << size)
    rows, columns = np.repeat(numbers, size), (numbers[:, None] ^ (1 << np.arange(size))).ravel()
    return sparse.csr_array((np.ones(len(rows)), (rows, columns)), shape=(1 << size, 1 << size))


@compiled
def _survey(fields: F64, couplings: F64, spins: I8, energies: F64, found: F64) -> None:
    size = fields.shape[1]
    for row in range(len(fields)):
        cluster_energies(fields[row], couplings[row], energies)
        tolerance = tie_tolerance(fields[row], couplings[row])
        lowest = lowest_of(energies)
        own = configuration_number(spins[row])
        distance, stable, minima = size, 0, 0
        for number in range(len(energies)):
            held = True
            for spin in range(size):
                if energies[number ^ (1 << spin)] < energies[number] - tolerance:
                    held = False
                    break
            stable += held
            if energies[number] <= lowest + tolerance:
                minima += 1
                apart = 0
                for spin in range(size):
                    apart += ((number ^ own) >> spin) & 1
                distance = min(distance, apart)
        found[row, 0] = distance
        found[row, 1] = energies[own] - lowest
        found[row, 2] = stable
        found[row, 3] = minima
