"""The spectral gap of replayed calls: of the walk's Hamiltonian on each very cluster, at the call's hopping rate.

A gap takes an eigenvalue solver on 2^k configurations, a thousand times dearer than any other quantity. So it is
computed where it is asked for, for a seeded share of the calls of a run, and for clusters of at most ``GAP_LIMIT``
spins.
"""

from __future__ import annotations

import contextlib
from collections.abc import Collection, Sequence
from typing import Any

import numpy as np

from patchwalk.clusters.landscape import GAP_LIMIT, spectral_gaps
from patchwalk.evidence.cost_models import hypercube_rates
from patchwalk.subsolvers.contract import F64, ClusterBatch
from patchwalk.subsolvers.draws import generator_for
from patchwalk.subsolvers.registry import SubsolverError, subsolver_from

GAP = "gap"

GAP_AMPLITUDES = 1 << 19
"""Configurations in all the Hamiltonians of one run: half a minute or so."""

MOST_GAPS = 200
"""Calls of one run whose gap is computed, at most; fewer where they are large."""

SHARE = 0x67617073
"""The word of the stream that the share is drawn from."""

Name = tuple[int, int, int]


def share_of(names: Collection[Name], largest: int, seed: int) -> set[Name]:
    """The calls of a run whose gap is computed, of ``names`` with clusters of at most ``largest`` spins."""
    ordered = sorted(names)
    most = max(1, min(MOST_GAPS, GAP_AMPLITUDES >> min(largest, GAP_LIMIT)))
    return {ordered[place] for place in generator_for(seed, SHARE).permutation(len(ordered))[:most]}


def gaps_of(own: str, batch: ClusterBatch | None, chosen: Sequence[bool]) -> F64:
    """E_1 - E_0 of ``-hopping sum_i X_i + H_P``, f64 (B,) in energy units; nan where it is not ``chosen``.

    The rate is what the spelled subsolver ``own`` says, else the heuristic one, by which a device is judged as well.
    Clusters that are too large, or not dense (None), have no gap.
    """
    gaps = np.full(len(chosen), np.nan)
    if batch is None or batch.size > GAP_LIMIT:
        return gaps
    subsolver: Any = None
    with contextlib.suppress(SubsolverError):  # one that cannot be made here has no rate of its own
        subsolver = subsolver_from(own)
    rates = hypercube_rates(subsolver, batch)
    for row in map(int, np.flatnonzero(chosen)):
        gaps[row] = spectral_gaps(batch.rows(row, row + 1), rates[row : row + 1])[0]
    return gaps


def gap_sentence(gaps: F64) -> str:
    """For how many calls the gap is known, and why not for all."""
    known = int(np.count_nonzero(~np.isnan(gaps)))
    if known == len(gaps):
        return f"gap: of all {known:,} calls, in energy units"
    return (
        f"gap: of {known:,} of the {len(gaps):,} calls, a seeded share of every run, in energy units; none for "
        f"clusters of more than {GAP_LIMIT} spins"
    )
