"""How ``bound`` shows itself: the node log on standard error, and the result in words."""

from __future__ import annotations

from rich.console import Console

from patchwalk.commands.bounding import Bound
from patchwalk.problem.ising import Problem
from patchwalk.search.bound_search import BoundSearch, NodeLine

COLUMNS = (("node", 7), ("depth", 6), ("node bound", 14), ("bound", 14), ("best", 14), ("gap", 9), ("open", 7),
           ("cuts", 8), ("time", 9), ("outcome", 9))  # fmt: skip
"""Whole words; bounds and best energies in the user's own objective, cuts as they are in the program."""

SLOWEST_LINE_SECONDS = 60.0


class NodeNarrator:
    """Tells a person at a terminal, or a log file, how the bound is going: a line a node, fewer as time goes on."""

    def __init__(self, problem: Problem, quiet: bool = False) -> None:
        self._console = Console(stderr=True, highlight=False, quiet=quiet)
        self._problem = problem
        self._seen, self._next, self._head = 0, 0.0, False

    def understood(self, lines: list[str]) -> None:
        for line in lines:
            self._say(line)

    def compiling(self) -> None:
        self._say("compiling (the first time takes seconds, later runs find it done) ...")

    def compiled(self, seconds: float) -> None:
        self._say(f"compiled and prepared in {seconds:.1f} s, which no budget counts")

    def moved(self, search: BoundSearch) -> None:
        if not self._head:
            self._head = True
            self._say("".join(f"{name:>{width}}" for name, width in COLUMNS))
        if len(search.log) > self._seen:
            self._seen = len(search.log)
            if search.elapsed >= self._next or not search.open_count:
                self._next = search.elapsed + min(SLOWEST_LINE_SECONDS, 0.05 * search.elapsed)
                self._say(self._line(search.log[-1]))

    def stopping(self) -> None:
        self._say("stopping after the linear program in hand; Ctrl-C once more stops at once")

    def _line(self, line: NodeLine) -> str:
        objective = self._problem.objective
        cells = (
            f"{line.node:,}", f"{line.depth}", f"{objective(line.node_bound):,.8g}", f"{objective(line.bound):,.8g}",
            f"{objective(line.best):,.8g}", f"{100 * line.gap:.3f} %", f"{line.open_nodes:,}", f"{line.cuts:,}",
            f"{line.seconds:.1f} s", line.outcome,
        )  # fmt: skip
        return "".join(f"{cell:>{width}}" for cell, (_, width) in zip(cells, COLUMNS, strict=True))

    def _say(self, line: str) -> None:
        self._console.print(line, markup=False, soft_wrap=True)


def in_words(result: Bound) -> str:
    """Several lines: the bound first, then what proves it and how it was come by."""
    side = "at most" if result.objective_name == "cut" else "at least"
    word = result.objective_name
    if result.status == "proved_optimal":
        first = f"{word} {result.objective:,.10g} is proved optimal"
    else:
        first = (
            f"{word} is {side} {result.objective_bound:,.10g}; the best found is {result.objective:,.10g} "
            f"(gap {100 * result.gap:.3f} %); {result.message}"
        )
    counted = "1 node" if result.nodes == 1 else f"{result.nodes:,} nodes"
    lines = [
        first,
        f"certificate: {result.proof}",
        f"{counted}, {result.open_nodes:,} of them open, and {result.calls:,} cluster calls in "
        f"{result.seconds:.1f} s (compiling {result.compile_seconds:.1f} s apart)",
    ]
    if result.failed_calls:
        lines.append(f"{result.failed_calls:,} calls FAILED and changed nothing; their rows hold the reasons")
    if result.run_path is not None:
        lines.append(f"run file: {result.run_path}")
    return "\n".join(lines)
