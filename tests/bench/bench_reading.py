"""How long large files take to read, and how much memory (on Linux).

    python tests/bench/bench_reading.py

Prints seconds and peak memory, each file in a process of its own; asserts nothing. Aims: a graph of a million edges
in under 3 s and 1 GB, a million weighted clauses in under 6 s. On a machine that others use too, the processor's
seconds say more than the clock's.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

COUNT, SIZE = 1_000_000, 200_000
AIMS = {"edges.txt": 3.0, "edges.txt.gz": 3.0, "pairs.csv": 3.0, "clauses.wcnf": 6.0}


def write_files(folder: Path) -> None:
    """A random graph with Gaussian weights in every form, and random clauses."""
    from patchwalk.problem.encodings import encode_max2sat
    from patchwalk.problem.files import write_problem
    from patchwalk.problem.ising import Problem

    draws = np.random.default_rng(1)
    heads = draws.integers(0, SIZE, COUNT)
    tails = (heads + draws.integers(1, SIZE, COUNT)) % SIZE
    graph = Problem.from_arrays(heads, tails, draws.standard_normal(COUNT), size=SIZE)
    for ending in ("txt", "txt.gz", "mtx"):
        write_problem(graph, folder / f"edges.{ending}")
    for name in ("pairs.csv", "graph.graphml", "graph.json", "arrays.npz"):
        write_problem(graph, folder / name)
    signs = 1 - 2 * draws.integers(0, 2, (COUNT, 2))
    clauses = signs * np.stack([heads + 1, tails + 1], axis=1)
    write_problem(encode_max2sat(clauses, draws.integers(1, 10, COUNT), SIZE), folder / "clauses.wcnf")


def read_one(path: str) -> None:
    """Read one file and print what it took; run in a process of its own."""
    import scipy.sparse  # noqa: F401 - loading libraries is not reading

    from patchwalk.problem.files import read_problem

    began, used = time.perf_counter(), time.process_time()
    problem = read_problem(path)
    seconds, cpu = time.perf_counter() - began, time.process_time() - used
    status = Path("/proc/self/status").read_text()  # ru_maxrss would count the process that started this one
    peak = 1024 * int(status.split("VmHWM:")[1].split()[0])
    print(json.dumps({"couplings": problem.coupling_count, "seconds": seconds, "cpu": cpu, "peak": peak}))


def main() -> None:
    with tempfile.TemporaryDirectory() as folder:
        write_files(Path(folder))
        print("file               MB  couplings  seconds  processor  GB peak  of the aim")
        for path in sorted(Path(folder).iterdir()):
            run = subprocess.run([sys.executable, __file__, str(path)], capture_output=True, text=True, check=True)
            row = json.loads(run.stdout)
            aim = AIMS.get(path.name)
            share = f"{row['seconds'] / aim:11.2f}" if aim else f"{'-':>11}"
            print(
                f"{path.name:14} {path.stat().st_size / 1e6:6.1f} {row['couplings']:10,} {row['seconds']:8.2f} "
                f"{row['cpu']:10.2f} {row['peak'] / 1e9:8.2f} {share}"
            )


if __name__ == "__main__":
    if len(sys.argv) > 1:
        read_one(sys.argv[1])
    else:
        main()
