"""How fast anneals are, against QuTiP's ``sesolve`` in the same run, on one thread. Prints; asserts nothing.

The clusters are glasses with all fields and couplings N(0,1), annealed forward (linear ramp) and in reverse (from an
incumbent that no single flip improves, to the turning point and back) with the hopping rate of the design. Ours runs
at its default tolerance of 1e-6 in total variation. QuTiP runs with each of its integrators at the loosest of a few
tolerances that brings the same law within 1e-6, and the fastest counts. Errors are against our law at the tolerance
1e-11, which the tests compare with dense exponentials.

    python tests/bench/bench_anneal.py [largest k]
"""

from __future__ import annotations

import math
import os
import sys
from collections.abc import Callable
from time import perf_counter

os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
import qutip
from scipy.sparse import csr_array, diags_array

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.anneal_calls import Anneal
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.drivers import heuristic_hopping, level_spread
from patchwalk.subsolvers.spectrum import cluster_energies, configuration_number

WITHIN = 1e-6
METHODS = ("dop853", "vern9", "vern7", "adams", "lsoda")
TOLERANCES = (1e-7, 1e-8, 1e-9, 1e-10)
TURNING_POINT = 0.4


def glass(spins: int) -> ClusterBatch:
    draw = np.random.default_rng(spins)
    upper = np.triu(draw.normal(size=(spins, spins)), 1)
    fields, couplings = draw.normal(size=spins), upper + upper.T
    incumbent = draw.choice(np.array([-1, 1], np.int8), size=spins)
    while np.any(uphill := incumbent * (fields + couplings @ incumbent) > 0):
        incumbent[np.argmax(uphill)] *= -1
    return ClusterBatch(fields[None], incumbent[None], np.ones(1), np.ones(1), couplings[None])


def shortest(action: Callable[[], object], repeats: int) -> float:
    seconds = math.inf
    for _ in range(repeats):
        begun = perf_counter()
        action()
        seconds = min(seconds, perf_counter() - begun)
    return seconds


def operators(batch: ClusterBatch) -> tuple[qutip.Qobj, qutip.Qobj]:
    """sum_i X_i and H_P as sparse matrices, H_P about the middle of its spread, which is quicker."""
    assert batch.couplings is not None
    size = 1 << batch.size
    energies = np.empty(size)
    cluster_energies(batch.fields[0], batch.couplings[0], energies)
    numbers = np.arange(size)
    flips = np.concatenate([numbers ^ (1 << bit) for bit in range(batch.size)])
    mover = csr_array((np.ones(len(flips), complex), (np.tile(numbers, batch.size), flips)), shape=(size, size))
    levels = diags_array((energies - 0.5 * (energies.min() + energies.max())).astype(complex)).tocsr()
    return qutip.Qobj(mover.tocsr()).to("csr"), qutip.Qobj(levels).to("csr")


def progress(name: str, duration: float) -> Callable[[float], float]:
    if name == "forward":
        return lambda time: time / duration
    return lambda time: 1.0 - (1.0 - TURNING_POINT) * (1.0 - abs(2.0 * time / duration - 1.0))


def best_of_qutip(batch: ClusterBatch, name: str, duration: float, hopping: float, exact: F64) -> tuple[float, str]:
    """Seconds of the fastest integrator that is within the error, and which it is."""
    mover, levels = operators(batch)
    share = progress(name, duration)
    hamiltonian = qutip.QobjEvo([[mover, lambda t: -hopping * (1.0 - share(t))], [levels, share]])
    size = 1 << batch.size
    amplitudes = np.full((size, 1), size**-0.5, complex)
    if name == "reverse":
        amplitudes = np.eye(size, dtype=complex)[:, [configuration_number(batch.spins[0])]]
    start = qutip.Qobj(amplitudes)
    # a bend in the drive is a place to stop, for the integrator's good
    times = [0.0, duration] if name == "forward" else [0.0, 0.5 * duration, duration]
    best, which = math.inf, "none"
    for method in METHODS:
        for tolerance in TOLERANCES:
            options = {
                "method": method, "atol": tolerance, "rtol": tolerance, "nsteps": 10**7, "progress_bar": "",
                "normalize_output": False, "store_states": False, "store_final_state": True,
            }  # fmt: skip
            begun = perf_counter()
            final = qutip.sesolve(hamiltonian, start, times, options=options).final_state.full()[:, 0]
            seconds = perf_counter() - begun
            if 0.5 * np.abs(np.abs(final) ** 2 - exact).sum() < WITHIN:
                if seconds < best:
                    best, which = seconds, f"{method} {tolerance:.0e}"
                break
            if seconds > 2.0 * best:
                break
    return best, which


def compare(spins: int, name: str, duration: float) -> str:
    """One line of the table."""
    batch, hopping = glass(spins), np.empty(1)
    assert batch.couplings is not None
    heuristic_hopping(batch.fields, batch.couplings, level_spread(spins), hopping)
    options = {"turning_point": TURNING_POINT} if name == "reverse" else {}
    anneal = make_subsolver(name, duration=duration, **options)
    finest = make_subsolver(name, duration=duration, tolerance=1e-11, **options)
    assert isinstance(anneal, Anneal)
    assert isinstance(finest, Anneal)
    exact, law = finest.distribution(batch)[0], anneal.distribution(batch)[0]
    repeats = max(3, 40 // (1 << max(0, spins - 8)))
    before = shortest(lambda: anneal.propose(batch), repeats)
    theirs, which = best_of_qutip(batch, name, duration, float(hopping[0]), exact)
    ours = min(before, shortest(lambda: anneal.propose(batch), repeats))
    updates = anneal.propose(batch).work.amplitude_updates
    assert updates is not None
    return (
        f"{name:8s} {spins:3d} {duration:6.0f} {1e3 * ours:10.2f} {1e3 * theirs:10.1f} {theirs / ours:8.0f}   "
        f"{which:14s} {updates[0] >> spins:7d} {0.5 * np.abs(law - exact).sum():9.1e}"
    )


def main() -> None:
    largest = int(sys.argv[1]) if len(sys.argv) > 1 else 12
    print("whole calls (spectrum, evolution, draw) to 1e-6 in total variation; ratio = sesolve / ours")
    print("           k   time    ours ms  sesolve ms  ratio   its best        passes  our error")
    for name in ("forward", "reverse"):
        for duration in (20.0, 50.0):
            for spins in range(8, largest + 1, 2):
                print(compare(spins, name, duration), flush=True)


if __name__ == "__main__":
    main()
