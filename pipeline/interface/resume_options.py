"""``patchwalk resume``: go on with a run that was stopped or killed."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from patchwalk.interface.cli import fail, print_json
from patchwalk.interface.solve_options import leave_with


@click.command(context_settings={"max_content_width": 110})
@click.argument("run", metavar="RUN", type=click.Path(path_type=Path))
@click.option("--workers", type=click.IntRange(1, 1024), help="Work on so many pieces at once.  [default: cores]")
@click.option("--engine", type=click.Choice(["threads", "dask"]), help="Who the workers are.  [default: threads]")
@click.option("--scheduler", metavar="tcp://HOST:PORT", help="The address of a Dask cluster that is there already.")
@click.option("--mixed-workers", is_flag=True, default=None, help="Allow Dask workers whose bits may differ.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object on standard output and nothing else.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def resume_command(run: Path, as_json: bool, quiet: bool, **given: Any) -> None:
    """Go on with RUN, a run file, from its last checkpoint, after Ctrl-C, a kill or a crash.

    \b
    patchwalk solve glass.txt --calls 5000 --run glass.sqlite
    patchwalk resume glass.sqlite --workers 1

    Budgets are totals. A run with counted budgets, or one of sample, ends with the very bits it would have had without
    the break, on the same kind of processor with the same library versions. A problem or settings file that has changed
    is refused.
    """
    from patchwalk.commands.resuming import carry_on
    from patchwalk.commands.resuming_sampling import carry_on_sampling, holds_sampling
    from patchwalk.interface.progress import Narrator
    from patchwalk.interface.sample_options import Teller, leave_with_averages
    from patchwalk.interface.solution_text import in_words

    chosen = {key: value for key, value in given.items() if value is not None}
    try:
        if holds_sampling(run):
            sampled = carry_on_sampling(run, chosen, Teller(quiet))
            leave_with_averages(sampled, as_json)
        solution = carry_on(run, chosen, Narrator(quiet))
    except Exception as error:
        fail(error, as_json)
        return
    if as_json:
        print_json(solution.as_json())
    else:
        click.echo(in_words(solution))
    leave_with(solution)
