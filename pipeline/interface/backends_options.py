"""``patchwalk backends``: what can be plugged in, whether it keeps the contract, what it costs."""

from __future__ import annotations

import dataclasses
import shutil
import textwrap
from typing import TYPE_CHECKING, Any

import click

from patchwalk.interface.cli import fail, print_json

if TYPE_CHECKING:
    from patchwalk.commands.backends import Backend
    from patchwalk.subsolvers.conformance import Verdict

CHECKED_SIZE, TIMED_SIZE = 6, 12


@click.command(context_settings={"max_content_width": 110})
@click.option("--check", "checked", metavar="NAME[,key=value...]", help="Hold one backend against the contract.")
@click.option("--time", "timed_one", metavar="NAME[,key=value...]", help="Measure what one backend's work costs.")
@click.option(
    "--calls", type=click.IntRange(min=1), default=2000, show_default=True,
    help="Spend at most so many cluster calls.",
)  # fmt: skip
@click.option(
    "--cluster-size", type=click.IntRange(min=1), default=None,
    help=f"Spins in each cluster.  [default: {CHECKED_SIZE} for --check, {TIMED_SIZE} for --time]",
)  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def backends_command(
    checked: str | None, timed_one: str | None, calls: int, cluster_size: int | None, as_json: bool
) -> None:
    """List what can answer clusters, hold one backend against the contract, or measure its prices.

    \b
    patchwalk backends
    patchwalk backends --check walk,start=incumbent,time_in_hops=1
    patchwalk backends --check 'external,command="python3 configs/device-template.py"' --calls 300
    patchwalk backends --time walk --cluster-size 10

    Exit codes: 0 every promise that could be checked was kept, 1 one was broken, 2 no such backend.
    """
    from patchwalk.commands import backends

    try:
        if checked is not None and timed_one is not None:
            raise click.UsageError("--check and --time are two commands; give one of them")
        if checked is not None:
            _show_verdicts(checked, backends.verdicts(checked, calls, cluster_size or CHECKED_SIZE), as_json)
        elif timed_one is not None:
            prices = backends.timed(timed_one, calls, cluster_size or TIMED_SIZE)
            _show({**dataclasses.asdict(prices), "toml": prices.as_toml()}, prices.as_toml(), as_json)
        else:
            listed = backends.listing()
            _show({"backends": [dataclasses.asdict(one) for one in listed]}, _table(listed), as_json)
    except click.UsageError:
        raise
    except Exception as error:
        fail(error, as_json)


def _show(value: dict[str, Any], text: str, as_json: bool) -> None:
    if as_json:
        print_json(value)
    else:
        click.echo(text)


def _show_verdicts(name: str, verdicts: list[Verdict], as_json: bool) -> None:
    broken = [verdict.promise for verdict in verdicts if verdict.outcome == "broken"]
    summary = f"{name}: {len(broken)} promises broken: {', '.join(broken)}" if broken else f"{name}: no promise broken"
    value = {"name": name, "broken": broken, "verdicts": [dataclasses.asdict(verdict) for verdict in verdicts]}
    _show(value, "\n".join([*map(_verdict_lines, verdicts), summary]), as_json)
    raise SystemExit(1 if broken else 0)


def _verdict_lines(verdict: Verdict) -> str:
    head = f"{verdict.promise:<18}{verdict.outcome.upper() if verdict.outcome == 'broken' else verdict.outcome:<14}"
    width = max(80, shutil.get_terminal_size((110, 24)).columns)
    return textwrap.fill(verdict.sentence, width, initial_indent=head, subsequent_indent=" " * len(head))


def _table(listed: list[Backend]) -> str:
    rows = [("name", "largest k", "balance", "deterministic", "reports")]
    for one in listed:
        largest = "-" if one.largest is None else f"{one.largest:,}"
        deterministic = {True: "yes", False: "no", None: "-"}[one.deterministic]
        reports = "; ".join(part for part in (", ".join(one.reports), one.note) if part)
        rows.append((one.name, largest, one.balance or "-", deterministic, reports))
    widths = [max(len(row[column]) for row in rows) for column in range(4)]
    justified = (str.ljust, str.rjust, str.ljust, str.ljust)
    lines = []
    for row in rows:
        cells = [justify(cell, width) for justify, cell, width in zip(justified, row[:4], widths, strict=True)]
        lines.append("  ".join([*cells, row[4]]).rstrip())
    return "\n".join(lines)
