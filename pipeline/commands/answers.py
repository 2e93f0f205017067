"""The answer in the user's own terms, checked against the original problem."""

from __future__ import annotations

from typing import Any

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8


def answer_for(problem: Problem, spins: I8) -> tuple[bool, dict[str, Any]]:
    """Whether the configuration is feasible, and what it means.

    ``ising``: the spin of every name (none where spins have no names). ``maxcut``: the cut, recounted edge by edge,
    and the two parts by name or, where there are no names, by number from 1. ``beacons``: the channel of every
    beacon, the interference, and what a simple greedy rule gives.
    """
    if problem.kind == "beacons":
        return _beacons(problem, spins)
    if problem.kind == "maxcut":
        return True, _maxcut(problem, spins)
    named = None if problem.names is None else dict(zip(problem.names, spins.tolist(), strict=True))
    return True, {"spins_by_name": named}


def _maxcut(problem: Problem, spins: I8) -> dict[str, Any]:
    rows = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
    across = (rows < problem.neighbours) & (spins[rows] != spins[problem.neighbours])
    labels: list[Any] = list(problem.names) if problem.names else list(range(1, len(problem) + 1))
    return {
        "cut": float(2.0 * problem.couplings[across].sum()),
        "parts": [[labels[i] for i in np.flatnonzero(spins == side)] for side in (1, -1)],
    }


def _beacons(problem: Problem, spins: I8) -> tuple[bool, dict[str, Any]]:
    from patchwalk.problem.beacons import CAUTION, describe, greedy_allocation

    answer = dict(describe(problem, spins))
    answer["greedy_interference"] = describe(problem, greedy_allocation(problem))["interference"]
    answer["caution"] = CAUTION
    return bool(answer["feasible"]), answer
