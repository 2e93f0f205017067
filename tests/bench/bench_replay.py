"""How long it takes to replay runs of 5,000 walk calls against six rivals.

    python tests/bench/bench_replay.py

Prints seconds and, for each rival, what it was worth; asserts nothing. Aim: a 2D and a 3D glass and an SK problem
together in under ten minutes on two cores.
"""

from __future__ import annotations

import os
import tempfile
import time
from pathlib import Path

from patchwalk import make, replay, solve

RIVALS = ("enumeration", "elimination", "metropolis", "tabu", "uniform", "none")
FAMILIES = (("lattice2d", 32), ("lattice3d", 10), ("sk", 512))
AIM_SECONDS = 600.0


def main() -> None:
    """All three runs, then their replays, rival by rival so that each is timed by itself."""
    everything = 0.0
    with tempfile.TemporaryDirectory() as folder:
        for family, size in FAMILIES:
            path = Path(folder) / f"{family}.sqlite"
            problem = make(family, size, seed=1)
            solution = solve(problem, subsolver="walk", cluster_size=10, calls=5000, run=path)
            print(f"{family} {size}: 5,000 walk calls of 10 spins in {solution.seconds:.1f} s")
            parts = {"the run's own": replay(path, []).seconds}
            for rival in RIVALS:
                replayed = replay(path, [rival])
                parts[rival] = replayed.seconds
            everything += sum(parts.values())
            print("  replayed in " + ", ".join(f"{name} {seconds:.1f} s" for name, seconds in parts.items()))
            print(replayed)
    cores = len(os.sched_getaffinity(0))
    print(
        f"replays, compiling included: {everything:.0f} s on {cores} cores, {everything / AIM_SECONDS:.2f} of the aim"
    )


if __name__ == "__main__":
    began = time.perf_counter()
    main()
    print(f"everything took {time.perf_counter() - began:.0f} s")
