"""``patchwalk compare``: whole runs at equal budget."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.solve_options import setting_options
from patchwalk.settings import SolveSettings

if TYPE_CHECKING:
    from patchwalk.commands.comparing import Comparison
    from patchwalk.commands.comparing_tasks import Entry
    from patchwalk.evidence.time_to_solution import TimeToSolution

LEFT_OUT = (
    "subsolver", "callers", "start", "seed", "run", "target", "stall", "total_sweeps", "answer", "bound",
)  # fmt: skip
RATIOS = (1.0, 2.0, 5.0, 10.0)


@click.command(context_settings={"max_content_width": 110})
@click.argument("inputs", metavar="INPUT...", nargs=-1, required=True)
@click.option(
    "--subsolver", "subsolvers", multiple=True, metavar="NAME[,key=value...]",
    help="A contender; give at least two. none makes sweeps and calls nobody.",
)  # fmt: skip
@click.option("--model-seconds", metavar="NUMBER", help="The budget in counted work at fixed prices, by forecast.")
@click.option("--target", type=float, help="The objective that times are measured to; else the best known.")
@click.option(
    "--run", type=click.Path(path_type=Path), default=Path("patchwalk-comparison.sqlite"), show_default=True,
    help="The run file; runs it holds already are not carried out again.",
)  # fmt: skip
@setting_options(SolveSettings, LEFT_OUT)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def compare_command(
    inputs: tuple[str, ...], subsolvers: tuple[str, ...], target: float | None, run: Path, as_json: bool, quiet: bool,
    **given: Any,
) -> None:  # fmt: skip
    """Whole runs of several contenders at equal budget (--calls, --model-seconds or --seconds), paired by seed.

    \b
    patchwalk make lattice2d --size 8 --couplings gaussian -o glass.txt --force
    patchwalk compare glass.txt --subsolver walk --subsolver metropolis --cluster-size 8 --calls 200 --seeds 1..3

    INPUT may be a TOML with [[contenders]], each a table with a subsolver and any settings of its own: see
    configs/question-*.toml. Printed are residual energies, times to the best known energy, paired differences with
    intervals, and whether a difference can be told from none.
    """
    from patchwalk.commands.comparing import carry_out
    from patchwalk.commands.comparing_tasks import question_from

    try:
        settings = {key: value for key, value in given.items() if value is not None}
        question = question_from(inputs, subsolvers, settings)
        found = carry_out(question, run, target, Reporter(quiet), "--{}")
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(found.as_json())
    else:
        click.echo(in_words(found))
    raise SystemExit(130 if found.status == "interrupted" else 0)


class Reporter:
    """Tells on standard error which runs are over."""

    def __init__(self, quiet: bool) -> None:
        self._quiet, self._runs = quiet, 0

    def begun(self, there: int, runs: int) -> None:
        self._runs = runs
        self._say(f"{runs} runs, {there} of them there already")

    def finished(self, entry: Entry, number: int) -> None:
        run = entry.compared
        self._say(f"run {number} of {self._runs}: {Path(run.instance).name}, seed {run.seed}, {run.contender}")

    def stopping(self) -> None:
        self._say("stopping after the slice in flight; Ctrl-C once more stops at once")

    def _say(self, line: str) -> None:
        if not self._quiet:
            click.echo(line, err=True)


def in_words(found: Comparison) -> str:
    """A line for each contender, the paired differences, and what can be said."""
    lines = [found.question] if found.question else []
    lines.append(f"{len(found.outcomes)} runs, each worth {found.budget:g} {found.unit}")
    for one in found.standings:
        solution = one.solution
        lines.append(one.contender)
        lines.append(f"  residual energy per spin    {one.residual}")
        lines.append(f"  time to solution at 99 %    {_solution_words(solution, found.unit)}")
        if one.median_reach is not None:
            lines.append(f"  median time to target       {one.median_reach:.4g} {found.unit}")
    for duel in found.duels:
        counts = f"lower in {duel.wins}, equal in {duel.ties}, higher in {duel.losses}"
        lines.append(f"energy of {duel.one} minus that of {duel.other}: {duel.difference} per spin; {counts}")
    lines.extend(_curve_lines(found))
    lines.extend(found.sentences)
    lines.extend(found.notes)
    if found.status == "interrupted":
        lines.append("interrupted; the same command goes on from here")
    lines.append(f"run file: {found.run_path}")
    return "\n".join(lines)


def _solution_words(solution: TimeToSolution, unit: str) -> str:
    """The time with its interval; an end that no number of these runs could tell is said in words."""
    met = f"({solution.successes} of {solution.trials} runs met the reference)"
    if math.isinf(solution.value):
        return f"unknown, at least {solution.low:.4g} {unit} {met}"
    high = "no upper end" if math.isinf(solution.high) else f"{solution.high:.4g}"
    return f"{solution.value:.4g} {unit} [{solution.low:.4g}, {high}] {met}"


def _curve_lines(found: Comparison) -> list[str]:
    if len(found.instances) < 2:
        return []
    lines = [f"share of {len(found.instances)} instances solved within so many times the least time to solution"]
    for curve in found.curves:
        within = [max((s for r, s in zip(curve.ratios, curve.shares, strict=True) if r <= limit), default=0.0)
                  for limit in RATIOS]  # fmt: skip
        shares = ", ".join(f"{limit:g}x {share:.2f}" for limit, share in zip(RATIOS, within, strict=True))
        lines.append(f"  {curve.contender}: {shares}")
    return lines
