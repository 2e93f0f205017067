"""Bounds and proofs: seconds to a proof, everything included but compiling, on fresh seeds; prints, asserts nothing.

    python tests/bench/bench_bounds.py                     the table of families, and scipy.optimize.milp beside it
    python tests/bench/bench_bounds.py "2D +-J 32" SK      families whose names begin so
    python tests/bench/bench_bounds.py --beyond            what is beyond the table, ten minutes each

``seconds`` are of the wall, ``processor`` of this process; where they differ, the machine was shared.
"""

from __future__ import annotations

import os
import statistics
import sys
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import NamedTuple

import numpy as np
from scipy import sparse
from scipy.optimize import Bounds, LinearConstraint, milp

from patchwalk.bounds.cut_graph import cut_graph
from patchwalk.commands.bounding import bounds_for
from patchwalk.problem.families import make
from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import Problem

FIRST_SEED = 101


class Row(NamedTuple):
    """A family, how to make its instances, how many, and the seconds that were aimed at."""

    name: str
    problem: Callable[[int], Problem]
    count: int
    target: float


def from_file(name: str, _: int) -> Problem:
    return read_problem(Path(os.environ["PATCHWALK_INSTANCES"]) / name, kind="maxcut")


def made(family: str, size: int, couplings: str, seed: int) -> Problem:
    return make(family, size, couplings=couplings, seed=seed)


TABLE = (
    Row("2D +-J 32", partial(made, "lattice2d", 32, "pm1"), 10, 3.0),
    Row("2D +-J 50", partial(made, "lattice2d", 50, "pm1"), 10, 20.0),
    Row("2D Gaussian 32", partial(made, "lattice2d", 32, "gaussian"), 10, 3.0),
    Row("2D Gaussian 64", partial(made, "lattice2d", 64, "gaussian"), 10, 40.0),
    Row("G11", partial(from_file, "G11.txt"), 1, 3.0),
    Row("3D +-J 4", partial(made, "lattice3d", 4, "pm1"), 10, 3.0),
    Row("3D +-J 5", partial(made, "lattice3d", 5, "pm1"), 10, 3.0),
    Row("3D +-J 6", partial(made, "lattice3d", 6, "pm1"), 10, 20.0),
    Row("torusg3-8", partial(from_file, "torusg3-8.dat"), 1, 60.0),
    Row("SK 60", partial(made, "sk", 60, "gaussian"), 10, 15.0),
)
BEYOND = (
    Row("2D +-J 64", partial(made, "lattice2d", 64, "pm1"), 3, 600.0),
    Row("toruspm3-8-50", partial(from_file, "toruspm3-8-50.dat"), 1, 600.0),
    Row("SK 80", partial(made, "sk", 80, "gaussian"), 3, 600.0),
)


def measure(row: Row, allowance: float) -> None:
    """A line: how many were proved, and the seconds that took; the gap of those that were not."""
    seconds, processor, gaps, nodes = [], [], [], []
    for seed in range(FIRST_SEED, FIRST_SEED + row.count):
        problem = row.problem(seed)
        compile_began = time.process_time()
        bounds_for(problem, 1e-3)
        began, compiled = time.process_time(), time.process_time() - compile_began
        found = bounds_for(problem, allowance)
        processor.append(time.process_time() - began - min(compiled, found.compile_seconds))
        seconds.append(found.seconds)
        nodes.append(found.nodes)
        if found.status != "proved_optimal":
            gaps.append(found.gap)
    in_time = sum(s <= row.target for s in seconds)
    took, used = statistics.median(seconds), statistics.median(processor)
    print(
        f"{row.name:16} proved {row.count - len(gaps):2}/{row.count:<2} seconds median {took:7.2f} largest "
        f"{max(seconds):7.2f}  processor median {used:7.2f} largest {max(processor):7.2f}  nodes up to {max(nodes):4}  "
        f"within {row.target:g} s: {in_time}" + (f"  largest gap left {100 * max(gaps):.3f} %" if gaps else ""),
        flush=True,
    )


def against_milp(size: int) -> None:
    """The same lattice by ``scipy.optimize.milp``: y_e <= x_u, y_e <= x_v, y_e >= x_u + x_v - 1."""
    problem = make("lattice2d", size, seed=FIRST_SEED)
    graph = cut_graph(problem)
    spins, count = len(problem), len(graph.heads)
    e, one = np.arange(count), np.ones(count)
    rows = np.concatenate([e, e, count + e, count + e, 2 * count + e, 2 * count + e, 2 * count + e])
    columns = np.concatenate([spins + e, graph.heads, spins + e, graph.tails, graph.heads, graph.tails, spins + e])
    values = np.concatenate([one, -one, one, -one, one, one, -one])
    matrix = sparse.csr_array((values, (rows, columns)), shape=(3 * count, spins + count))
    limits = np.concatenate([np.zeros(2 * count), one])
    costs = np.concatenate([-2.0 * np.asarray(problem.matrix.sum(axis=1)).ravel(), 4.0 * graph.weights])
    began = time.perf_counter()
    theirs = milp(costs, constraints=LinearConstraint(matrix, -np.inf, limits), bounds=Bounds(0, 1), integrality=1)
    taken = time.perf_counter() - began
    ours = bounds_for(problem, 60.0)
    agree = abs(theirs.fun + graph.weights.sum() - ours.energy) < 1e-6
    print(
        f"{size} x {size} +-J: milp {taken:.2f} s, here {ours.seconds:.3f} s, ratio {taken / ours.seconds:.0f}; "
        f"{'the same energy' if agree else 'ENERGIES DIFFER'}",
        flush=True,
    )


def main() -> None:
    words = [word for word in sys.argv[1:] if not word.startswith("--")]
    table = BEYOND if "--beyond" in sys.argv else TABLE
    for row in table:
        if words and not any(row.name.startswith(word) for word in words):
            continue
        measure(row, 600.0 if table is BEYOND else 3.0 * row.target)
    if not words and table is TABLE:
        against_milp(8)
        against_milp(10)


if __name__ == "__main__":
    main()
