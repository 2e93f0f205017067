"""``patchwalk replay``: rivals on the very clusters of a run."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import click
from rich.console import Console

from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.crew_options import crew_options


@click.command(context_settings={"max_content_width": 110})
@click.argument("runs", metavar="RUN...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option(
    "--rival", "rivals", multiple=True, metavar="NAME[,key=value...]|none",
    help="Who else is asked, once for each; none sweeps instead.  [default: enumeration, elimination and none]",
)  # fmt: skip
@click.option(
    "--calls", type=click.IntRange(min=1), default=None, metavar="NUMBER",
    help="A sample of so many calls of each run, by stage, size and who was asked; all of them by default.",
)  # fmt: skip
@click.option("--seed", type=int, default=1, show_default=True, metavar="NUMBER", help="The seed of that sample.")
@click.option(
    "--repetitions", type=click.IntRange(min=2), default=16, show_default=True, metavar="NUMBER",
    help="How often a call is asked where its drop is only sampled.",
)  # fmt: skip
@crew_options
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def replay_command(
    runs: tuple[Path, ...], rivals: tuple[str, ...], calls: int | None, seed: int, repetitions: int,
    as_json: bool, quiet: bool, **given: Any,
) -> None:  # fmt: skip
    """Run rivals on the clusters that RUN called for, and write what each call was worth into the same run file.

    \b
    patchwalk make lattice2d --size 8 -o small.txt --force
    patchwalk solve small.txt --subsolver walk --cluster-size 8 --calls 200 --run walked.sqlite
    patchwalk replay walked.sqlite --rival enumeration --rival tabu --rival none

    The drop of a call is its expected energy decrease under the run's acceptance rule, exact where the law of a shot is
    known. Beside it are printed the chance to lower the energy (improves), the chance that one shot lands in a minimum
    of its cluster (hits), and the simulator time of a call. The run's own subsolver is always replayed, too. Rows that
    are there are kept, so that a replay that was stopped goes on. Exit codes: 0 finished, 1 error, 2 settings, 130
    interrupted.
    """
    from patchwalk.commands.crew import Crew
    from patchwalk.commands.replaying import USUAL_RIVALS, carry_out

    try:
        watcher = ReplayTeller(quiet)
        replayed = carry_out(runs, rivals or USUAL_RIVALS, watcher, calls, seed, repetitions, Crew(**given))
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(replayed.as_json())
    else:
        click.echo(f"{replayed}\nreplayed in {replayed.seconds:.1f} s; seconds are simulator time per call")
    raise SystemExit(130 if replayed.status == "interrupted" else 0)


class ReplayTeller:
    """Tells on standard error how a replay is going, slower and slower."""

    def __init__(self, quiet: bool) -> None:
        self._console = Console(stderr=True, highlight=False, quiet=quiet)
        self._began, self._next = time.perf_counter(), 1.0

    def began(self, path: Path, run: int, seed: int) -> None:
        self._say(f"{path}: run {run}, seed {seed}")

    def moved(self, rival: str, done: int, wanted: int) -> None:
        elapsed = time.perf_counter() - self._began
        if elapsed >= self._next or done == wanted:
            self._next = elapsed + min(60.0, max(1.0, 0.5 * elapsed))
            self._say(f"{elapsed:7.1f} s  {rival:<34} {done:,} of {wanted:,} calls")

    def stopping(self) -> None:
        self._say("stopping after the slice in flight; Ctrl-C once more stops at once")

    def _say(self, line: str) -> None:
        self._console.print(line, markup=False, soft_wrap=True)
