"""``patchwalk report``: one page about runs."""

from __future__ import annotations

from pathlib import Path

import click

from patchwalk.interface.cli import fail, print_json


@click.command(context_settings={"max_content_width": 110})
@click.argument("runs", metavar="RUN...", nargs=-1, required=True)
@click.option(
    "-o", "--output", metavar="FILE.html", type=click.Path(path_type=Path), required=True,
    help="Where the page goes; an earlier report is replaced, any other file is left as it is.",
)  # fmt: skip
@click.option("--cost", metavar="FILE", help="A cost model in TOML.  [default: the fixed prices of counted work]")
@click.option(
    "--subsolver", metavar="NAME[,key=value...]",
    help="Whose calls, spelled as in the run.  [default: who made most of them]",
)  # fmt: skip
@click.option(
    "--against", metavar="RIVAL",
    help="The rival that tables and rule are held against.  [default: none, else the strongest replayed]",
)  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def report_command(
    runs: tuple[str, ...], output: Path, cost: str | None, subsolver: str | None, against: str | None, as_json: bool
) -> None:
    """One page about RUN files of solve, sample, bound, compare and scale, with pictures and their data.

    \b
    patchwalk make lattice2d --size 8 -o reported.txt --force
    patchwalk solve reported.txt --subsolver walk --cluster-size 8 --calls 200 --seeds 1..2 --run reported.sqlite
    patchwalk replay reported.sqlite --rival enumeration --rival none --calls 60
    patchwalk report reported.sqlite -o reported.html

    The page needs no network and holds no scripts: it can be mailed, printed and kept. Without a replay it says what
    is missing and which command would give it. Exit codes: 0 written, 1 error, 2 settings.
    """
    from patchwalk.interface.page.writing import report

    try:
        found = report(runs, output, cost, subsolver=subsolver, against=against)
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(found.as_json())
    else:
        click.echo(found.sentence)
        click.echo(f"{found.path}: {found.figures} figures, {found.size:,} bytes")
