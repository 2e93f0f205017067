"""``patchwalk solve``: one option for every setting, read off the settings themselves."""

from __future__ import annotations

import typing
from collections.abc import Callable, Collection
from typing import TYPE_CHECKING, Any

import click
from pydantic.fields import FieldInfo

from patchwalk.interface.cli import fail, print_json
from patchwalk.problem.forms import table_of_kinds
from patchwalk.settings import ProblemSettings, SolveSettings
from patchwalk.settings_checks import plain_type

if TYPE_CHECKING:
    from patchwalk.commands.solving import Solution

EXIT_INFEASIBLE = 5
METAVARS = {
    "start": "FILE", "run": "FILE", "answer": "FILE", "field_file": "FILE", "seeds": "1..5",
    "subsolver": "NAME[,key=value...]", "scheduler": "tcp://HOST:PORT", "callers": "TABLES",
    "rule": "NAME[=WEIGHT,...]",
    "temperatures": "NUMBERS", "earlier": "RUN", "without": "WORDS",
}  # fmt: skip
EXIT_CODES = {"interrupted": 130, "error": 1}


def setting_options(
    model: type[ProblemSettings], without: Collection[str] = ()
) -> Callable[[Callable[..., None]], Callable[..., None]]:
    """Give a command an option for every setting of the model but some; all are text, checked together later."""

    def decorated(command: Callable[..., None]) -> Callable[..., None]:
        for name, field in reversed(model.model_fields.items()):
            if name in without:
                continue
            option, kind = f"--{name.replace('_', '-')}", plain_type(model, name)
            if kind is bool:
                command = click.option(option, name, is_flag=True, default=None, help=field.description)(command)
                continue
            command = click.option(
                option, name, type=str, default=None, help=_help(field), metavar=_metavar(name, kind)
            )(command)
        return command

    return decorated


def _metavar(name: str, kind: Any) -> str:
    if typing.get_origin(kind) is typing.Literal:
        return f"[{'|'.join(typing.get_args(kind))}]"
    return METAVARS.get(name, "NUMBER" if kind in (int, float) else "WORD")


def _help(field: FieldInfo) -> str:
    default = field.default
    shown = "" if default is None else f"  [default: {default}]"
    return f"{field.description}{shown}"


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@setting_options(SolveSettings)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def solve_command(source: str, as_json: bool, quiet: bool, **given: Any) -> None:
    """Search for the lowest energy of INPUT: a problem file (see below) or a settings TOML.

    \b
    patchwalk solve configs/quillmere.toml
    patchwalk solve glass.txt --kind ising --subsolver walk,shots=4 --cluster-size 10 --seconds 20
    patchwalk solve couplings.csv --kind ising --field-file fields.csv --flip-sign
    patchwalk solve graph.csv --kind colouring --colours 4
    patchwalk solve graph.csv --kind maxcut --sweeps 0 --calls 3000 --seeds 1..5 --json

    What a file may mean (--kind), each plain or packed (.gz):

    \b
    KINDS_OF_FILES

    The first Ctrl-C finishes the slice in flight and returns the best configuration so far (exit 130); the second
    stops at once. Exit codes: 0 finished, 1 error, 2 settings, 3 problem file, 4 memory, 5 no feasible answer,
    130 interrupted.
    """
    from patchwalk.commands.solving import carry_out
    from patchwalk.commands.tasks import task_from
    from patchwalk.interface.progress import Narrator
    from patchwalk.interface.solution_text import in_words

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
    leave_with(solution)


def leave_with(solution: Solution) -> None:
    """End the program with the exit code that tells how the run ended."""
    raise SystemExit(EXIT_CODES.get(solution.status, 0 if solution.feasible else EXIT_INFEASIBLE))


solve_command.help = (solve_command.help or "").replace("KINDS_OF_FILES", table_of_kinds().replace("\n", "\n    "))
