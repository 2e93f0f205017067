"""The answer in the user's own terms, checked against the original problem."""

from __future__ import annotations

from typing import Any

from patchwalk.problem.decoding import answer_lines, encoding_of, verdict
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8


def answer_for(problem: Problem, spins: I8) -> tuple[bool, dict[str, Any]]:
    """Whether the configuration is feasible, and what it means.

    ``ising``: the spin of every name (none where spins have no names). ``maxcut``: the cut, recounted edge by edge,
    and the two parts by name or, where there are no names, by number from 1. ``beacons``: the channel of every
    beacon, the interference, and what a simple greedy rule gives. All other kinds: the value in the user's words, the
    objective recomputed, a ``verdict``, the constraints ``broken`` and those ``mended`` by a cheap repair.
    """
    answer = encoding_of(problem).decode(spins)
    if problem.encoding is None:
        return answer.feasible, dict(answer.value)
    said = {
        "verdict": verdict(len(answer.broken), len(answer.mended)),
        **answer.value,
        problem.objective_name: answer.objective,
        "feasible": answer.feasible,
        "broken": list(answer.broken),
        "repaired": answer.repaired,
        "mended": list(answer.mended),
    }
    return answer.feasible, said


def settled(problem: Problem, spins: I8) -> I8:
    """The configuration of the answer: as given, or after a cheap repair where that makes it keep every constraint.

    Auxiliary spins are as they cost least, so that its energy is that of the answer's objective.
    """
    return spins if problem.encoding is None else problem.encoding.decode(spins).spins


def spoken(problem: Problem, spins: I8) -> list[str]:
    """The answer in lines for a terminal; the first says whether it is valid."""
    return list(answer_lines(problem, encoding_of(problem).decode(spins)))
