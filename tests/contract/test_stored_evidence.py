"""Comparisons and scaling measurements worked out again from their files say what was said when they were made."""

from __future__ import annotations

import contextlib
import sqlite3
from pathlib import Path

import pytest

from patchwalk import compare, make, scale, write_problem
from patchwalk.commands.stored_comparisons import mean_residuals, stored_comparisons
from patchwalk.commands.stored_scaling import stored_scaling
from patchwalk.evidence.stored import stored_file


def test_a_comparison_for_each_budget(tmp_path: Path) -> None:
    glass, run = tmp_path / "glass.txt", tmp_path / "run.sqlite"
    write_problem(make("lattice2d", 4, seed=2), glass)
    made = [compare(glass, ["walk", "none"], calls=calls, cluster_size=4, seeds=[1, 2], run=run) for calls in (20, 40)]
    with stored_file(run) as file:
        found = {one.comparison.budget: one for one in stored_comparisons(file)}
    assert sorted(found) == [20.0, 40.0]
    for one in made:
        again = found[one.budget].comparison
        assert found[one.budget].settings["calls"] == one.budget
        assert {(run.contender, run.seed, run.residual, run.reached) for run in again.outcomes} == {
            (run.contender, run.seed, run.residual, run.reached) for run in one.outcomes
        }
        assert {run.contender: run.residual for run in again.standings} == {
            run.contender: run.residual for run in one.standings
        }


def test_residuals_never_rise_and_end_where_the_runs_ended(tmp_path: Path) -> None:
    run = tmp_path / "run.sqlite"
    made = compare(make("lattice2d", 5, seed=2), ["walk", "uniform"], calls=60, cluster_size=4, seeds=[1, 2, 3],
                   sweeps=0, run=run)  # fmt: skip
    with stored_file(run) as file:
        (found,) = stored_comparisons(file)
    shares = [0.05, 0.2, 0.5, 1.0]
    for standing in made.standings:
        curve = mean_residuals(found, shares)[standing.contender]
        assert curve == sorted(curve, reverse=True)
        assert curve[-1] == pytest.approx(standing.residual.value)


def test_the_planted_energy_is_found_again(tmp_path: Path) -> None:
    glass, run = tmp_path / "glass.txt", tmp_path / "run.sqlite"
    write_problem(make("tiles", 4, seed=1), glass)
    made = compare(glass, ["walk", "uniform"], calls=5, cluster_size=2, seeds=[1], sweeps=0, run=run)
    with stored_file(run) as file:
        (found,) = stored_comparisons(file)
    assert found.comparison.references == made.references


@pytest.mark.parametrize(("family", "sizes", "options"), [("sk", [4, 5, 6], {"fields": True}),
                                                          ("lattice2d", [2, 3, 4], {"open": True})])  # fmt: skip
def test_curves_as_given_tuned_and_guessing(
    family: str, sizes: list[int], options: dict[str, bool], tmp_path: Path
) -> None:
    run = tmp_path / "run.sqlite"
    made = scale(family, sizes, instances=6, run=run, **options)
    with stored_file(run) as file:
        found = stored_scaling(file)
    assert sorted(curve.name for curve in found.curves) == sorted(curve.name for curve in made.curves)
    for curve in made.curves:
        again = found.curve(curve.name)
        assert again.chosen == curve.chosen
        assert again.fits == curve.fits
        assert {size: values.tolist() for size, values in again.success.items()} == {
            size: values.tolist() for size, values in curve.success.items()
        }
    assert (found.what, found.failed) == (made.what, made.failed)


def test_where_every_call_failed_there_is_guessing_alone(tmp_path: Path) -> None:
    """And an origin that nobody wrote leaves the size as it is."""
    run = tmp_path / "run.sqlite"
    scale("sk", [3, 4], subsolvers=["uniform"], instances=4, tune=False, run=run)
    with contextlib.closing(sqlite3.connect(run)) as database, database:
        database.execute("UPDATE scaling_rows SET success = NULL, origin = 'unknown'")
    with stored_file(run) as file:
        found = stored_scaling(file)
    assert [curve.name for curve in found.curves] == ["guessing"]
    assert sorted(found.curves[0].success) == [3, 4]
    assert found.failed == 8


def test_a_call_that_failed_is_counted_once(tmp_path: Path) -> None:
    """Though the curve as given and the tuning of times both ask for it."""
    run = tmp_path / "run.sqlite"
    scale("sk", [3, 4], subsolvers=["walk"], instances=4, run=run)
    with contextlib.closing(sqlite3.connect(run)) as database, database:
        database.execute(
            "UPDATE scaling_rows SET success = NULL WHERE size = 3 AND instance = 0 AND subsolver = 'walk'"
        )
    assert scale("sk", [3, 4], subsolvers=["walk"], instances=4, run=run).failed == 1
    with stored_file(run) as file:
        assert stored_scaling(file).failed == 1
