"""The options that say who carries out the work, alike on every command that is no search."""

from __future__ import annotations

from collections.abc import Callable

import click


def crew_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give a command ``--workers``, ``--engine``, ``--scheduler`` and ``--mixed-workers``."""
    for option in reversed((
        click.option(
            "--workers", type=click.IntRange(1, 1024), metavar="NUMBER",
            help="Slices worked on at once.  [default: as many as there are cores]",
        ),
        click.option(
            "--engine", type=click.Choice(["threads", "dask"]), default="threads", show_default=True,
            help="Who the workers are: threads of this process, or processes of a Dask cluster.",
        ),
        click.option("--scheduler", metavar="tcp://HOST:PORT", help="A Dask cluster that is there already."),
        click.option(
            "--mixed-workers", is_flag=True,
            help="Allow Dask workers of another processor or other versions, whose bits may differ.",
        ),
    )):  # fmt: skip
        command = option(command)
    return command
