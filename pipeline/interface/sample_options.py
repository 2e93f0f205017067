"""``patchwalk sample``: averages over the Boltzmann law."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Any, NoReturn

import click
from rich.console import Console

from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.solve_options import setting_options
from patchwalk.settings import SamplingSettings

if TYPE_CHECKING:
    from patchwalk.commands.sampling import Sampled
    from patchwalk.search.sampling import BoltzmannSampling


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@setting_options(SamplingSettings)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def sample_command(source: str, as_json: bool, quiet: bool, **given: Any) -> None:
    """Averages over the Boltzmann law of INPUT, exactly: energy, heat capacity, magnetisation, replica overlap.

    \b
    patchwalk make lattice2d --size 8 -o glass.txt --force
    patchwalk sample glass.txt --temperatures 1.0,1.4,2.0 --subsolver walk,start=incumbent --cluster-size 8 --rounds 300
    patchwalk sample glass.txt --temperatures 0.8 --subsolver elimination,draw=boltzmann --rule strip --rounds 300

    Every average comes with its autocorrelation time, the number of independent values it is worth, and an error bar.
    A run that was stopped or killed goes on with patchwalk resume.
    What would sample another law is refused with the reason: subsolvers without detailed balance, and rules or
    conditions that look at the spins. Temperatures are in energy units.
    """
    from patchwalk.commands.sampling import carry_out
    from patchwalk.commands.tasks import sample_task_from

    try:
        task = sample_task_from(source, {key: value for key, value in given.items() if value is not None}, "--{}")
        sampled = carry_out(task, Teller(quiet))
    except Exception as error:
        fail(error, as_json)
        return
    leave_with_averages(sampled, as_json)


def leave_with_averages(sampled: Sampled, as_json: bool) -> NoReturn:
    """Print what was measured, and leave."""
    if as_json:
        print_json(sampled.as_json())
    else:
        click.echo(in_words(sampled))
    raise SystemExit(130 if sampled.status == "interrupted" else 0)


def in_words(sampled: Sampled) -> str:
    """A block for each temperature, then how it was come by."""
    lines = []
    for level in sampled.levels:
        lines.append(f"temperature {level.temperature:g}")
        lines.extend(f"  {name.replace('_', ' '):<24}{estimate}" for name, estimate in level.estimates().items())
    lines.append(
        f"{sampled.message}; {sampled.calls:,} cluster calls and {sampled.sweeps:,} sweeps in {sampled.seconds:.1f} s "
        f"(compiling {sampled.compile_seconds:.1f} s apart)"
    )
    if sampled.failed_calls:
        lines.append(f"{sampled.failed_calls:,} calls FAILED and changed nothing; their rows hold the reasons")
    lines.append(f"run file: {sampled.run_path}")
    return "\n".join(lines)


class Teller:
    """Tells on standard error how sampling is going, slower and slower."""

    def __init__(self, quiet: bool) -> None:
        self._console = Console(stderr=True, highlight=False, quiet=quiet)
        self._next = 0.0

    def understood(self, lines: list[str]) -> None:
        for line in lines:
            self._say(line)

    def compiling(self) -> None:
        self._say("compiling (the first time takes seconds, later runs find it done) ...")

    def compiled(self, seconds: float) -> None:
        self._say(f"compiled and prepared in {seconds:.1f} s")
        self._began = time.perf_counter()

    def measured(self, sampling: BoltzmannSampling, elapsed: float) -> None:
        if elapsed >= self._next:
            self._next = elapsed + min(60.0, max(1.0, elapsed))
            done, plan = sampling.round, sampling.plan
            stage = "burning in" if done <= plan.burn_in else "measuring"
            self._say(f"{elapsed:7.1f} s  {stage:<11} round {done:,} of {plan.burn_in + plan.rounds:,}")

    def stopping(self) -> None:
        self._say("stopping after the round in flight; Ctrl-C once more stops at once")

    def _say(self, line: str) -> None:
        self._console.print(line, markup=False, soft_wrap=True)
