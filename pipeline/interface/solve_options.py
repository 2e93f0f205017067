"""``patchwalk solve``: one option for every setting, read off the settings themselves."""

from __future__ import annotations

import types
import typing
from collections.abc import Callable
from typing import Any

import click
from pydantic.fields import FieldInfo

from patchwalk.interface.cli import fail, print_json
from patchwalk.settings import SolveSettings

EXIT_INFEASIBLE = 5
EXIT_CODES = {"interrupted": 130, "error": 1}


def setting_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give the command an option for every field of :class:`SolveSettings`."""
    for name, field in reversed(SolveSettings.model_fields.items()):
        command = click.option(
            f"--{name.replace('_', '-')}", name, type=_click_type(field), default=None, help=_help(field),
            metavar=_metavar(name, field),
        )(command)  # fmt: skip
    return command


def _plain_type(field: FieldInfo) -> Any:
    """The field's type without ``| None``."""
    inner = field.annotation
    if typing.get_origin(inner) in (types.UnionType, typing.Union):
        inner = next(part for part in typing.get_args(inner) if part is not type(None))
    return typing.get_args(inner)[0] if typing.get_origin(inner) is typing.Annotated else inner


def _click_type(field: FieldInfo) -> click.ParamType[Any] | type:
    inner = _plain_type(field)
    if typing.get_origin(inner) is typing.Literal:
        return click.Choice(typing.get_args(inner))
    return inner if inner in (int, float) else str


def _metavar(name: str, field: FieldInfo) -> str | None:
    if name in ("start", "run"):
        return "FILE"
    if name == "seeds":
        return "1..5"
    if name == "subsolver":
        return "NAME[,key=value...]"
    return "WORD" if _click_type(field) is str else None


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
    from patchwalk.commands.solving import carry_out, task_from
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
