"""``patchwalk bound``: a lower bound with its certificate, or a proof."""

from __future__ import annotations

from typing import Any

import click

from patchwalk.interface.cli import fail, print_json

EXIT_CODES = {"interrupted": 130, "error": 1}


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@click.option("--kind", metavar="WORD", help="What the file's numbers mean: ising, maxcut or beacons.")
@click.option(
    "--method",
    metavar="WORD",
    help="What bounds: cycles, semidefinite, clusters, or auto (by the couplings).  [default: auto]",
)
@click.option("--seconds", metavar="NUMBER", help="Stop after so many seconds, compiling apart.  [default: 60]")
@click.option("--nodes", metavar="NUMBER", help="Stop after so many nodes of the tree; no limit in seconds then.")
@click.option(
    "--subsolver",
    metavar="NAME[,key=value...]",
    help="Who answers clusters of spins that the linear program leaves undecided.  [default: elimination]",
)
@click.option(
    "--cluster-size", metavar="NUMBER", help="Spins in each cluster; by default what the subsolver answers at once."
)
@click.option("--sweeps", metavar="NUMBER", help="Sweeps of the first cooling, 0 for none at all.  [default: 2000]")
@click.option("--seed", metavar="NUMBER", help="The seed of the run.  [default: 1]")
@click.option("--start", metavar="FILE", help="A configuration to begin with.")
@click.option(
    "--earlier", metavar="RUN", help="Go on from the tree and the best configuration of an earlier run of this command."
)
@click.option("--run", metavar="FILE", help="Where the run file goes: calls, node log and certificate.")
@click.option(
    "--without",
    metavar="WORDS",
    help="Switch parts off to see what they are worth: cuts, heuristic, branching, clusters.",
)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def bound_command(source: str, as_json: bool, quiet: bool, **given: Any) -> None:
    """Bound the lowest energy of INPUT from below: odd-cycle cuts, or semidefinite duals where it is dense.

    \b
    patchwalk bound glass.txt --seconds 20
    patchwalk bound glass.txt --subsolver walk --cluster-size 10 --nodes 50 --run proof.sqlite
    patchwalk audit glass.txt proof.sqlite

    The bound is true whenever the run ends; "proved optimal" is said only where it reaches the energy of a
    configuration. Exit codes: 0 finished, 1 error, 2 settings, 3 problem file, 4 memory, 130 interrupted.
    """
    from patchwalk.commands.bound_task import bound_task_from
    from patchwalk.commands.bounding import carry_out
    from patchwalk.interface.bound_progress import NodeNarrator, in_words

    try:
        task = bound_task_from(source, {key: value for key, value in given.items() if value is not None}, "--{}")
        result = carry_out(task, NodeNarrator(task.problem, quiet))
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(result.as_json())
    else:
        click.echo(in_words(result))
    raise SystemExit(EXIT_CODES.get(result.status, 0))
