"""Bounds and proofs of dense problems, and where cluster bounds pay. Prints; asserts nothing.

Seconds are without compile; the aims that the figures are read against stand beside them.

    python tests/bench/bench_dense_bounds.py            what takes a minute or two
    python tests/bench/bench_dense_bounds.py 80 5 600   proofs of SK n = 80, seeds 1 to 5, 600 s each
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from time import perf_counter, process_time
from typing import TypeVar

from patchwalk.bounds.clusters import cluster_bound
from patchwalk.bounds.dense import semidefinite_bound
from patchwalk.bounds.dense_certificate import checked_tree
from patchwalk.bounds.dense_tree import branch_dense
from patchwalk.problem.families import make

T = TypeVar("T")


def timed(action: Callable[[], T]) -> tuple[T, float, float]:
    """What came out, seconds on the wall and seconds of this process."""
    wall, own = perf_counter(), process_time()
    result = action()
    return result, perf_counter() - wall, process_time() - own


def percent(above: float, below: float) -> float:
    return 100 * (above - below) / abs(above)


def semidefinite(size: int, aim: float) -> None:
    problem = make("sk", size, seed=1)
    bound, wall, own = timed(lambda: semidefinite_bound(problem))
    apart = percent(bound.semidefinite_value, bound.lower_bound)
    print(f"semidefinite, SK n = {size:4d}: {wall:7.3f} s ({own:.3f} own), {wall / aim:6.3f} of the aim; ", end="")
    print(f"at most {apart:.5f} % below the optimum of the program (aim 0.1 %)", flush=True)


def proofs(size: int, seeds: int, seconds: float, aim: float) -> None:
    for seed in range(1, seeds + 1):
        problem = make("sk", size, seed=seed)
        proof, wall, own = timed(lambda p=problem: branch_dense(p, seconds=seconds))  # type: ignore[misc]
        bound, checking, _ = timed(lambda p=problem, a=proof.arrays: checked_tree(p, a))  # type: ignore[misc]
        root = proof.log[0].lower_bound if proof.log else proof.lower_bound
        print(f"SK n = {size}, seed {seed}: {'proved' if proof.proved_optimal else 'open  '} {wall:7.2f} s ", end="")
        print(f"({own:.2f} own), {wall / aim:6.3f} of the aim; {proof.nodes} nodes, ", end="")
        print(f"gap {percent(proof.energy, root):.2f} % at the first split, ", end="")
        print(f"{max(0.0, percent(proof.energy, bound)):.4f} % at the end; checked in {checking:.2f} s", flush=True)


def clusters(family: str, size: int) -> None:
    problem = make(family, size, seed=1)
    for name, action in (
        ("clusters of 10", lambda: cluster_bound(problem)),
        ("semidefinite", lambda: semidefinite_bound(problem)),
        ("with odd cuts", lambda: branch_dense(problem, nodes=1)),
    ):
        bound, wall, own = timed(action)
        print(
            f"{family} n = {len(problem)}, {name:15s} {bound.lower_bound:12.3f} in {wall:6.2f} s ({own:.2f} own)",
            flush=True,
        )


def main() -> None:
    branch_dense(make("sk", 12, seed=1, fields=True))
    cluster_bound(make("lattice2d", 4, seed=1))
    if len(sys.argv) > 1:
        size, seeds, seconds = int(sys.argv[1]), int(sys.argv[2]), float(sys.argv[3])
        proofs(size, seeds, seconds, 15.0 if size == 60 else seconds)
        return
    semidefinite(100, 0.5)
    semidefinite(1000, 5.0)
    proofs(60, 10, 60.0, 15.0)
    clusters("beacons", 150)
    clusters("lattice2d", 12)


if __name__ == "__main__":
    main()
