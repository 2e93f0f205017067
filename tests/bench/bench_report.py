"""How large a report on 5,000 walk calls with six rivals becomes, and how long it takes.

    python tests/bench/bench_report.py

Prints bytes as a share of 5 MB, seconds, and where the bytes are; asserts nothing.
"""

from __future__ import annotations

import re
import tempfile
import time
from pathlib import Path

from patchwalk import make, replay, report, solve

RIVALS = ("enumeration", "elimination", "metropolis", "tabu", "uniform", "none")
LIMIT = 5_000_000


def main() -> None:
    """One run, its replay, its report."""
    with tempfile.TemporaryDirectory() as folder:
        run = Path(folder) / "run.sqlite"
        problem = make("lattice2d", 32, seed=1, couplings="gaussian")
        solve(problem, subsolver="walk", cluster_size=9, calls=5000, run=run)
        replay(run, list(RIVALS))
        report(run, Path(folder) / "page.html")  # so that imports are over
        began = time.perf_counter()
        found = report(run, Path(folder) / "page.html")
        seconds = time.perf_counter() - began
        text = found.path.read_text()
        pictures = sum(len(one) for one in re.findall(r"<svg.*?</svg>", text, re.DOTALL))
        tables = sum(len(one) for one in re.findall(r'href="data:[^"]*"', text))
        print(f"{found.size:,} bytes, {found.size / LIMIT:.3f} of the limit, in {seconds:.1f} s")
        print(f"{found.figures} pictures take {pictures / found.size:.0%}, their data {tables / found.size:.0%}")


if __name__ == "__main__":
    main()
