"""How fast the exact classical subsolvers are, on one thread. Prints; asserts nothing.

Whole calls are timed, planning of the order included, on strips of an open +-J lattice; the aims that the figures are
read against stand beside them.

    python tests/bench/bench_exact.py
"""

from __future__ import annotations

import math
from collections.abc import Callable
from time import perf_counter

import numpy as np

from patchwalk.clusters.rules import Marks
from patchwalk.clusters.strip import StripRule
from patchwalk.problem.families import make
from patchwalk.subsolvers import ClusterBatch, Edges, elimination_plans, make_subsolver
from patchwalk.subsolvers.contract import Subsolver
from patchwalk.subsolvers.elimination_order import USUAL_LIMIT, find_plan, width_of
from patchwalk.subsolvers.neighbours import list_neighbours
from patchwalk.subsolvers.spectrum import cluster_energies


def shortest(action: Callable[[], object], repeats: int) -> float:
    seconds = math.inf
    for _ in range(repeats):
        begun = perf_counter()
        action()
        seconds = min(seconds, perf_counter() - begun)
    return seconds


def strip(height: int, length: int, temperature: float = 0.5) -> ClusterBatch:
    """One open lattice with couplings +1 and -1."""
    sites = np.arange(height * length).reshape(height, length)
    along = np.stack([sites[:, :-1].ravel(), sites[:, 1:].ravel()], axis=1)
    across = np.stack([sites[:-1].ravel(), sites[1:].ravel()], axis=1)
    pairs = np.concatenate([along, across])
    draw = np.random.default_rng(height + length)
    return ClusterBatch(
        fields=np.zeros((1, sites.size)),
        spins=np.ones((1, sites.size), np.int8),
        temperature=np.full(1, temperature),
        seeds=np.zeros(1, np.uint64),
        edges=Edges(np.array([0, len(pairs)]), pairs, draw.choice([-1.0, 1.0], len(pairs))),
    )


def glass(size: int) -> ClusterBatch:
    draw = np.random.default_rng(size)
    upper = np.triu(draw.normal(size=(1, size, size)), 1)
    return ClusterBatch(
        fields=draw.normal(size=(1, size)),
        spins=np.ones((1, size), np.int8),
        temperature=np.ones(1),
        seeds=np.zeros(1, np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def plan_seconds(batch: ClusterBatch) -> float:
    assert batch.edges is not None
    pairs, weights = batch.edges.pairs, batch.edges.weights
    starts, neighbours = np.empty(batch.size + 1, np.int64), np.empty(2 * len(pairs), np.int32)
    list_neighbours(pairs, weights, starts, neighbours, np.empty(2 * len(pairs)))
    return shortest(lambda: find_plan(starts, neighbours, 20), 20)


def line(name: str, subsolver: Subsolver, batch: ClusterBatch, aim: float, planning: float = 0.0) -> str:
    """Milliseconds of a call, its ratio to the aim, and the price of an entry, its own field and one table in it."""
    work = subsolver.propose(batch).work

    def answer() -> None:
        elimination_plans._planned.cache_clear()
        subsolver.propose(batch)

    seconds = shortest(answer, 15)
    counted = work.energies if work.table_entries is None else work.table_entries
    assert counted is not None
    factors = 2 if work.table_entries is not None else 1
    each = 1e9 * (seconds - planning) / counted[0] / factors
    ratio = f"{1e3 * seconds / aim:9.2f}" if aim else "        -"
    return f"{name:34s} {1e3 * seconds:9.2f} {ratio} {1e3 * planning:9.2f} {each:9.2f}"


def strips_of_the_rule(family: str, side: int, size: int) -> str:
    """Clusters as the rule grows them on a periodic lattice."""
    problem = make(family, side, seed=1)
    widths, marks = [], Marks.for_problem(problem)
    StripRule().pick(problem, size, 1, 0, marks)
    began = perf_counter()
    picked = [StripRule().pick(problem, size, 8, seed, marks) for seed in range(10)]
    per_cluster = (perf_counter() - began) / sum(len(members) for members in picked)
    for members in np.concatenate(picked):
        inside = problem.matrix[members][:, members].tocsr()
        starts, neighbours = inside.indptr.astype(np.int64), inside.indices.astype(np.int32)
        widths.append(width_of(find_plan(starts, neighbours, USUAL_LIMIT)))
    span = f"widths {min(widths)} to {max(widths)}, {np.mean(widths):.1f} on average"
    return f"strip rule, {size} spins of {family} {side}: {1e6 * per_cluster:.0f} us a cluster; {span}"


def main() -> None:
    lowest, drawn = make_subsolver("elimination"), make_subsolver("elimination", draw="boltzmann")
    many = make_subsolver("elimination", draw="boltzmann", shots=11)
    print(f"{'':34s} {'ms':>9s} {'of aim':>9s} {'plan ms':>9s} {'ns/entry/factor':>9s}")
    for height, length, aim in ((12, 32, 5.0), (16, 16, 30.0), (14, 40, 0.0)):
        batch = strip(height, length)
        planning = plan_seconds(batch)
        name = f"elimination {height} x {length}"
        print(line(f"{name}, minimum", lowest, batch, aim, planning))
        print(line(f"{name}, draw", drawn, batch, 2 * aim, planning))
        print(line(f"{name}, 11 draws", many, batch, 0.0, planning), flush=True)
    for size, aim in ((12, 0.0), (16, 0.0), (20, 40.0), (22, 0.0)):
        batch = glass(size)
        energies = np.empty(1 << size)
        assert batch.couplings is not None
        fields, couplings = batch.fields[0].copy(), batch.couplings[0].copy()
        print(line(f"enumeration k = {size}, minimum", make_subsolver("enumeration"), batch, aim))
        print(line(f"enumeration k = {size}, draw", make_subsolver("enumeration", draw="boltzmann"), batch, aim))
        alone = shortest(lambda f=fields, c=couplings, e=energies: cluster_energies(f, c, e), 15)  # type: ignore[misc]
        print(f"    its energies alone {1e3 * alone:24.2f}", flush=True)
    for family, side, wanted in (("lattice2d", 64, 300), ("lattice3d", 8, 200), ("lattice3d", 16, 300)):
        print(strips_of_the_rule(family, side, wanted))


if __name__ == "__main__":
    main()
