"""The answer in the user's own terms, checked against the original problem."""

from __future__ import annotations

from typing import Any

from patchwalk.problem.decoding import Answer, answer_lines, encoding_of, verdict
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8


def _told(problem: Problem, answer: Answer) -> dict[str, Any]:
    """What a configuration means.

    ``ising``: the spin of every name (none where spins have no names). ``maxcut``: the cut, recounted edge by edge,
    and the two parts by name or, where there are no names, by number from 1. ``beacons``: the channel of every
    beacon, the interference, and what a simple greedy rule gives. All other kinds: the value in the user's words, the
    objective recomputed, a ``verdict``, the constraints ``broken``, those ``mended`` by a cheap repair and what that
    ``changed``.
    """
    if problem.encoding is None:
        return dict(answer.value)
    return {
        "verdict": verdict(len(answer.broken), len(answer.mended)),
        **answer.value,
        problem.objective_name: answer.objective,
        "feasible": answer.feasible,
        "broken": list(answer.broken),
        "repaired": answer.repaired,
        "mended": list(answer.mended),
        "changed": list(answer.changed),
    }


def settled(problem: Problem, spins: I8) -> I8:
    """The configuration of the answer: as given, or after a cheap repair where that makes it keep every constraint.

    Auxiliary spins are as they cost least, so that its energy is that of the answer's objective.
    """
    return spins if problem.encoding is None else problem.encoding.decode(spins).spins


def answered(problem: Problem, found: I8) -> dict[str, Any]:
    """A configuration that was found, as fields of a solution: mended where that is cheap, judged, told in words."""
    decoded, is_encoded = encoding_of(problem).decode(found), problem.encoding is not None
    spins = decoded.spins if is_encoded else found
    energy = problem.energy(spins)
    return {
        "spins": spins,
        "energy": energy,
        "objective": decoded.objective if is_encoded else problem.objective(energy),
        "objective_name": problem.objective_name,
        "feasible": decoded.feasible,
        "answer": _told(problem, decoded),
        "decoded": decoded,
        "spoken": tuple(answer_lines(problem, decoded)) if is_encoded else (),
    }
