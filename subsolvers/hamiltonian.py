"""One application of H = -hopping * D + diag(diagonal) inside the Chebyshev recursion, in blocks held in registers.

Vectors lie one after the other in a flat workspace whose element type, float64 or float32, is their precision.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I64
from patchwalk.subsolvers.drivers import COMPLETE, HYPERCUBE, PAIRS, driver_range
from patchwalk.subsolvers.lanes import (
    CACHE_LINE,
    WIDTH,
    Block,
    add,
    fma,
    fms,
    load,
    load_bytes,
    neighbours,
    prefetch,
    splat,
    store,
    total,
    width_in,
)

Vector = npt.NDArray[Any]
"""float64 or float32, the type of the workspace."""

Number = Any
"""A scalar of that type."""

SUMS_BYTES = 1 << 24
"""Memory for the sums of one recursion; more measuring times than fit are split over several recursions."""


FAR_BYTES = 1 << 20
"""Size of a vector from which on a pass waits for memory more than for additions."""

BYTE_STEP = 2.0**-31
"""What one step is worth where bytes hold what single precision rounds away of the diagonal: as this lies between -2
and 2, that is at most 2^-24."""


@compiled
def padded(size: int, itemsize: int) -> int:
    """Distance between vectors: whole cache lines, but no multiple of a page, where they would evict one another."""
    line = 8 * CACHE_LINE // itemsize
    return (size + line - 1) // line * line + 9 * line


@compiled
def times_together(spins: int, times: int, itemsize: int) -> int:
    """How many of so many measuring times share one recursion: all of them, unless 2^spins is very large."""
    return max(1, min(times, SUMS_BYTES // (2 * itemsize << spins)))


@compiled
def diagonal_vectors(itemsize: int) -> int:
    """Vectors that hold the diagonal: in single precision a second one with what the first has rounded away."""
    return 2 if itemsize == 4 else 1


@compiled
def held_vectors(driver: int) -> int:
    """Vectors that the recursion itself holds: two, and a spare one for the pairs."""
    return 3 if driver == PAIRS else 2


def workspace_size(driver: int, spins: int, times: int, itemsize: int) -> int:
    """Numbers of ``itemsize`` bytes that a walk needs to sum up so many measuring times."""
    vectors = diagonal_vectors(itemsize) + held_vectors(driver) + 2 * times_together(spins, times, itemsize)
    return 8 * CACHE_LINE // itemsize + vectors * padded(1 << spins, itemsize)


@compiled
def half_width_within(driver: int, spins: int, hopping: float, span_of_diagonal: float) -> float:
    """Half the length of an interval that holds the spectrum of H, from the span of the diagonal entries."""
    lowest, highest = driver_range(driver, spins)
    return 0.5 * span_of_diagonal + 0.5 * (highest - lowest) * abs(hopping)


@compiled
def _with_neighbours(through: Vector, first: int, here: Block, factor: Block, result: Block) -> Block:
    """result + factor * (sum over all single flips): near neighbours from registers, far ones loaded.

    Far neighbours go in turn to an addition and to a multiply-add, which have separate units in the processor.
    """
    near = neighbours(here)
    distance = width_in(through)
    while distance < len(through):
        near = add(near, load(through, first ^ distance))
        distance *= 2
        if distance < len(through):
            result = fma(factor, load(through, first ^ distance), result)
            distance *= 2
    return fma(factor, near, result)


@compiled
def _driven(driver: int, pull: Number, now: Vector, spare: Vector) -> Number:
    """What a pass needs beforehand: the shift -pull * (sum of all amplitudes), or M now + 2 now for the pairs.

    With M = sum_i X_i, the pairs are D = M (M + 2) / 2 - k/2: half of M applied to what this leaves in ``spare``, and
    a constant that the diagonal takes up.
    """
    size = len(now)
    width = width_in(now)
    if driver == COMPLETE:
        if size < width:
            few = now[0]
            for number in range(1, size):
                few += now[number]
            return -pull * few
        everything = load(now, 0)
        for first in range(width, size, width):
            everything = add(everything, load(now, first))
        return -pull * total(everything)
    if driver == PAIRS:
        if size < width:
            for number in range(size):
                spare[number] = now[number] + now[number]
                for bit in range(spins_of(size)):
                    spare[number] += now[number ^ (1 << bit)]
        else:
            one = splat(now.dtype.type(1.0))
            for first in range(0, size, width):
                here = load(now, first)
                store(spare, first, _with_neighbours(now, first, here, one, add(here, here)))
    return now.dtype.type(0.0)


@compiled
def spins_of(size: int) -> int:
    """k, of 2^k configurations."""
    spins = 0
    while 1 << spins < size:
        spins += 1
    return spins


@compiled
def is_far(driver: int, size: int, itemsize: int) -> bool:
    """Whether vectors are too long for near caches and a pass is :func:`advance_far`, for which single precision keeps
    what it rounds away of the diagonal in bytes rather than in numbers."""
    return driver == HYPERCUBE and size * itemsize >= FAR_BYTES


@compiled
def _at_rest(diagonal: Vector, now: Vector, here: Block, earlier: Block, first: int) -> Block:
    """One block of 2 (diagonal part of H) now - earlier.

    ``diagonal`` is flat, with the part that single precision rounds away in a second vector behind the first: it
    turns phases steadily, and would be the larger part of the error.
    """
    result = fms(load(diagonal, first), here, earlier)
    if width_in(now) > WIDTH:
        result = fma(load(diagonal, padded(len(now), now.itemsize) + first), here, result)
    return result


@compiled
def _at_rest_far(diagonal: Vector, rest: I8, now: Vector, here: Block, earlier: Block, first: int) -> Block:
    """The same for long vectors, with that second part in bytes; ``rest`` is all of ``diagonal`` in bytes."""
    result = fms(load(diagonal, first), here, earlier)
    if width_in(now) > WIDTH:
        steps = load_bytes(rest, padded(len(now), now.itemsize) * now.itemsize + first, here)
        small = fma(here, splat(now.dtype.type(BYTE_STEP)), splat(now.dtype.type(0.0)))
        result = fma(steps, small, result)
    return result


@compiled
def _keep(
    earlier: Vector, first: int, old: Block, new: Block, sums: Vector, base: int, weights: F64, columns: I64,
    active: int, term: int,
) -> None:  # fmt: skip
    """Store a block of T_term over that of T_{term-2}, and add both to the sum of every active column.

    ``sums`` is flat, one padded vector a column from ``base`` on, and uninitialised in the first round.
    """
    store(earlier, first, new)
    stride = padded(len(earlier), earlier.itemsize)
    for row in range(active):
        place, column = base + row * stride + first, columns[row]
        prefetch(sums, place + width_in(earlier))
        so_far = load(sums, place) if term >= 4 else splat(earlier.dtype.type(0.0))
        so_far = fma(splat(earlier.dtype.type(weights[term - 2, column])), old, so_far)
        store(sums, place, fma(splat(earlier.dtype.type(weights[term, column])), new, so_far))


@compiled
def advance(
    driver: int, diagonal: Vector, pull: Number, now: Vector, spare: Vector, earlier: Vector, sums: Vector, base: int,
    weights: F64, columns: I64, active: int, term: int,
) -> None:  # fmt: skip
    """Overwrite ``earlier`` by 2 H now - earlier, summing on the way; ``diagonal`` and ``pull`` are doubled already."""
    size, width = len(now), width_in(now)
    hop = splat(-pull)
    if driver == HYPERCUBE:
        for first in range(0, size, width):
            old, here = load(earlier, first), load(now, first)
            new = _with_neighbours(now, first, here, hop, _at_rest(diagonal, now, here, old, first))
            _keep(earlier, first, old, new, sums, base, weights, columns, active, term)
        return
    shift = splat(_driven(driver, pull, now, spare))
    for first in range(0, size, width):
        old, here = load(earlier, first), load(now, first)
        new = _at_rest(diagonal, now, here, old, first)
        new = _with_neighbours(spare, first, load(spare, first), hop, new) if driver == PAIRS else add(new, shift)
        _keep(earlier, first, old, new, sums, base, weights, columns, active, term)


@compiled
def advance_far(
    diagonal: Vector, pull: Number, now: Vector, earlier: Vector, sums: Vector, base: int, weights: F64, columns: I64,
    active: int, term: int,
) -> None:  # fmt: skip
    """The same on the hypercube for vectors that near caches do not hold; asks for its blocks ahead of their use."""
    size, width = len(now), width_in(now)
    hop, in_bytes = splat(-pull), diagonal.view(np.int8)
    for first in range(0, size, width):
        prefetch(now, first + width)
        prefetch(earlier, first + width)
        prefetch(diagonal, first + width)
        old, here = load(earlier, first), load(now, first)
        new = _with_neighbours(now, first, here, hop, _at_rest_far(diagonal, in_bytes, now, here, old, first))
        _keep(earlier, first, old, new, sums, base, weights, columns, active, term)


@compiled
def advance_few(
    driver: int, diagonal: Vector, pull: Number, now: Vector, spare: Vector, earlier: Vector, sums: Vector, base: int,
    weights: F64, columns: I64, active: int, term: int,
) -> None:  # fmt: skip
    """The same for vectors shorter than one block."""
    size = len(now)
    stride = padded(size, now.itemsize)
    shift = now.dtype.type(0.0) if driver == HYPERCUBE else _driven(driver, pull, now, spare)
    for number in range(size):
        old = earlier[number]
        new = diagonal[number] * now[number] - old + shift
        if now.itemsize == 4:
            new += diagonal[stride + number] * now[number]
        distance = 1 if driver != COMPLETE else size
        while distance < size:
            new -= pull * (spare if driver == PAIRS else now)[number ^ distance]
            distance *= 2
        earlier[number] = new
        for row in range(active):
            place, column = base + row * stride + number, columns[row]
            so_far = sums[place] if term >= 4 else now.dtype.type(0.0)
            sums[place] = so_far + weights[term - 2, column] * old + weights[term, column] * new


@compiled
def aligned(workspace: Vector) -> Vector:
    """The workspace from its first whole cache line on."""
    line = 8 * CACHE_LINE // workspace.itemsize
    return workspace[(-(workspace.ctypes.data // workspace.itemsize)) % line :]
