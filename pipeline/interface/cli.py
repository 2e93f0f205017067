"""The command line: ``patchwalk COMMAND``. A command is imported only when asked for, so that help is instant."""

from __future__ import annotations

import importlib
import json
import os
import sys
from typing import Any

import click

COMMANDS = {
    "solve": ("patchwalk.interface.solve_options:solve_command", "Search for the lowest energy of a problem."),
    "resume": ("patchwalk.interface.resume_options:resume_command", "Go on with a run that was stopped or killed."),
    "sample": (
        "patchwalk.interface.sample_options:sample_command",
        "Averages over the Boltzmann law, with error bars.",
    ),
    "replay": ("patchwalk.interface.replay_options:replay_command", "Run rivals on the very clusters of a run."),
    "forecast": ("patchwalk.interface.forecast_options:forecast_command", "What working on an input will need."),
    "bound": ("patchwalk.interface.bound_options:bound_command", "Bound the energy from below, or prove an optimum."),
    "audit": ("patchwalk.interface.audit_options:audit_command", "Check an answer or a certificate once more."),
    "profile": (
        "patchwalk.interface.profile_options:profile_command",
        "Where calls helped; break-even; the rule it suggests.",
    ),
    "compare": ("patchwalk.interface.compare_options:compare_command", "Whole runs at equal budget, paired by seed."),
    "scale": ("patchwalk.interface.scale_options:scale_command", "Success probability against cluster size."),
    "report": ("patchwalk.interface.report_options:report_command", "One self-contained page about runs."),
    "make": ("patchwalk.interface.make_options:make_command", "Write a seeded instance of a known family."),
    "backends": ("patchwalk.interface.backends_options:backends_command", "List backends, check one, or time one."),
}


class LateGroup(click.Group):
    """A group that knows its commands' names and one-line help without importing them."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002 - the signature is click's
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002
        if cmd_name not in COMMANDS:
            return None
        module, _, attribute = COMMANDS[cmd_name][0].partition(":")
        command: click.Command = getattr(importlib.import_module(module), attribute)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:  # noqa: ARG002
        with formatter.section("Commands"):
            formatter.write_dl([(name, help_text) for name, (_, help_text) in COMMANDS.items()])


@click.group(cls=LateGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="patchwalk", message="patchwalk %(version)s")
def program() -> None:
    """Solve big spin glasses through small clusters, each answered by a swappable subsolver.

    \b
    patchwalk make lattice2d --size 16 -o glass.txt
    patchwalk solve glass.txt --subsolver walk --cluster-size 10 --calls 500
    patchwalk solve configs/quillmere.toml
    """


def exit_code(error: Exception) -> int | None:
    """The exit code that tells what kind of mistake this was; None for one that is ours."""
    from patchwalk.evidence.layout import RunFileError
    from patchwalk.problem.ising import ProblemError
    from patchwalk.search.sampling import InadmissibleError
    from patchwalk.settings_checks import SettingsError
    from patchwalk.subsolvers.registry import NotReadyError, SubsolverError
    from patchwalk.workers import WorkersError

    codes: dict[type[Exception], int] = {
        SettingsError: 2,
        InadmissibleError: 2,
        NotReadyError: 1,
        SubsolverError: 2,
        ProblemError: 3,
        MemoryError: 4,
        RunFileError: 1,
        WorkersError: 1,
        OSError: 1,
    }
    return next((code for kind, code in codes.items() if isinstance(error, kind)), None)


def fail(error: Exception, as_json: bool) -> None:
    """Say what went wrong, on standard error and as JSON where that was asked for, and leave with its exit code."""
    code = exit_code(error)
    if code is None:
        raise error
    for line in str(error).splitlines():
        click.echo(f"patchwalk: {line}", err=True)
    if as_json:
        print_json({"status": "error", "message": str(error)})
    sys.exit(code)


def print_json(value: dict[str, Any]) -> None:
    """One JSON object on standard output."""
    click.echo(json.dumps(value, allow_nan=False))


def main() -> None:
    """The console script: every way in which a command can end, with its exit code."""
    try:
        code = program.main(standalone_mode=False)
        sys.stdout.flush()
    except click.ClickException as error:
        error.show()
        if "--json" in sys.argv:
            print_json({"status": "error", "message": error.format_message()})
        sys.exit(error.exit_code)
    except (click.Abort, KeyboardInterrupt):
        click.echo("patchwalk: interrupted before the work began; nothing was written", err=True)
        sys.exit(130)
    except BrokenPipeError:  # whoever reads the result has left
        sys.stdout = open(os.devnull, "w")  # noqa: SIM115 - so that the interpreter's own last flush is quiet
        sys.exit(1)
    except OSError as error:
        click.echo(f"patchwalk: the result could not be written: {error.strerror or error}", err=True)
        sys.stdout = open(os.devnull, "w")  # noqa: SIM115
        sys.exit(1)
    sys.exit(code if isinstance(code, int) else 0)
