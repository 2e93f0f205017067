"""What the outer loop costs: time outside the subsolver per call, and sweeps and memory as the problem grows.

    python tests/bench/bench_outer.py

Prints figures and ratios; asserts nothing. Aims: at most 20 microseconds outside the subsolver per call with
``uniform`` at k = 10 on a 10,000-spin lattice; time per sweep and memory linear in the number of spins.
"""

from __future__ import annotations

import json
import math
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from patchwalk.clusters.rules import cluster_rule
from patchwalk.problem.families import make
from patchwalk.search.neighbourhood import Ends, NeighbourhoodSearch, Plan
from patchwalk.search.sweeps import metropolis_sweep
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers import make_subsolver
from patchwalk.subsolvers.draws import stream_for

EDGES = (10, 22, 46, 100)


def time_outside(calls: int = 100_000) -> None:
    """Whole run without the subsolver's own seconds, with and without a run file."""
    from patchwalk import solve

    problem = make("lattice2d", 100, seed=1)
    plan = Plan(
        cluster_rule("ball"), 10, 64, 0, GeometricCooling(0.5, 0.05, problem.field_scale), Ends(calls=calls)
    )  # fmt: skip
    search = NeighbourhoodSearch(problem, make_subsolver("uniform"), plan, 1)
    search.prepare()
    began, inside = time.perf_counter(), 0.0
    for round_ in search.rounds():
        inside += sum(part.seconds for part in round_.calls)
    outside = (time.perf_counter() - began - inside) / calls
    print(
        f"outside the subsolver, no run file: {1e6 * outside:.1f} us a call (subsolver {1e6 * inside / calls:.1f} us)"
    )
    for record in ("share", "all"):
        with tempfile.TemporaryDirectory() as folder:
            solution = solve(
                problem, subsolver="uniform", cluster_size=10, sweeps=0, calls=calls, record=record,
                run=Path(folder) / "run.sqlite",
            )  # fmt: skip
        per_call = solution.seconds / calls - inside / calls
        print(f"the same with a run file, rows: {record}: {1e6 * per_call:.1f} us a call")


def one_size(edge: int) -> None:
    """Seconds per sweep and peak memory on a cubic lattice; run in a process of its own."""
    began = time.perf_counter()
    problem = make("lattice3d", edge, seed=1)
    made = time.perf_counter() - began
    plan = Plan(cluster_rule("ball"), 12, 64, 1, GeometricCooling(0.5, 0.05, problem.field_scale), Ends(calls=6400))
    search = NeighbourhoodSearch(problem, make_subsolver("uniform"), plan, 1)
    search.prepare()
    graph = (problem.row_starts, problem.neighbours, problem.couplings)
    sweeps = max(3, 3_000_000 // len(problem))
    began = time.perf_counter()
    for sweep in range(sweeps):
        metropolis_sweep(*graph, search.spins, search.local_fields, 1.0, stream_for(sweep))
    per_sweep = (time.perf_counter() - began) / sweeps
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    print(json.dumps({"spins": len(problem), "made": made, "per_sweep": per_sweep, "peak": peak}))


def sizes() -> None:
    rows = []
    for edge in EDGES:
        run = subprocess.run([sys.executable, __file__, str(edge)], capture_output=True, text=True, check=True)
        rows.append(json.loads(run.stdout))
    for row in rows:
        spins = row["spins"]
        print(
            f"{spins:>9,} spins: {1e9 * row['per_sweep'] / spins:6.2f} ns a spin update, peak memory "
            f"{row['peak'] / 1e6:7.0f} MB, made in {row['made']:.2f} s"
        )
    first, last = rows[0], rows[-1]
    exponent = math.log(last["per_sweep"] / first["per_sweep"]) / math.log(last["spins"] / first["spins"])
    print(f"time per sweep grows as n^{exponent:.3f}")


if __name__ == "__main__":
    if len(sys.argv) > 1:
        one_size(int(sys.argv[1]))
    else:
        time_outside()
        sizes()
