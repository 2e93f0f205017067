"""Two spins tied to each other leave a problem with one spin less: the way down a tree, and the way back up."""

from __future__ import annotations

import numpy as np
from scipy import sparse

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.subsolvers.contract import I8, I32


def merged(problem: Problem, first: int | None, second: int, sign: int) -> Problem:
    """The problem with s_second = sign * s_first, and spin ``second`` left out of the count.

    With ``first=None`` spin ``second`` is held at ``sign``. Energies are those of the whole problem. Couplings that
    meet are added in floating point: exact for whole numbers, rounded otherwise, so that a rigorous bound on the whole
    problem speaks of ``tied`` groups instead. Raises :class:`ProblemError` for spins that are one or not there.

    >>> triangle = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1])
    >>> opposite = merged(triangle, 0, 2, -1)
    >>> opposite.energy([1, 1]) == triangle.energy(unmerged([1, 1], 0, 2, -1)) == -1.0
    True
    """
    size = len(problem)
    if sign not in (1, -1):
        raise ProblemError(f"spins are tied with sign +1 or -1, not {sign!r}")
    if not 0 <= second < size or (first is not None and not (0 <= first < size and first != second)):
        raise ProblemError(f"spins {first} and {second} cannot be tied: give two different ones from 0 to {size - 1}")
    if size == 1:
        raise ProblemError("the problem has one spin only; nothing is left once it is held")
    row = slice(problem.row_starts[second], problem.row_starts[second + 1])
    others, pulls = problem.neighbours[row].astype(np.int64), sign * problem.couplings[row]
    fields, offset = problem.fields.copy(), problem.offset
    if first is None:
        fields[others] += pulls
        offset += sign * float(problem.fields[second])
        others, pulls = others[:0], pulls[:0]
    else:
        fields[first] += sign * fields[second]
        offset += float(pulls[others == first].sum())
        others, pulls = others[others != first], pulls[others != first]
    kept = sparse.triu(problem.matrix, 1).tocoo()
    aside = (kept.row != second) & (kept.col != second)
    heads = np.concatenate([kept.row[aside], np.full(len(others), first if first is not None else 0)])
    tails, weights = np.concatenate([kept.col[aside], others]), np.concatenate([kept.data[aside], pulls])
    return Problem.from_arrays(
        heads - (heads > second),
        tails - (tails > second),
        weights,
        fields=np.delete(fields, second),
        offset=offset,
    )


def unmerged(spins: I8 | list[int], first: int | None, second: int, sign: int) -> I8:
    """The configuration i8 (n,) of the problem before ``merged``, from one (n - 1,) after it."""
    after = np.asarray(spins, np.int8)
    value = sign if first is None else sign * int(after[first - (first > second)])
    return np.insert(after, second, value)


def tied(groups: I32, signs: I8, first: int, second: int, sign: int) -> tuple[I32, I8]:
    """Groups and signs of vertices once x_first = sign * x_second also holds; the two lie in different groups.

    Vertex a is ``signs[a]`` times the sign of group ``groups[a]``. The lower of both groups takes in the other, and
    those above the other move down by one.
    """
    low, high = sorted((int(groups[first]), int(groups[second])))
    relation = sign * int(signs[first]) * int(signs[second])
    new_signs = np.where(groups == high, signs * relation, signs).astype(np.int8)
    new_groups = np.where(groups == high, low, groups - (groups > high)).astype(np.int32)
    return new_groups, new_signs
