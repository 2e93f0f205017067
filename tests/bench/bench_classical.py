"""In-cluster Metropolis against a plain loop over the same cluster, in the same run, at equal energies. Prints only.

Batches of many rows, of one group of eight, and of a single row, whose energy says nothing about the mean.

    python tests/bench/bench_classical.py

Aim: at least 3 times the plain loop, which recomputes every local field from the cluster's matrix.
"""

from __future__ import annotations

import time

import numpy as np

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8
from patchwalk.subsolvers.neighbours import edges_of, lists_of, typical_field

SWEEPS = 64


@compiled
def plain_chains(fields: F64, couplings: F64, spins: I8, scales: F64, sweeps: int, outcomes: I8) -> None:
    np.random.seed(1)
    rows, size = fields.shape
    for row in range(rows):
        chain = spins[row].copy()
        for sweep in range(sweeps):
            temperature = scales[row] * 0.05 ** (sweep / (sweeps - 1))
            for i in range(size):
                local = fields[row, i]
                for j in range(size):
                    local += couplings[row, i, j] * chain[j]
                rise = -2.0 * chain[i] * local
                if rise <= 0.0 or np.random.random() < np.exp(-rise / temperature):
                    chain[i] = -chain[i]
        outcomes[row, 0] = chain


def batch_of(rows: int, size: int, degree: float) -> ClusterBatch:
    """Gaussian clusters whose spins have about ``degree`` neighbours inside."""
    rng = np.random.default_rng(1)
    upper = np.triu(rng.normal(size=(rows, size, size)) * (rng.random((rows, size, size)) < degree / (size - 1)), 1)
    return ClusterBatch(
        rng.normal(size=(rows, size)), rng.choice([-1, 1], (rows, size)), np.ones(rows), np.arange(rows),
        upper + upper.transpose(0, 2, 1),
    )  # fmt: skip


def energies(batch: ClusterBatch, outcomes: I8) -> F64:
    assert batch.couplings is not None
    spins = outcomes[:, 0].astype(float)
    return (batch.fields * spins).sum(axis=1) + 0.5 * np.einsum("bi,bij,bj->b", spins, batch.couplings, spins)


def scales_of(batch: ClusterBatch) -> F64:
    edges, scales = edges_of(batch), np.empty(len(batch))
    for row in range(len(batch)):
        lists = lists_of(edges.offsets, edges.pairs, edges.weights, row, batch.size)
        scales[row] = typical_field(batch.fields[row], lists.starts, lists.strengths)
    return scales


def compare(size: int, degree: float, rows: int) -> None:
    batch = batch_of(rows, size, degree)
    ours, plain = make_subsolver("metropolis", sweeps=SWEEPS), np.empty((rows, 1, size), np.int8)
    scales, seconds = scales_of(batch), {"ours": np.inf, "plain": np.inf}
    ours.prepare(batch)
    for attempt in range(6 + 400 // rows):
        began = time.perf_counter()
        outcomes = ours.propose(batch).outcomes
        middle = time.perf_counter()
        plain_chains(batch.fields, batch.couplings, batch.spins, scales, SWEEPS, plain)
        ended = time.perf_counter()
        if attempt:  # the first compiles
            seconds["ours"] = min(seconds["ours"], middle - began)
            seconds["plain"] = min(seconds["plain"], ended - middle)
    updates = rows * SWEEPS * size
    gap = energies(batch, outcomes) - energies(batch, plain)
    print(
        f"{rows:4} rows, k = {size:3}, degree {degree:4.1f}: {updates / seconds['ours'] / 1e6:4.0f} million updates a "
        f"second, {seconds['plain'] / seconds['ours']:5.2f} times the plain loop; "
        f"energies differ by {gap.mean():+.3f} +- {gap.std() / np.sqrt(rows):.3f}"
    )


if __name__ == "__main__":
    for rows in (200, 8, 1):
        for size, degree in ((10, 3.0), (16, 3.0), (32, 4.0), (64, 4.0), (10, 9.0), (16, 15.0), (32, 31.0), (64, 63.0)):
            compare(size, degree, rows)
