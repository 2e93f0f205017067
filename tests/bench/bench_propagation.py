"""How fast walks are, against scipy's ``expm_multiply`` in the same run, on one thread. Prints; asserts nothing.

The clusters are glasses with all fields and couplings N(0,1), hopping as in the design, evolved for
``||H|| t = 200`` where ``||H||`` is the triangle bound ``max|diagonal| + k * hopping``. Errors are those of the
amplitudes (2-norm) on independent spins, whose evolution is known in closed form, with the same ``||H|| t``.

    python tests/bench/bench_propagation.py [largest k]
"""

from __future__ import annotations

import math
import sys
from collections.abc import Callable
from time import perf_counter

import numpy as np
import numpy.typing as npt
from scipy.sparse import csr_array, diags_array
from scipy.sparse.linalg import expm_multiply
from scipy.special import erfinv

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.lanes import WIDTH, add, load, splat, store
from patchwalk.subsolvers.propagate import evolve, walk_law
from patchwalk.subsolvers.spectrum import cluster_energies

NORM_TIMES_TIME = 200.0


@compiled
def sum_blocks(values: F64, repeats: int, total: F64) -> None:
    """Load and add everything in ``values`` so many times."""
    running = splat(0.0)
    for _ in range(repeats):
        for first in range(0, len(values), WIDTH):
            running = add(running, load(values, first))
    store(total, 0, running)


def addition_rate() -> float:
    """Additions a second with operands loaded from the nearest cache."""
    room = np.zeros(2048 + 8)
    values, total = room[-room.ctypes.data // 8 % 8 :][:2048], np.empty(WIDTH)
    sum_blocks(values, 1, total)
    return 2048 * 20_000 / shortest(lambda: sum_blocks(values, 20_000, total), 5)


def shortest(action: Callable[[], object], repeats: int) -> float:
    seconds = math.inf
    for _ in range(repeats):
        begun = perf_counter()
        action()
        seconds = min(seconds, perf_counter() - begun)
    return seconds


def glass(spins: int) -> tuple[F64, F64, float]:
    """Fields, couplings and hopping rate of a random cluster."""
    draw = np.random.default_rng(spins)
    fields, upper = draw.normal(size=spins), np.triu(draw.normal(size=(spins, spins)), 1)
    couplings = upper + upper.T
    clipped = np.minimum(np.abs(fields), np.abs(couplings).sum(axis=1))
    spread = math.sqrt((upper**2).sum() + (clipped**2).sum())
    span = 2 * math.sqrt(2) * erfinv(1 - 2.0 ** (1 - spins)) * spread
    return fields, couplings, span / (2 * spins)


def single_flips(size: int) -> csr_array:
    numbers = np.arange(size)
    flips = [numbers ^ (1 << bit) for bit in range(size.bit_length() - 1)]
    rows = np.tile(numbers, len(flips))
    return csr_array((np.ones(len(rows)), (rows, np.concatenate(flips))), shape=(size, size))


def by_scipy(diagonal: F64, hopping: float, time: float) -> Callable[[], npt.NDArray[np.complex128]]:
    """The same evolution from the uniform start, everything but ``expm_multiply`` itself done beforehand."""
    matrix = csr_array(-1j * time * (diags_array(diagonal) - hopping * single_flips(len(diagonal))))
    start = np.full(len(diagonal), len(diagonal) ** -0.5, complex)
    trace = -1j * time * diagonal.sum()
    return lambda: expm_multiply(matrix, start, traceA=trace)


def walking_time(diagonal: F64, spins: int, hopping: float) -> float:
    return NORM_TIMES_TIME / (float(np.abs(diagonal).max()) + spins * hopping)


def errors(spins: int, hopping: float) -> tuple[float, float]:
    """Errors of the walk and of the reference on independent spins."""
    fields = np.random.default_rng(spins + 100).normal(size=spins) * math.sqrt(spins)
    diagonal = np.empty(1 << spins)
    cluster_energies(fields, np.zeros((spins, spins)), diagonal)
    time = walking_time(diagonal, spins, hopping)
    exact = np.ones(1, complex)
    for field in fields:
        rate = math.hypot(field, hopping)
        turn = math.sin(rate * time) / rate
        amplitudes = math.cos(rate * time) - 1j * turn * np.array([field - hopping, -field - hopping])
        exact = np.kron(amplitudes / math.sqrt(2), exact)
    ours = np.linalg.norm(evolve(diagonal, hopping, time)[0] - exact)
    return float(ours), float(np.linalg.norm(by_scipy(diagonal, hopping, time)() - exact))


def compare(spins: int, peak: float) -> str:
    """One line of the main table."""
    fields, couplings, hopping = glass(spins)
    diagonal = np.empty(1 << spins)
    cluster_energies(fields, couplings, diagonal)
    times = np.array([walking_time(diagonal, spins, hopping)])
    law = np.empty((1, len(diagonal)))
    reference = by_scipy(diagonal, hopping, times[0])
    applications = walk_law(diagonal, hopping, -1, times, law)
    walk_seconds = reference_seconds = math.inf
    for _ in range(3 if spins <= 14 else 1):
        reference_seconds = min(reference_seconds, shortest(reference, 1))
        walk_seconds = min(walk_seconds, shortest(lambda: walk_law(diagonal, hopping, -1, times, law), 5))
    each = walk_seconds / applications / (spins << spins)
    ours, theirs = errors(spins, hopping)
    return (
        f"{spins:3d} {1e3 * walk_seconds:10.3f} {1e3 * reference_seconds:10.1f} {reference_seconds / walk_seconds:8.0f}"
        f" {applications:8d} {1e12 * each:9.1f} {1 / each / peak:9.2f} {ours:10.1e} {theirs:10.1e}"
    )


def measuring(spins: int) -> str:
    """One line on eight measuring times: in a long walk, and in a whole call at the default times."""
    fields, couplings, hopping = glass(spins)
    diagonal = np.empty(1 << spins)
    cluster_energies(fields, couplings, diagonal)
    longest = walking_time(diagonal, spins, hopping)
    law = np.empty((8, len(diagonal)))

    def call(times: F64) -> Callable[[], object]:
        return lambda: walk_law(diagonal, hopping, -1, times, law)

    def whole_call() -> None:
        cluster_energies(fields, couplings, diagonal)
        walk_law(diagonal, hopping, -1, short, law)

    short = np.linspace(0.75, 1.5, 8) / hopping
    repeats = 50 if spins <= 12 else 3
    one = shortest(call(np.array([longest])), repeats)
    eight = shortest(call(np.linspace(0.5 * longest, longest, 8)), repeats)
    equal = shortest(call(np.linspace(0.99 * longest, longest, 8)), repeats)
    return f"{spins:3d} {eight / one:14.2f} {equal / one:14.2f} {1e3 * shortest(whole_call, repeats):14.3f}"


def main() -> None:
    largest = int(sys.argv[1]) if len(sys.argv) > 1 else 18
    peak = addition_rate()
    print(f"load and add from the nearest cache: {peak / 1e9:.1f} G/s; ||H|| t = {NORM_TIMES_TIME:.0f}, uniform start")
    print("  k    walk ms  scipy ms     ratio  applied  ps/(k N)  of peak     error  (scipy's)")
    for spins in range(8, largest + 1, 2):
        print(compare(spins, peak), flush=True)
    print("\neight measuring times over one; spectrum and eight times between 0.75 and 1.5 hops")
    print("  k   from half on    all at end  whole call ms")
    for spins in range(8, largest + 1, 2):
        print(measuring(spins), flush=True)


if __name__ == "__main__":
    main()
