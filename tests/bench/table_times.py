"""Hit probability of the walk against its measuring time in hops, on clusters cut from large glasses.

    python tests/bench/table_times.py [cluster size]

Clusters are balls cut from configurations equilibrated by sweeps at a high and a low temperature; the last column of a
row is what guessing gives. The table stands in DEVELOPERS.md; the default interval of measuring times rests on it.
"""

from __future__ import annotations

import sys

import numpy as np

from patchwalk.clusters.conditioning import condition
from patchwalk.clusters.rules import Marks, View, cluster_rule
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.sweeps import metropolis_sweep
from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.draws import generator_for, stream_for
from patchwalk.subsolvers.enumeration import lowest_configurations

HOPS = np.array([0.25, 0.5, 0.75, 1.0, 1.25, 1.5, 2.0, 3.0, 5.0, 10.0, 20.0])
CLUSTERS = 60
SWEEPS = 400
TEMPERATURES = {"high": 0.5, "low": 0.1}
"""In units of the typical local field, as the settings hot and cold are."""

GLASSES = {
    "2D +-J": make("lattice2d", 32, seed=1),
    "2D Gaussian": make("lattice2d", 32, couplings="gaussian", seed=1),
    "3D +-J": make("lattice3d", 10, seed=1),
    "3D Gaussian": make("lattice3d", 10, couplings="gaussian", seed=1),
    "fully connected": make("sk", 200, seed=1),
}


def clusters_of(problem: Problem, size: int, temperature: float) -> ClusterBatch:
    """Balls conditioned on configurations at this temperature, one sweep apart."""
    graph = (problem.row_starts, problem.neighbours, problem.couplings)
    spins = generator_for(1).choice(np.array([-1, 1], np.int8), len(problem))
    local, marks = problem.local_fields(spins), Marks.for_problem(problem)
    places = np.full(len(problem), -1, np.int32)
    batches = []
    for number in range(SWEEPS + CLUSTERS):
        warmth = max(temperature, 1.0 - number / SWEEPS) * problem.field_scale
        metropolis_sweep(*graph, spins, local, warmth, stream_for(1, number))
        if number >= SWEEPS:
            view = View.of(problem, spins)
            (members,) = cluster_rule("ball").pick(problem, size, 1, number, marks, view)
            batches.append(condition(problem, members, spins, local, warmth, np.zeros(1, np.uint64), places))
    return ClusterBatch(
        *(np.concatenate([getattr(batch, name) for batch in batches])
          for name in ("fields", "spins", "temperature", "seeds", "couplings")),
    )  # fmt: skip


def hit_probabilities(batch: ClusterBatch) -> tuple[F64, float]:
    """Mean probability of the minima at each time in hops (M,), and that of guessing."""
    walk = make_subsolver("walk", time_in_hops=1.0)
    assert batch.couplings is not None
    hits, guess = np.zeros(len(HOPS)), 0.0
    for row in range(len(batch)):
        one = batch.rows(row, row + 1)
        hop = walk.propose(one).times[0, 0]
        minima = lowest_configurations(batch.fields[row], batch.couplings[row])[1]
        hits += walk.laws(one, HOPS * hop)[0][:, minima].sum(axis=1) / len(batch)
        guess += len(minima) / (1 << batch.size) / len(batch)
    return hits, guess


def main(size: int) -> None:
    print(f"k = {size}, {CLUSTERS} clusters each")
    print("| clusters from | T | " + " | ".join(f"{hops:g}" for hops in HOPS) + " | guess |")
    print("|---|---|" + "---|" * (len(HOPS) + 1))
    for name, problem in GLASSES.items():
        for word, temperature in TEMPERATURES.items():
            hits, guess = hit_probabilities(clusters_of(problem, size, temperature))
            print(f"| {name} | {word} | " + " | ".join(f"{hit:.3f}" for hit in hits) + f" | {guess:.4f} |")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 9)
