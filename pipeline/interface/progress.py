"""How a run shows itself: a table that grows slowly, on standard error, and on a terminal a live last line.

Nothing but the result ever goes to standard output.
"""

from __future__ import annotations

import time

from rich.console import Console
from rich.live import Live
from rich.text import Text

from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.neighbourhood import NeighbourhoodSearch
from patchwalk.subsolvers.registry import spelled

COLUMNS = (("time", 7), ("calls", 10), ("spent", 6), ("temperature", 12), ("{objective}", 13), ("best", 12),
           ("acceptance", 11), ("found by", 9))  # fmt: skip
"""Whole words, 80 characters in all; ``spent`` is the share of the budget."""

LIVE_SECONDS = 0.2
SLOWEST_LINE_SECONDS = 60.0


class Narrator:
    """Tells a person at a terminal, or a log file, how a solve is going."""

    def __init__(self, quiet: bool = False) -> None:
        self._console = Console(stderr=True, highlight=False, quiet=quiet)
        self._live: Live | None = None
        self._finder = "start"

    def understood(self, lines: list[str]) -> None:
        for line in lines:
            self._say(line)

    def compiling(self) -> None:
        self._compile_note = time.perf_counter()
        if self._console.is_terminal:
            self._live = Live(Text("compiling ...", style="dim"), console=self._console, transient=True)
            self._live.start()
        else:
            self._say("compiling (the first time takes seconds, later runs find it done) ...")

    def compiled(self, seconds: float) -> None:
        self._stop_live()
        self._say(f"compiled and prepared in {seconds:.1f} s, which no budget counts")

    def began(self, problem: Problem, seed: int, start_energy: float | None) -> None:
        self._problem, self._finder = problem, "start"
        self._calls_seen = self._accepted = self._lines_calls = 0
        self._next_line, self._next_live, self._temperature, self._acceptance = 0.0, 0.0, 0.0, "-"
        self._say(f"seed {seed}")
        if start_energy is not None:
            word = problem.objective_name
            self._say(f"start accepted, {word} {problem.objective(start_energy):,.6g}")
        self._say(self._header())
        if self._console.is_terminal:
            self._live = Live(console=self._console, auto_refresh=False, transient=True)
            self._live.start()

    def moved(self, search: NeighbourhoodSearch, round_: Round) -> None:
        if round_.improvements:
            self._finder = round_.improvements[-1].finder
        for calls in round_.calls:
            self._calls_seen += len(calls)
            self._accepted += int(calls.accepted.sum())
        now, self._temperature = search.elapsed, float(round_.temperatures.min())
        if self._live is not None and now >= min(self._next_live, self._next_line):
            self._next_live = now + LIVE_SECONDS
            self._live.update(Text(self._line(search), style="bold"), refresh=True)
        if now >= self._next_line:
            self._next_line = now + min(SLOWEST_LINE_SECONDS, max(1.0, now))
            self._say(self._line(search))
            self._lines_calls = search.calls
            self._calls_seen = self._accepted = 0

    def bounding(self, seconds: float) -> None:
        self._stop_live()
        self._say(f"looking for a lower bound, for at most {seconds:g} s")

    def stopping(self) -> None:
        self._say("stopping after the slice in flight; Ctrl-C once more stops at once")

    def ended(self, search: NeighbourhoodSearch) -> None:
        self._stop_live()
        if search.calls > self._lines_calls:
            self._say(self._line(search))
        self._say(f"{spelled(search.subsolver)}: {search.message}")

    def _header(self) -> str:
        word = self._problem.objective_name
        return "".join(f"{name.format(objective=word):>{width}}" for name, width in COLUMNS)

    def _line(self, search: NeighbourhoodSearch) -> str:
        objective = search.problem.objective
        if self._calls_seen:
            self._acceptance = f"{100 * self._accepted / self._calls_seen:.1f} %"
        cells = (
            f"{search.elapsed:.1f} s", f"{search.calls:,}", f"{100 * search.stage:.0f} %", f"{self._temperature:.4g}",
            f"{objective(search.energy):,.7g}", f"{objective(search.best_energy):,.7g}", self._acceptance, self._finder,
        )  # fmt: skip
        return "".join(f"{cell:>{width}}" for cell, (_, width) in zip(cells, COLUMNS, strict=True))

    def _say(self, line: str) -> None:
        self._console.print(line, markup=False, soft_wrap=True)

    def _stop_live(self) -> None:
        if self._live is not None:
            self._live.stop()
            self._live = None
