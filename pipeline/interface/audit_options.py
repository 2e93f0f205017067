"""``patchwalk audit``: an answer or a certificate checked once more."""

from __future__ import annotations

from typing import Any

import click

from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.solve_options import setting_options
from patchwalk.settings import ProblemSettings


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@click.argument("evidence", metavar="ANSWER|RUN")
@setting_options(ProblemSettings)
@click.option(
    "--number", type=click.IntRange(min=1), default=None, metavar="NUMBER",
    help="Which run of the run file.  [default: the best with a certificate, else the best]",
)  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def audit_command(source: str, evidence: str, number: int | None, as_json: bool, **given: Any) -> None:
    """Hold an ANSWER (spins, or what --json or --answer wrote) or the certificate of a RUN file against INPUT.

    \b
    patchwalk solve graph.csv --kind vertex_cover --calls 500 --answer cover.csv
    patchwalk audit graph.csv cover.csv --kind vertex_cover

    The objective is recomputed and every broken constraint named; nothing is mended, and nothing of the search is used:
    cuts, multipliers and tree are read and checked against INPUT alone. Exit codes: 0 all holds, 1 something does not,
    2 settings, 3 problem or answer file.
    """
    from patchwalk.commands.auditing import audit
    from patchwalk.problem.ising import known_kind
    from patchwalk.settings_checks import checked_settings

    try:
        asked = {key: value for key, value in given.items() if value is not None}
        reading = checked_settings(ProblemSettings, {}, asked, "", "--{}", {"kind": known_kind})
        result = audit(source, evidence, run=number, **reading.model_dump())
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(result.as_json())
    else:
        click.echo(f"{result.status}: {result.message}")
        for sentence in result.broken:
            click.echo(f"  broken: {sentence}")
        click.echo(f"{result.objective_name} {result.objective:,.10g}, recomputed from {source}")
    raise SystemExit(0 if result.status == "confirmed" else 1)
