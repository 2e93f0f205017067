"""``patchwalk make``: seeded instances of known families."""

from __future__ import annotations

from pathlib import Path

import click

from patchwalk.interface.cli import fail, print_json

FAMILIES = ("sk", "lattice2d", "lattice3d", "beacons")


@click.command(context_settings={"max_content_width": 110})
@click.argument("family", type=click.Choice(FAMILIES))
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    required=True,
    metavar="FILE",
    help="Where to write it; .gz packs it.",
)
@click.option(
    "--size", type=click.IntRange(min=1), required=True, help="Spins (sk, beacons) or edge length (lattices)."
)
@click.option(
    "--couplings",
    type=click.Choice(["pm1", "gaussian"]),
    default=None,
    help="Signs alone or Gaussian; sk is Gaussian by default, lattices pm1.",
)
@click.option("--open", "open_", is_flag=True, help="Free boundaries; without it a lattice closes on itself.")
@click.option("--fields", is_flag=True, help="Fields of the same law as the couplings (sk and lattices).")
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Same seed, same instance.")
@click.option("--force", is_flag=True, help="Overwrite FILE if it is there.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def make_command(
    family: str, output: Path, size: int, couplings: str | None, open_: bool, fields: bool, seed: int, force: bool,
    as_json: bool,
) -> None:  # fmt: skip
    """Write a seeded instance of FAMILY: sk, lattice2d, lattice3d or beacons.

    The recipe stands in the file's first lines, and its kind, so that solve needs no --kind.

    \b
    patchwalk make sk --size 100 --fields --seed 7 -o sk100.txt
    patchwalk make lattice2d --size 16 --couplings gaussian --open -o open16.txt
    patchwalk make beacons --size 600 -o coast.csv
    """
    from patchwalk.problem.families import make
    from patchwalk.problem.files import write_problem
    from patchwalk.problem.ising import ProblemError

    try:
        if output.exists() and not force:
            raise ProblemError(f"{output} is there already and is left as it is; give another name, or --force")
        problem = make(family, size, seed=seed, couplings=couplings, open=open_, fields=fields)
        write_problem(problem, output)
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(
            {"path": str(output), "spins": len(problem), "couplings": problem.coupling_count, "kind": problem.kind}
        )
    else:
        click.echo(f"{output}: {problem.summary()}")
