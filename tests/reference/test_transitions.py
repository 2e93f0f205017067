"""Two transitions of random problems appear in what ``make`` writes and ``solve`` finds, at small sizes.

Random Max-2-SAT can be satisfied in full below one clause per variable and not above (Coppersmith et al., Random
Struct. Alg. 24 (2004) 502); random numbers can be split evenly below one bit per number and not above (Borgs, Chayes &
Pittel, Random Struct. Alg. 19 (2001) 247). Both are sharp only in the limit: far from it on either side, small sizes
must agree. The problem is one cluster, answered by enumeration, so that what is found is the optimum.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from patchwalk import Problem, make, solve

SIZE, SEEDS = 14, range(1, 21)


def share(tmp_path: Path, family: str, density: float, perfect: Callable[[Problem, float], bool]) -> float:
    """The share of instances whose optimum is perfect."""
    found = 0
    for seed in SEEDS:
        problem = make(family, SIZE, density=density, seed=seed)
        run = tmp_path / f"{family}-{density}-{seed}.sqlite"
        solution = solve(problem, subsolver="enumeration", cluster_size=len(problem), calls=1, sweeps=0,
                         tempering="cooling", hot=0.0, cold=0.0, run=run)  # fmt: skip
        found += perfect(problem, solution.objective)
    return found / len(SEEDS)


def all_satisfied(problem: Problem, objective: float) -> bool:
    return objective >= float(problem.encoding.weights.sum()) - 1e-6  # type: ignore[union-attr]


def split_evenly(_problem: Problem, objective: float) -> bool:
    return objective <= 1.0 + 1e-6  # the squared difference: 0, or 1 where the sum is odd


@pytest.mark.parametrize(
    ("family", "perfect", "far"),
    [("max2sat", all_satisfied, 3.0), ("partition", split_evenly, 2.0)],  # clauses soften over n^(-1/3), slowly
    ids=["max2sat", "partition"],
)
def test_perfect_optima_vanish_across_density_one(
    tmp_path: Path, family: str, perfect: Callable[[Problem, float], bool], far: float
) -> None:
    below, above = (share(tmp_path, family, density, perfect) for density in (0.5, far))
    assert below >= 0.8
    assert above <= 0.2
