"""``patchwalk audit``: an answer or a certificate checked once more."""

from __future__ import annotations

import click

from patchwalk.interface.cli import fail, print_json


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@click.argument("evidence", metavar="ANSWER|RUN")
@click.option("--kind", metavar="WORD", help="What the file's numbers mean: ising, maxcut or beacons.")
@click.option("--number", type=click.IntRange(min=1), default=None, help="Which run of the run file; the proved one.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def audit_command(source: str, evidence: str, kind: str | None, number: int | None, as_json: bool) -> None:
    """Recompute the energy of an ANSWER (spins, or what --json printed), or re-check the certificate of a RUN file.

    Nothing of the search is used: cuts, multipliers and tree are read and checked against INPUT alone. Exit codes:
    0 all holds, 1 something does not, 2 settings, 3 problem or answer file.
    """
    from patchwalk.commands.auditing import audit

    try:
        result = audit(source, evidence, kind=kind, run=number)
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(result.as_json())
    else:
        click.echo(f"{result.status}: {result.message}")
        click.echo(f"{result.objective_name} {result.objective:,.10g}, recomputed from {source}")
    raise SystemExit(0 if result.status == "confirmed" else 1)
