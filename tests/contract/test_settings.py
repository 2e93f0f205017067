"""Settings: one table for file, command line and Python; all mistakes at once, each with its place."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from patchwalk.clusters.mixture import mixture_of
from patchwalk.commands.bound_settings import PARTS, BoundSettings
from patchwalk.commands.bound_task import bound_task_from
from patchwalk.interface.bound_options import bound_command
from patchwalk.interface.solve_options import solve_command
from patchwalk.settings import DEFAULT_SECONDS, SolveSettings
from patchwalk.settings_checks import SettingsError, checked_settings, read_settings


def test_every_setting_is_an_option_of_the_same_name() -> None:
    options = {parameter.name for parameter in solve_command.params}
    assert set(SolveSettings.model_fields) <= options
    help_text = CliRunner().invoke(solve_command, ["--help"]).output
    for name in SolveSettings.model_fields:
        assert f"--{name.replace('_', '-')}" in help_text


def test_what_is_given_overrides_the_file() -> None:
    settings = checked_settings(SolveSettings, {"sweeps": 3, "calls": 5}, {"sweeps": 0}, "a.toml")
    assert (settings.sweeps, settings.calls) == (0, 5)
    assert checked_settings(SolveSettings, {"seed": 4}, {"seeds": "1..3"}, "a.toml").every_seed == [1, 2, 3]
    assert checked_settings(SolveSettings, {"seeds": [4, 5]}, {"seed": 2}, "a.toml").every_seed == [2]


def test_all_mistakes_are_reported_at_once_with_their_places() -> None:
    table = {"cluster_sise": 3, "sweeps": -1, "hot": "warm", "calls": 10}
    with pytest.raises(SettingsError) as caught:
        checked_settings(SolveSettings, table, {"calls": "0", "rule": "bal"}, "a.toml", "--{}", {"rule": mixture_of})
    complaints = caught.value.complaints
    assert len(complaints) == 5
    for place, words in (
        ("a.toml: cluster_sise", "did you mean 'cluster_size'"),
        ("a.toml: sweeps", "greater than or equal to 0"),
        ("a.toml: hot", "must be a number"),
        ("--calls", "greater than or equal to 1"),
        ("--rule", "'ball'"),
    ):
        assert any(line.startswith(place) and words in line for line in complaints), (place, complaints)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"seed": 1, "seeds": "1..2"}, "cannot both be given"),
        ({"seeds": "5..2"}, "is empty"),
        ({"seeds": "1,1"}, "twice"),
        ({"seeds": "one"}, "write seeds as"),
        ({"hot": 0.1, "cold": 0.2}, "above hot"),
        ({"sweeps": 0, "total_sweeps": 9}, "never be reached"),
        ({"seconds": float("nan")}, "seconds"),
        ({"seconds": 0}, "greater than 0"),
        ({"target": float("inf")}, "target"),
        ({"seed": -1}, "seed"),
    ],
)
def test_what_cannot_be_is_refused(given: dict[str, Any], words: str) -> None:
    with pytest.raises(SettingsError, match=words):
        checked_settings(SolveSettings, {}, given, "")


def test_seeds_can_be_written_three_ways() -> None:
    for written in ("1..3", "1,2,3", [1, 2, 3]):
        assert checked_settings(SolveSettings, {}, {"seeds": written}, "").every_seed == [1, 2, 3]
    assert checked_settings(SolveSettings, {}, {}, "").every_seed == [1]


def test_sixty_seconds_only_where_nothing_else_ends_the_run() -> None:
    assert checked_settings(SolveSettings, {}, {}, "").time_limit == DEFAULT_SECONDS
    assert checked_settings(SolveSettings, {}, {"target": 3.0}, "").time_limit == DEFAULT_SECONDS
    assert checked_settings(SolveSettings, {}, {"calls": 10}, "").time_limit is None
    assert checked_settings(SolveSettings, {}, {"calls": 10, "seconds": 5}, "").time_limit == 5


def test_paths_in_a_file_are_relative_to_it(tmp_path: Path) -> None:
    path = tmp_path / "task.toml"
    path.write_text('input = "glass.txt"\nstart = "begin.txt"\nrun = "out/run.sqlite"\n')
    source, table = read_settings(path)
    assert source == tmp_path / "glass.txt"
    assert table == {"start": tmp_path / "begin.txt", "run": tmp_path / "out/run.sqlite"}


@pytest.mark.parametrize(
    ("text", "words"),
    [("calls = ", "not a TOML file"), ("calls = 3", "needs a key input"), ("input = 3", "needs a key")],
)
def test_a_broken_file_is_named(tmp_path: Path, text: str, words: str) -> None:
    path = tmp_path / "task.toml"
    path.write_text(text)
    with pytest.raises(SettingsError, match=words) as caught:
        read_settings(path)
    assert str(path) in str(caught.value)


def test_every_setting_of_bound_is_an_option() -> None:
    assert {parameter.name for parameter in bound_command.params} == {*BoundSettings.model_fields, "source", "as_json",
                                                                      "quiet"}  # fmt: skip


def test_mistakes_of_bound_come_at_once_with_those_of_the_file(tmp_path: Path) -> None:
    path = tmp_path / "job.toml"
    path.write_text('input = "glass.csv"\nkind = "izing"\nsweeeps = 3\n')
    given = {"nodes": "0.5", "method": "cycle", "without": "cuts,luck", "seconds": "soon"}
    with pytest.raises(SettingsError) as caught:
        bound_task_from(path, given, "--{}")
    complaints = caught.value.complaints
    for place, words in (
        (f"{path}: sweeeps", "did you mean 'sweeps'"),
        ("--nodes", "whole number"),
        ("--method", "did you mean 'cycles'"),
        ("--without", "'luck' cannot be switched off"),
        ("--seconds", "must be a number"),
    ):
        assert any(line.startswith(place) and words in line for line in complaints), (place, complaints)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"earlier": "run.sqlite", "method": "semidefinite"}, "by cycles only"),
        ({"earlier": "run.sqlite", "start": "answer.txt"}, "cannot both be given"),
        ({"start": ""}, "is empty"),
        ({"seed": True}, "whole number"),
        ({"without": 3}, "as words between commas"),
        ({"subsolver": 3}, "write it as NAME"),
    ],
)
def test_settings_of_bound_that_cannot_be(given: dict[str, Any], words: str) -> None:
    with pytest.raises(SettingsError, match=words):
        checked_settings(BoundSettings, {}, given, "")


def test_parts_are_switched_off_and_clusters_only_where_the_method_is_open(tmp_path: Path) -> None:
    path = tmp_path / "glass.csv"
    path.write_text("a,b,1\nb,c,2\n")
    whole = {"kind": "ising", "run": tmp_path / "run.sqlite"}
    for off in PARTS:
        plan = bound_task_from(path, {**whole, "without": off}).plan
        assert {part: getattr(plan, part) for part in PARTS} == {part: part != off for part in PARTS}
    assert not bound_task_from(path, {**whole, "method": "cycles"}).plan.clusters


def test_bound_reads_the_input_of_a_file_as_solve_does(tmp_path: Path) -> None:
    (tmp_path / "glass.csv").write_text("a,b,1\nb,c,2\n")
    (tmp_path / "fields.csv").write_text("a,0.5\nc,-1\n")
    path = tmp_path / "job.toml"
    path.write_text(
        'input = "glass.csv"\nkind = "ising"\nfield_file = "fields.csv"\nflip_sign = true\nclusters_per_round = 3\n'
    )
    problem = bound_task_from(path, {"run": tmp_path / "run.sqlite"}).problem
    assert problem.fields.tolist() == [-0.5, 0.0, 1.0]
    assert problem.couplings.max() == -1.0
