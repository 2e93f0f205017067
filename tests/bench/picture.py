"""Makes the README's picture: the demo's interference against cluster calls, walk beside uniform, sweeps off.

python tests/bench/picture.py configs/quillmere-run.svg
"""

from __future__ import annotations

import sqlite3
import sys
import tempfile
from contextlib import closing
from pathlib import Path

import matplotlib as mpl

mpl.use("svg")
from matplotlib import pyplot as plt

from patchwalk import solve

ROOT = Path(__file__).resolve().parents[2]
CONTESTANTS = (
    ("walk,shots=2", "walk, 2 shots", "#7a1f5c", -20),
    ("uniform,shots=2", "uniform, 2 shots", "#a06a12", -20),
)
SEEDS = "1..3"


def draw(target: Path) -> None:
    mpl.rcParams.update(
        {"font.size": 10, "svg.hashsalt": "patchwalk", "axes.spines.top": False, "axes.spines.right": False}
    )
    figure, axes = plt.subplots(figsize=(7.5, 3.6), layout="constrained")
    greedy = 0.0
    for spelling, label, colour, below in CONTESTANTS:
        with tempfile.TemporaryDirectory() as folder:
            run = Path(folder) / "run.sqlite"
            solution = solve(ROOT / "configs/quillmere.toml", subsolver=spelling, sweeps=0, seeds=SEEDS, run=run)
            with closing(sqlite3.connect(run)) as database:
                traces = [
                    database.execute(
                        "SELECT calls, energy FROM incumbents WHERE run = ? ORDER BY calls", (number,)
                    ).fetchall()
                    for (number,) in database.execute("SELECT run FROM runs").fetchall()
                ]
        greedy = solution.answer["greedy_interference"]
        for trace in traces:
            calls, energies = zip(*trace, (solution.calls, trace[-1][1]), strict=True)
            axes.step(calls, energies, where="post", color=colour, linewidth=1.4)
        ends = ", ".join(f"{run.energy:.0f}" for run in solution.runs)
        axes.annotate(
            f"{label}: {ends}", (solution.calls, traces[0][-1][1]), xytext=(-4, below), textcoords="offset points",
            ha="right", color=colour,
        )  # fmt: skip
    axes.axhline(greedy, color="0.4", linestyle=":", linewidth=1.2)
    axes.annotate(
        f"simple greedy rule: {greedy:.0f}", (20_000, greedy), xytext=(-4, 5),
        textcoords="offset points", ha="right", color="0.35",
    )  # fmt: skip
    axes.set(
        xlabel="cluster calls (12 spins each)", ylabel="lowest interference so far", ylim=(2380, 2900), xlim=(0, None)
    )
    axes.set_title("Quillmere beacons, sweeps off, three seeds each", loc="left", fontsize=10)
    figure.savefig(target, metadata={"Date": None})


if __name__ == "__main__":
    draw(Path(sys.argv[1]))
