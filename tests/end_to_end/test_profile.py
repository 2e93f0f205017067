"""``patchwalk profile`` from the command line: solve, replay, profile, apply, solve by the rule, profile again."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from patchwalk import make, profile, replay, solve, write_problem
from patchwalk.interface.cli import program


def patchwalk(*words: object) -> Result:
    return CliRunner().invoke(program, [str(word) for word in words])


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Six runs of a small glass by the walk, replayed against guessing and against sweeps."""
    folder = tmp_path_factory.mktemp("profile")
    write_problem(make("lattice2d", 6, seed=4), folder / "glass.txt")
    path = solve(
        folder / "glass.txt", subsolver="walk", cluster_size=6, calls=60, seeds="1..6", record="all",
        run=folder / "run.sqlite",
    ).run_path  # fmt: skip
    replay(path, rivals=["uniform", "none"], calls=30)
    return path


def test_text_ends_in_a_caution_and_one_sentence(run: Path) -> None:
    told = patchwalk("profile", run)
    assert told.exit_code == 0, told.output
    lines = told.stdout.splitlines()
    assert "in 6 runs" in lines[0]
    assert "simulator time says nothing about a device" in lines[-2]
    assert lines[-1].split()[0] in ("Call", "Do", "Cannot")
    assert told.stdout.rstrip() == str(profile(run))


def test_json_for_programs_and_a_cost_model(run: Path, tmp_path: Path) -> None:
    """Help in energy per call does not know the price against a rival; against sweeps and per second it does."""
    model = tmp_path / "device.toml"
    model.write_text("[device]\nload_s = 1e-3\nevolve_s_per_hop = 1e-6\nread_s = 1e-4\nwait_s = 0.0\n")
    cheap, dear = (json.loads(patchwalk("profile", run, "--json", *more).stdout) for more in ((), ("--cost", model)))
    assert cheap["baseline"] == dear["baseline"] == "none"
    assert cheap["helps"]["uniform"]["per_call"] == dear["helps"]["uniform"]["per_call"]
    assert dear["break_evens"]["uniform"]["held"]["value"] == "infinite"
    factor, held = (cheap["break_evens"]["uniform"][name]["value"] for name in ("factor", "held"))
    assert held == pytest.approx(factor, rel=1e-12)  # nothing is held fixed in a simulator's time
    assert dear["helps"]["none"]["rival_drop"] >= cheap["helps"]["none"]["rival_drop"]
    assert str(model) in dear["cost_model"]


def test_apply_solve_and_ask_whether_the_promise_was_kept(run: Path, tmp_path: Path) -> None:
    """Against guessing the walk helps: its rule is written, runs on new seeds, and keeps its promise."""
    settings, path = tmp_path / "next.toml", tmp_path / "next.sqlite"
    told = patchwalk("profile", run, "--against", "uniform", "--apply", settings)
    assert told.exit_code == 0, told.output
    assert told.stdout.splitlines()[-1].startswith("Call")
    table = tomllib.loads(settings.read_text())
    assert table["seeds"] == [7, 8, 9, 10, 11, 12]
    assert table["cluster_size"] == 6
    assert table["calls"] == 60
    assert table["callers"][0]["subsolver"] == "walk"
    assert patchwalk("solve", settings, "--run", path, "--json").exit_code == 0
    unanswered = patchwalk("profile", path, "--promised", settings)
    assert unanswered.exit_code == 1
    assert "were not replayed against uniform; patchwalk replay" in unanswered.stderr
    replay(path, rivals=["uniform"], calls=30)
    told = patchwalk("profile", path, "--promised", settings, "--json")
    assert told.exit_code == 0, told.output
    value = json.loads(told.stdout)
    assert value["verdict"] == "kept", value["sentence"]
    assert value["promised"]["against"] == "uniform"


def test_no_advice_writes_no_settings(run: Path, tmp_path: Path) -> None:
    told = patchwalk("profile", run, "--subsolver", "walk", "--against", "none", "--apply", tmp_path / "next.toml")
    assert told.exit_code == 0
    assert (tmp_path / "next.toml").exists() == told.stdout.splitlines()[-1].startswith("Call")


@pytest.mark.parametrize(
    ("words", "code", "sentence"),
    [
        (["nowhere.sqlite"], 1, "there is no such run file"),
        (["RUN", "--against", "tabu"], 1, "tabu was not replayed against walk; there are: none, uniform"),
        (["RUN", "--subsolver", "tabu"], 1, "tabu was not replayed by itself"),
        (["RUN", "--cost", "nowhere.toml"], 2, "nowhere.toml: No such file"),
        (["RUN", "--promised", "nowhere.toml"], 2, "give the file that --apply wrote"),
        ([], 2, "Missing argument"),
    ],
)
def test_mistakes(run: Path, words: list[str], code: int, sentence: str) -> None:
    told = patchwalk("profile", *[str(run) if word == "RUN" else word for word in words])
    assert told.exit_code == code
    assert sentence in told.output


def test_runs_that_were_never_replayed(tmp_path: Path) -> None:
    path = solve(make("lattice2d", 4, seed=1), cluster_size=4, calls=4, run=tmp_path / "run.sqlite").run_path
    told = patchwalk("profile", path)
    assert told.exit_code == 1
    assert "no call was replayed; patchwalk replay" in told.stderr
