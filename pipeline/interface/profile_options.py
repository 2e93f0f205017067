"""``patchwalk profile``: where the calls of runs helped."""

from __future__ import annotations

import dataclasses

import click

from patchwalk.interface.cli import fail, print_json


@click.command(context_settings={"max_content_width": 110})
@click.argument("runs", metavar="RUN...", nargs=-1, required=True)
@click.option(
    "--cost", metavar="FILE",
    help="A cost model in TOML, such as configs/device-*.toml.  [default: the fixed prices of counted work]",
)  # fmt: skip
@click.option(
    "--subsolver", metavar="NAME[,key=value...]",
    help="Whose calls, spelled as in the run.  [default: who made most of them]",
)  # fmt: skip
@click.option(
    "--against", metavar="RIVAL",
    help="The rival that tables and rule are held against.  [default: none, else the strongest replayed]",
)  # fmt: skip
@click.option(
    "--gap", is_flag=True,
    help="A table by the walk's spectral gap, too, of at most 200 calls a run and 14 spins: up to a minute a run.",
)  # fmt: skip
@click.option("--apply", "settings", metavar="FILE", help="Write the suggested rule as settings for the next solve.")
@click.option(
    "--promised", metavar="FILE",
    help="Instead of a profile: did RUNs that --apply's FILE made, replayed since, keep its promise?",
)  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def profile_command(
    runs: tuple[str, ...], cost: str | None, subsolver: str | None, against: str | None, gap: bool,
    settings: str | None, promised: str | None, as_json: bool,
) -> None:  # fmt: skip
    """Where the calls of replayed RUN files helped: by rival, stage and feature, what it costs, and when to call.

    \b
    patchwalk make lattice2d --size 8 -o small.txt --force
    patchwalk solve small.txt --subsolver walk --cluster-size 8 --calls 200 --seeds 1..4 --run several.sqlite
    patchwalk replay several.sqlite --calls 50 --rival none --rival metropolis
    patchwalk profile several.sqlite --gap

    Differences are paired, on the very same clusters, and every interval is one over runs: solve with several seeds,
    then replay, then profile. It ends in one sentence: call; call when ...; do not call; or cannot tell from these
    runs. Where no call helps, calls are advised in at most one case of twenty, unless a few runs lose far more than
    the rest.
    """
    from patchwalk.commands.profiling import apply_rule, kept_promise, profile

    try:
        if promised is not None:
            kept = kept_promise(runs, promised, cost)
            if as_json:
                print_json(_without_nan(dataclasses.asdict(kept)))
            else:
                click.echo(kept.sentence)
            return
        found = profile(runs, cost, subsolver=subsolver, against=against, gap=gap)
        if as_json:
            print_json(found.as_json())
        else:
            click.echo(str(found))
        if settings is not None and found.verdict not in ("call", "call when"):
            click.echo(f"patchwalk: {settings} is not written, for there is no rule to apply", err=True)
        elif settings is not None:
            apply_rule(found, runs, settings)
            click.echo(f"patchwalk: the rule is in {settings}; patchwalk solve {settings}", err=True)
    except Exception as error:
        fail(error, as_json)


def _without_nan(value: object) -> dict[str, object]:
    """Plain values with None for what is unknown."""
    from patchwalk.evidence.profiling import plain

    table: dict[str, object] = plain(value)
    return table
