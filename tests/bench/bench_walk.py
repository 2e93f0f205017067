"""What a call of the walk costs with everything in it, on one thread. Prints; asserts nothing.

Clusters are glasses with all fields and couplings N(0,1), in batches, at default measuring times: energies,
coefficients, propagation, hit probability and the outcome drawn. Beside it enumeration of the same clusters, the
forecast, the share of what is not propagation, very large clusters, and the price of an endless walk.

    python tests/bench/bench_walk.py [largest k, 20]
"""

from __future__ import annotations

import math
import resource
import sys
from collections.abc import Callable
from time import perf_counter

import numpy as np

from patchwalk.subsolvers import ClusterBatch, Subsolver, make_subsolver
from patchwalk.subsolvers.walk import Walk


def shortest(action: Callable[[], object], repeats: int) -> float:
    seconds = math.inf
    for _ in range(repeats):
        begun = perf_counter()
        action()
        seconds = min(seconds, perf_counter() - begun)
    return seconds


def glasses(rows: int, size: int) -> ClusterBatch:
    draw = np.random.default_rng(size)
    upper = np.triu(draw.normal(size=(rows, size, size)), 1)
    return ClusterBatch(
        fields=draw.normal(size=(rows, size)),
        spins=draw.choice(np.array([-1, 1], np.int8), (rows, size)),
        temperature=np.ones(rows),
        seeds=draw.integers(0, 2**63, rows, dtype=np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def per_call(subsolver: Subsolver, batch: ClusterBatch, repeats: int) -> float:
    """Milliseconds per call."""
    subsolver.propose(batch)
    return 1e3 * shortest(lambda: subsolver.propose(batch), repeats) / len(batch)


def whole_calls(size: int) -> str:
    """One line of the main table."""
    batch = glasses(64 if size <= 12 else 8 if size <= 16 else 1, size)
    repeats = 20 if size <= 12 else 5 if size <= 16 else 2
    walk, tight = make_subsolver("walk"), make_subsolver("walk", tolerance=1e-10)
    times = [per_call(made, batch, repeats) for made in (walk, tight, make_subsolver("walk", time_in_hops=1.5))]
    shots = per_call(make_subsolver("walk", shots=100), batch, repeats)
    listing = per_call(make_subsolver("enumeration"), batch, repeats)
    forecast = 1e6 * shortest(lambda: walk.forecast(batch), 20) / len(batch)
    pairs, complete = (per_call(make_subsolver("walk", driver=name), batch, 2) for name in ("pairs", "complete"))
    return (
        f"{size:3d} {times[0]:9.3f} {times[1]:9.3f} {times[0] / times[2]:8.2f} {shots / times[0]:8.2f}"
        f" {pairs / times[1]:7.2f} {complete / times[1]:8.2f} {times[0] / listing:8.0f} {forecast:8.1f}"
    )


def endless(size: int) -> str:
    """An endless walk's cost for each update that it counts, over that of a walk of the same cluster."""
    batch = glasses(2, size)
    walks = [Walk(time="infinite"), Walk(tolerance=1e-10)]
    prices = []
    for walk in walks:
        updates = walk.propose(batch).work.amplitude_updates
        assert updates is not None
        prices.append(per_call(walk, batch, 2) / float(updates[0]))
    return f"{size:3d} {prices[0] / prices[1]:6.2f}"


def main() -> None:
    largest = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    print("default call and one to 1e-10, ms; eight times over one; a hundred shots over one; other drivers over the")
    print("hypercube, both to 1e-10; over enumeration; forecast, us a row")
    print("  k   default     1e-10 8 times/1    shots   pairs complete    / enum forecast")
    for size in (6, 8, 10, 12, 14, 16, 18, 20, 22):
        if size <= largest:
            print(whole_calls(size), flush=True)
    print("\nendless walk: time per counted update, over that of a walk")
    for size in (6, 8, 10):
        print(endless(size), flush=True)
    vector = 8 << largest
    peak = 1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    forecast = make_subsolver("walk").forecast(glasses(1, largest)).bytes
    print(f"\nmemory in vectors of 2^{largest} doubles: forecast {forecast / vector:.1f}, process {peak / vector:.1f}")


if __name__ == "__main__":
    main()
