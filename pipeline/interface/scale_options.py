"""``patchwalk scale``: success probability against cluster size."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.crew_options import crew_options

if TYPE_CHECKING:
    from patchwalk.commands.scaling import Scaled, ScalingCurve

PATH = click.Path(path_type=Path)


@click.command(context_settings={"max_content_width": 110})
@click.argument("source", metavar="FAMILY|INPUT...", nargs=-1, required=True)
@click.option("--sizes", required=True, metavar="6..14", help="Spins per instance or cluster: 6..14, or 6,8,10.")
@click.option(
    "--subsolver", "subsolvers", multiple=True, metavar="NAME[,key=value...]",
    help="Who is measured; give it several times for rivals. By default walk, and walk averaged over long times.",
)  # fmt: skip
@click.option("--instances", type=click.IntRange(min=2), default=200, show_default=True, help="Instances of each size.")
@click.option(
    "--within", type=click.IntRange(min=2), help="Cut clusters, with their boundary, from problems of this size."
)
@click.option("--rule", default="ball", show_default=True, help="Which spins make a cluster.")
@click.option(
    "--boundary", type=click.Choice(["frozen", "none"]), default="frozen", show_default=True,
    help="Clusters with the frozen rest folded into their fields, or the same clusters alone.",
)  # fmt: skip
@click.option("--kind", metavar="WORD", help="What a file's numbers mean, unless it says so itself.")
@click.option("--couplings", type=click.Choice(["pm1", "gaussian"]), help="As for make.")
@click.option("--open", "open", is_flag=True, default=None, help="As for make.")
@click.option("--fields", is_flag=True, default=None, help="Fields of the same law as the couplings.")
@click.option("--degree", type=click.IntRange(min=1), help="As for make.")
@click.option("--density", type=click.FloatRange(min=0, min_open=True), help="As for make.")
@click.option(
    "--tune/--no-tune", default=True, show_default=True, help="Also tune times on half of the instances of each size."
)
@click.option(
    "--shots", type=click.IntRange(min=1), default=200, show_default=True,
    help="Shots drawn per instance where no exact probability is known.",
)  # fmt: skip
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Same seed, same instances.")
@crew_options
@click.option(
    "--run", type=PATH, default=Path("patchwalk-scaling.sqlite"), show_default=True,
    help="The run file; what it holds already is not measured again.",
)  # fmt: skip
@click.option("--csv", type=PATH, help="Write the raw numbers, a row for each instance and subsolver.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
def scale_command(source: tuple[str, ...], sizes: str, as_json: bool, **given: Any) -> None:
    """Success probability of one shot against size: for instances of a FAMILY, or for clusters cut from files.

    \b
    patchwalk scale sk --fields --sizes 5..8 --instances 20
    patchwalk scale lattice2d --within 12 --sizes 5,6,7,8 --instances 20 --subsolver walk --run cut.sqlite

    Each subsolver is measured as it is given and, where it has times to tune, once more with them tuned on half of
    the instances and measured on the other half. Printed are the mean, the median and the mean of logarithms, each
    with its exponent (of 2) and a bootstrap interval over instances, and what success at 99 % costs.
    """
    from patchwalk.commands.scaling import scale

    try:
        options = {name: given.pop(name) for name in ("couplings", "open", "fields", "degree", "density")}
        chosen = {name: value for name, value in options.items() if value is not None}
        if not given["subsolvers"]:
            del given["subsolvers"]
        found = scale(source, sizes_from(sizes), **given, **chosen)
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(found.as_json())
    else:
        click.echo(in_words(found))
    raise SystemExit(130 if found.status == "interrupted" else 0)


def sizes_from(text: str) -> list[int]:
    """Sizes written as 6..14 or 6,8,10."""
    from patchwalk.settings_checks import SettingsError

    try:
        ends = [[int(end) for end in part.split("..", 1)] for part in text.split(",")]
    except ValueError:
        raise SettingsError([f"--sizes: {text!r} is not a list of sizes; write 6..14 or 6,8,10"]) from None
    for first, last in ((own[0], own[-1]) for own in ends):
        if last < first:
            raise SettingsError([f"--sizes: {first}..{last} runs downwards; write {last}..{first}"])
    return [size for own in ends for size in range(own[0], own[-1] + 1)]


def in_words(found: Scaled) -> str:
    """A block for each curve, guessing last, then what the fits do not say."""
    lines = [found.what]
    for curve in found.curves:
        lines.extend(_curve_lines(curve))
    lines.append(found.caution)
    if found.failed:
        lines.append(f"{found.failed:,} calls FAILED and are left out; their rows hold the reasons")
    if found.status == "interrupted":
        lines.append("interrupted; the same command goes on from here")
    lines.append(f"run file: {found.run_path}")
    return "\n".join(lines)


def _curve_lines(curve: ScalingCurve) -> list[str]:
    how = "exact" if curve.exact else "sampled"
    means = ", ".join(f"{size}: {values.mean():.3g}" for size, values in curve.success.items())
    lines = ["", curve.name, f"  mean success per shot ({how})  {means}"]
    for fit in curve.fits:
        lines.append(f"  {fit.average:<20}2^({-fit.exponent:.4f} k), 95 % interval [{-fit.high:.4f}, {-fit.low:.4f}]")
        residuals = " ".join(f"{residual:+.3f}" for residual in fit.residuals)
        lines.append(f"  {'':<20}residuals of log2: {residuals}; {fit.best_model}")
    if not curve.fits:
        lines.append("  no exponent: it takes 3 sizes, and no average that is zero")
    for currency, fits in curve.costs.items():
        grown = ", ".join(f"{fit.average} {-fit.exponent:.3f} [{-fit.high:.3f}, {-fit.low:.3f}]" for fit in fits)
        if grown:
            lines.append(f"  cost of 99 % in {currency} grows as 2^(a k), a: {grown}")
    if curve.chosen:
        lines.append("  tuned: " + "; ".join(f"{size}: {spelling}" for size, spelling in curve.chosen.items()))
    return lines
