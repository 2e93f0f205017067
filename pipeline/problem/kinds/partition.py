"""Numbers split into two parts whose sums differ as little as possible."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.meanings import I8, Encoding, two_lists
from patchwalk.problem.penalties import MOST_COUPLINGS

EXACT_SUM = 2**26  # squares of sums below are whole numbers that a float holds


@dataclass(frozen=True, eq=False)
class TwoSums(Encoding):
    """Numbers, whole ones of any length or floats; spin +1 is the first part."""

    numbers: tuple[int | float, ...]
    main = "parts"
    shape = "parts"
    names_are_numbers = True

    def read(self, spins: I8) -> dict[str, Any]:
        parts = [[self.numbers[place] for place in np.flatnonzero(spins == side)] for side in (1, -1)]
        return {"parts": parts, "difference": _difference(parts)}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        parts = two_lists(value, self.main)
        given, known = Counter(parts[0] + parts[1]), Counter(self.numbers)
        if given != known:
            odd = next(iter((given - known) + (known - given)))
            raise ProblemError(f"the parts hold {odd!r} {given[odd]} times, the problem {known[odd]} times")
        return float(_difference(parts) ** 2), ()

    def encode(self, value: Mapping[str, Any]) -> I8:
        self.judge(value)
        first = Counter(two_lists(value, self.main)[0])
        spins = np.full(len(self.numbers), -1, np.int8)
        for place, number in enumerate(self.numbers):
            if first[number] > 0:
                first[number] -= 1
                spins[place] = 1
        return spins


def _difference(parts: list[list[int | float]]) -> int | float:
    one, other = (sum(part) if all(isinstance(number, int) for number in part) else math.fsum(part) for part in parts)
    return abs(one - other)


def encode_partition(numbers: Iterable[int | float], notes: Iterable[str] = ()) -> Problem:
    """The problem of two parts of ``numbers`` with sums as near as can be: energy = (difference of the sums)^2.

    Spin +1 puts a number into the first part. Every configuration is an answer, so that there are no penalties. The
    difference in the answer is recomputed from the numbers, exactly where they are whole; the energy is exact while
    the sum of all stays below 2^26, and a note says so where it does not. Raises
    :class:`~patchwalk.problem.ising.ProblemError` for fewer than two numbers, one that is not finite or too many.

    >>> encode_partition([4, 5, 6, 7, 8]).energy([1, 1, 1, -1, -1])
    0.0
    """
    kept = tuple(number if isinstance(number, int) else float(number) for number in numbers)
    if len(kept) < 2:
        raise ProblemError(f"{len(kept)} numbers cannot be split; give two or more")
    if len(kept) * (len(kept) - 1) // 2 > MOST_COUPLINGS:
        raise ProblemError(f"{len(kept)} numbers make more than {MOST_COUPLINGS} couplings; give fewer")
    try:
        values = np.array([float(number) for number in kept])
    except OverflowError:
        values = np.array([math.inf])
    if not np.all(np.abs(values) <= 1e100):
        raise ProblemError("a number is not finite or beyond 1e100; its square would not be an energy")
    heads, tails = np.triu_indices(len(kept), 1)
    notes = list(notes)
    if np.abs(values).sum() >= EXACT_SUM:
        notes.append("the numbers are large: energies are rounded to 53 bits; the answer's difference is exact")
    return Problem.from_arrays(
        heads,
        tails,
        2 * values[heads] * values[tails],
        size=len(kept),
        offset=float(values @ values),
        kind="partition",
        notes=notes,
        encoding=TwoSums(kept),
    )
