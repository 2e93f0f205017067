"""How carrier sweeps lay a problem out: spins in batches that do not touch, and couplings as whole numbers.

Spins of one batch are not coupled, so that all their decisions can be taken at once and the result is the same as if
they had been taken one after the other. A sweep visits every spin once, batch by batch; in which order leaves the
Boltzmann law alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I32, I64

U32 = npt.NDArray[np.uint32]

BATCH = 512
"""About how many spins a batch holds: enough to fill lanes many times over, few enough that they stay in cache."""

CODE_SHIFT, PLACE_MASK = np.uint32(24), np.uint32(2**24 - 1)
"""A packed word holds a neighbour in its lower 24 bits and in the upper 8 which of up to 256 couplings it is."""


@compiled
def greedy_colours(row_starts: I64, neighbours: I32) -> I32:
    """A colour (n,) for every spin, the least that none of its neighbours before it has."""
    size = len(row_starts) - 1
    colours = np.full(size, -1, np.int32)
    seen_by = np.full(size + 1, -1, np.int64)
    for spin in range(size):
        for place in range(row_starts[spin], row_starts[spin + 1]):
            colour = colours[neighbours[place]]
            if colour >= 0:
                seen_by[colour] = spin
        colour = 0
        while seen_by[colour] == spin:
            colour += 1
        colours[spin] = colour
    return colours


@dataclass(frozen=True, eq=False)
class Batches:
    """All spins, each once: batch b is ``order[starts[b]:starts[b+1]]``, and no two of its spins are coupled.

    ``order`` u32 (n,), ``starts`` i64 (batches+1,).
    """

    order: U32
    starts: I64

    @property
    def longest(self) -> int:
        """Spins in the longest batch."""
        return int(np.diff(self.starts).max(initial=0))

    def rows_of(self, lanes: int) -> int:
        """How many rows of so many lanes hold all batches, none sharing a row with another."""
        return int((-(-np.diff(self.starts) // lanes)).sum())


def batches_of(problem: Problem) -> Batches:
    """The spins by stretches of the problem's own order, and by colour within a stretch.

    Stretches, so that a sweep runs through memory once however large the problem is, and not once per colour.
    """
    colours = greedy_colours(problem.row_starts, problem.neighbours)
    count = int(colours.max(initial=0)) + 1
    stretch = np.arange(len(problem)) // (BATCH * count)
    keys = stretch * count + colours
    order = np.argsort(keys, kind="stable").astype(np.uint32)
    ends = np.flatnonzero(np.diff(keys[order])) + 1
    return Batches(order, np.concatenate([[0], ends, [len(problem)]]).astype(np.int64))


def strongest_pull(problem: Problem) -> float:
    """The largest |h_i| + sum_j |J_ij| of any spin: no local field is ever larger."""
    return float((np.abs(problem.fields) + np.asarray(abs(problem.matrix).sum(axis=1)).ravel()).max(initial=0.0))


def common_unit(problem: Problem, most: float) -> float | None:
    """The largest number of which all couplings and fields are whole multiples, exactly.

    None where there is no such number that keeps every local field within ``most`` units. Multiplying the problem by
    a power of two multiplies the unit by it.

    >>> common_unit(Problem.from_arrays([0, 1], [1, 2], [0.3, -0.9]), most=1000.0) is None  # 0.9 is not 3 times 0.3
    True
    >>> common_unit(Problem.from_arrays([0, 1], [1, 2], [0.5, -3.0]), most=1000.0)
    0.5
    """
    sizes = np.abs(np.concatenate([problem.couplings, problem.fields]))
    sizes = sizes[sizes > 0.0]
    if not len(sizes):
        return 1.0
    if strongest_pull(problem) > most * sizes.min():
        return None
    sizes = np.unique(sizes)
    mantissas, exponents = np.frexp(sizes)
    whole = np.ldexp(mantissas, 53).astype(np.int64)
    odd_bits = np.log2((whole & -whole).astype(np.float64)).astype(np.int64)
    lowest = int((exponents - 53 + odd_bits).min())
    if int(exponents.max()) - lowest > 62:
        return None
    unit = float(np.ldexp(float(np.gcd.reduce(np.ldexp(sizes, -lowest).astype(np.int64))), lowest))
    return unit if strongest_pull(problem) <= most * unit else None


@dataclass(frozen=True, eq=False)
class Palette:
    """Rows of couplings in four bytes a neighbour, in the order of the batches.

    Row p belongs to the spin ``order[p]`` and stands at ``row_starts[p]`` to ``row_starts[p+1]``, u32 (n+1,);
    ``words`` u32 (nnz,) name the neighbour and which of ``values`` f64 (up to 256,) couples it.
    """

    row_starts: U32
    words: U32
    values: F64


def palette_of(problem: Problem, batches: Batches) -> Palette | None:
    """The problem's rows packed; None where it has too many spins or more than 256 different couplings.

    >>> square = Problem.from_arrays([0, 1, 2, 3], [1, 2, 3, 0], [1.0, 1.0, -1.0, 1.0])
    >>> palette_of(square, batches_of(square)).values
    array([-1.,  1.])
    """
    couplings = problem.couplings
    if len(problem) > int(PLACE_MASK) or len(couplings) >= 2**32 or len(np.unique(couplings[:4096])) > 256:
        return None
    values = np.unique(couplings)
    if len(values) > 256:
        return None
    degrees = np.diff(problem.row_starts)[batches.order]
    row_starts = np.concatenate([[0], np.cumsum(degrees)]).astype(np.uint32)
    words = np.empty(len(couplings), np.uint32)
    _pack_rows(batches.order, problem.row_starts, problem.neighbours, couplings, values, row_starts, words)
    return Palette(row_starts, words, values)


@compiled
def _pack_rows(
    order: U32, row_starts: I64, neighbours: I32, couplings: F64, values: F64, new_starts: U32, words: U32
) -> None:
    for place in range(len(order)):
        entry = new_starts[place]
        for old in range(row_starts[order[place]], row_starts[order[place] + np.uint32(1)]):
            code = np.uint32(np.searchsorted(values, couplings[old]))
            words[entry] = np.uint32(neighbours[old]) | (code << CODE_SHIFT)
            entry += np.uint32(1)
