"""``patchwalk forecast``: how the input was understood, and what working on it will need."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.solve_options import setting_options
from patchwalk.settings import SolveSettings

if TYPE_CHECKING:
    from patchwalk.commands.forecasting import CallForecast, Outlook, Structure


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="INPUT")
@setting_options(SolveSettings)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def forecast_command(source: str, as_json: bool, **given: Any) -> None:
    """How INPUT was understood, and what working on it with these settings will need; nothing is run or written.

    \b
    patchwalk make lattice3d --size 8 -o cubic.txt --force
    patchwalk forecast cubic.txt
    patchwalk forecast cubic.txt --subsolver elimination --rule strip --cluster-size 60

    Times are simulator times at fixed prices, for one core and one call; they say nothing about a device.
    """
    from patchwalk.commands.forecasting import outlook_for
    from patchwalk.commands.tasks import task_from

    try:
        task = task_from(source, {key: value for key, value in given.items() if value is not None}, "--{}")
        outlook = outlook_for(task)
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(outlook.as_json())
    else:
        click.echo("\n".join(_lines(outlook)))


def _lines(outlook: Outlook) -> list[str]:
    return [
        outlook.summary,
        *outlook.notes,
        *_structure(outlook.structure),
        f"memory: problem {_size(outlook.problem_bytes)}, search {_size(outlook.search_bytes)}, "
        f"machine {_size(outlook.memory)}",
        "",
        "these settings:",
        *(f"  {line}" for line in outlook.settings),
        "",
        "simulator time of one call at fixed prices, one core:",
        *_table(outlook.calls),
    ]


def _structure(found: Structure) -> list[str]:
    width = "above 30" if found.elimination_width is None else f"at most {found.elimination_width}"
    words = [
        f"degree {found.degree_least} to {found.degree_most}, mean {found.degree_mean:.3g}",
        f"{found.components:,} component{'s' if found.components > 1 else ''}",
        *(["bipartite"] if found.bipartite else []),
        *({True: ["planar"], False: ["not planar"], None: []}[found.planar]),
        f"elimination width {width}",
        "frustrated" if found.frustrated else "not frustrated: a spanning tree solves it without fields",
    ]
    lines = ["graph: " + "; ".join(words)]
    if found.unit is not None:
        lines.append(f"couplings and fields are whole multiples of {found.unit:g}")
    if found.groups:
        lines.append(f"{found.groups:,} groups of which exactly one spin is -1, over {found.spins_in_groups:,} spins")
    return lines


def _table(calls: tuple[CallForecast, ...]) -> list[str]:
    """A line for each subsolver, a column for each size; what does not fit into memory says so."""
    sizes = sorted({one.size for one in calls})
    cells = {(one.subsolver, one.size): _time(one.seconds) if one.fits else "no room" for one in calls}
    names = list(dict.fromkeys(one.subsolver for one in calls))
    width = max(map(len, [*names, "spins"])) + 1
    rows = [("spins", [str(size) for size in sizes])]
    rows += [(name, [cells.get((name, size), "-") for size in sizes]) for name in names]
    lines = [f"  {name:<{width}}" + "".join(f"{cell:>9}" for cell in row) for name, row in rows]
    return [*lines, *_largest(calls)]


def _largest(calls: tuple[CallForecast, ...]) -> list[str]:
    """The memory of the largest call of each subsolver, where it is worth a word."""
    most = {one.subsolver: one for one in calls}
    return [f"  {name}: {_size(one.bytes)} at {one.size} spins" for name, one in most.items() if one.bytes > 10_000_000]


def _size(count: int) -> str:
    for unit, factor in (("GB", 1e9), ("MB", 1e6), ("kB", 1e3)):
        if count >= factor:
            return f"{count / factor:.1f} {unit}"
    return f"{count} B"


def _time(seconds: float) -> str:
    for unit, factor in (("s", 1.0), ("ms", 1e-3), ("us", 1e-6)):
        if seconds >= factor:
            return f"{seconds / factor:.3g} {unit}"
    return "< 1 us"
