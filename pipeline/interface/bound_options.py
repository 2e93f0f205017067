"""``patchwalk bound``: a lower bound with its certificate, or a proof."""

from __future__ import annotations

from typing import Any

import click

from patchwalk.commands.bound_settings import BoundSettings
from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.solve_options import setting_options

EXIT_CODES = {"interrupted": 130, "error": 1}


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@setting_options(BoundSettings)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def bound_command(source: str, as_json: bool, quiet: bool, **given: Any) -> None:
    """Bound the lowest energy of INPUT from below: odd-cycle cuts, semidefinite duals where it is dense, exact minima
    of clusters where it is narrow or crowded. A settings TOML says how the input is read and where to begin.

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
