"""How fast walks are, against scipy and QuTiP in the same run, on one thread. Prints; asserts nothing.

The clusters are glasses with all fields and couplings N(0,1), hopping as in the design, driver hypercube, evolved for
``||H|| t = 200`` where ``||H||`` is the triangle bound ``max|diagonal| + k * hopping``. Errors in double precision are
those of the amplitudes (2-norm) on independent spins, whose evolution is known in closed form, with the same
``||H|| t``; in single precision they are the distance of the law from the one in double precision.

The last table is the cost of one application of H from k = 8 on, in picoseconds for each of its k 2^k additions, and
the memory traffic of its vectors (level, two of the recursion, one of them written) against a measured copy. Its steps
are the caches: three vectors of 2^k doubles leave the nearest cache (32 KB) at k = 11, the second one (1 MB) at
k = 16, and the last one (32 MB, shared) at k = 21; floats a k later. Beyond the second cache not the additions count
but the loads of partners further away than it is large: every further bit of k adds a stream.

    python tests/bench/bench_propagation.py [largest k, 18] [largest k with QuTiP, 10]
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

from patchwalk.subsolvers.coefficients import DOUBLE_DECAY, SINGLE_DECAY
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.lanes import WIDTH, add, load, splat, store
from patchwalk.subsolvers.propagate import evolve, new_workspace, walk_law
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


class Timed:
    """A walk of one measuring time, ready to be run in either precision."""

    def __init__(self, spins: int, norm_times_time: float = NORM_TIMES_TIME) -> None:
        fields, couplings, self.hopping = glass(spins)
        self.spins, self.diagonal = spins, np.empty(1 << spins)
        cluster_energies(fields, couplings, self.diagonal)
        self.time = walking_time(self.diagonal, spins, self.hopping) * norm_times_time / NORM_TIMES_TIME
        self.workspaces = [new_workspace(0, spins, 1, single) for single in (False, True)]
        self.laws = np.empty((2, 1, 1 << spins))

    def run(self, single: bool) -> int:
        """One walk; returns the applications of H."""
        decay = SINGLE_DECAY if single else DOUBLE_DECAY
        times, workspace = np.array([self.time]), self.workspaces[single]
        return walk_law(self.diagonal, self.hopping, -1, times, self.laws[int(single)], 0, workspace, decay)

    def difference(self) -> float:
        """Total variation distance between the laws of the two precisions."""
        law = self.laws[1, 0] / self.laws[1, 0].sum()
        return float(0.5 * np.abs(self.laws[0, 0] - law).sum())


def compare(spins: int, peak: float) -> str:
    """One line of the main table."""
    walk = Timed(spins)
    reference = by_scipy(walk.diagonal, walk.hopping, walk.time)
    applications, fewer = walk.run(False), walk.run(True)
    double = single = reference_seconds = math.inf
    for _ in range(3 if spins <= 14 else 1):
        reference_seconds = min(reference_seconds, shortest(reference, 1))
        double = min(double, shortest(lambda: walk.run(False), 5))
        single = min(single, shortest(lambda: walk.run(True), 5))
    each = [double / applications / (spins << spins), single / fewer / (spins << spins)]
    ours, theirs = errors(spins, walk.hopping)
    return (
        f"{spins:3d} {1e3 * double:9.3f} {1e3 * single:9.3f} {1e3 * reference_seconds:9.1f}"
        f" {reference_seconds / double:7.0f} {reference_seconds / single:7.0f} {applications:8d}"
        f" {1e12 * each[0]:8.1f} {1e12 * each[1]:6.1f} {1 / each[0] / peak:7.2f} {0.5 / each[1] / peak:6.2f}"
        f" {ours:9.1e} {walk.difference():9.1e} {theirs:9.1e}"
    )


def against_qutip(spins: int) -> str:
    """Seconds of QuTiP's integrators, set to about 1e-8, over those of the walk."""
    import qutip

    walk = Timed(spins)
    walk.run(False)
    double = shortest(lambda: walk.run(False), 5)
    matrix = csr_array(diags_array(walk.diagonal) - walk.hopping * single_flips(1 << spins))
    hamiltonian = qutip.Qobj(matrix.astype(complex))
    start = qutip.Qobj(np.full((1 << spins, 1), 2.0 ** (-spins / 2), complex))
    parts = []
    for method in ("adams", "vern9", "dop853", "krylov"):
        accuracy = {"krylov_dim": 30} if method == "krylov" else {"atol": 1e-10, "rtol": 1e-9, "nsteps": 10**6}
        options = {"method": method, "progress_bar": "", **accuracy}
        begun = perf_counter()
        final = qutip.sesolve(hamiltonian, start, [0.0, walk.time], options=options).final_state
        seconds = perf_counter() - begun
        law = np.abs(final.full()[:, 0]) ** 2
        error = 0.5 * np.abs(law - walk.laws[0, 0]).sum()
        parts.append(f"{method} {seconds / double:8.0f} ({error:.0e})")
    return f"{spins:3d}   " + "   ".join(parts)


@compiled
def copy_blocks(source: F64, target: F64) -> None:
    """Copy everything."""
    for first in range(0, len(source), WIDTH):
        store(target, first, load(source, first))


def copy_rate() -> float:
    """Bytes a second, read and written, of a copy far larger than any cache."""
    source, target = np.ones(1 << 24), np.empty(1 << 24)
    copy_blocks(source, target)
    return 16 * len(source) / shortest(lambda: copy_blocks(source, target), 3)


def one_application(spins: int, copying: float) -> str:
    """One line of the table of costs."""
    walk, parts = Timed(spins, min(NORM_TIMES_TIME, 2e3 * 2.0 ** (14 - spins) + 5)), []
    for single in (False, True):
        applications = walk.run(single)
        seconds = shortest(lambda single=single: walk.run(single), 20 if spins <= 14 else 2) / applications
        traffic = (20 if single else 32) << spins  # single precision reads a second vector of levels
        parts.append(f"{1e12 * seconds / (spins << spins):10.1f} {traffic / seconds / copying:10.2f}")
    return f"{spins:3d} " + " ".join(parts)


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
    largest_qutip = int(sys.argv[2]) if len(sys.argv) > 2 else 10
    peak = addition_rate()
    print(f"load and add from the nearest cache: {peak / 1e9:.1f} G/s; ||H|| t = {NORM_TIMES_TIME:.0f}, uniform start")
    print("double (d) and single (s) precision; share of that peak, twice as high for single; errors of both, of scipy")
    print(
        "  k      d ms      s ms  scipy ms scipy/d scipy/s  applied  d ps/kN s ps  d peak s peak   d error     s law"
        "     scipy"
    )
    for spins in range(8, largest + 1, 2):
        print(compare(spins, peak), flush=True)
    print("\nQuTiP's sesolve over the walk in double precision, by method (distance of its law from ours)")
    for spins in range(8, largest_qutip + 1, 2):
        print(against_qutip(spins), flush=True)
    print("\neight measuring times over one; spectrum and eight times between 0.75 and 1.5 hops")
    print("  k   from half on    all at end  whole call ms")
    for spins in range(8, largest + 1, 2):
        print(measuring(spins), flush=True)
    copying = copy_rate()
    print(f"\none application of H: ps per k 2^k, traffic over a copy ({copying / 1e9:.0f} GB/s); double, single")
    for spins in range(8, max(largest, 20) + 1):
        print(one_application(spins, copying), flush=True)


if __name__ == "__main__":
    main()
