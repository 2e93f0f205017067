"""``patchwalk solve``: one option for every setting, read off the settings themselves."""

from __future__ import annotations

import typing
from collections.abc import Callable
from typing import Any

import click
from pydantic.fields import FieldInfo

from patchwalk.interface.cli import fail, print_json
from patchwalk.settings import SolveSettings, plain_type

EXIT_INFEASIBLE = 5
EXIT_CODES = {"interrupted": 130, "error": 1}


def setting_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give the command an option for every field of :class:`SolveSettings`; all are text, checked together later."""
    for name, field in reversed(SolveSettings.model_fields.items()):
        command = click.option(
            f"--{name.replace('_', '-')}", name, type=str, default=None, help=_help(field), metavar=_metavar(name)
        )(command)
    return command


def _metavar(name: str) -> str:
    special = {"start": "FILE", "run": "FILE", "seeds": "1..5", "subsolver": "NAME[,key=value...]"}
    kind = plain_type(name)
    if typing.get_origin(kind) is typing.Literal:
        return f"[{'|'.join(typing.get_args(kind))}]"
    return special.get(name, "NUMBER" if kind in (int, float) else "WORD")


def _help(field: FieldInfo) -> str:
    default = field.default
    shown = "" if default is None else f"  [default: {default}]"
    return f"{field.description}{shown}"


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@setting_options
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def solve_command(source: str, as_json: bool, quiet: bool, **given: Any) -> None:
    """Search for the lowest energy of INPUT: a problem file (edge list or CSV, .gz or not) or a settings TOML.

    \b
    patchwalk solve configs/quillmere.toml
    patchwalk solve glass.txt --kind ising --subsolver walk,shots=4 --cluster-size 10 --seconds 20
    patchwalk solve graph.csv --kind maxcut --sweeps 0 --calls 3000 --seeds 1..5 --json

    The first Ctrl-C finishes the slice in flight and returns the best configuration so far (exit 130); the second
    stops at once. Exit codes: 0 finished, 1 error, 2 settings, 3 problem file, 4 memory, 5 no feasible answer,
    130 interrupted.
    """
    from patchwalk.commands.solving import carry_out
    from patchwalk.commands.tasks import task_from
    from patchwalk.interface.progress import Narrator
    from patchwalk.interface.report import in_words

    try:
        task = task_from(source, {key: value for key, value in given.items() if value is not None}, "--{}")
        solution = carry_out(task, Narrator(quiet))
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(solution.as_json())
    else:
        click.echo(in_words(solution))
    code = EXIT_CODES.get(solution.status, 0 if solution.feasible else EXIT_INFEASIBLE)
    raise SystemExit(code)
