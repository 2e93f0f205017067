"""The whole story on a glass of one's own: from a file to the sentence that says whether to call, and back to a solve.

Told twice: for the walk, whose law is known exactly, and for a program that stands for a device, of which there are
samples only.
"""

from __future__ import annotations

import html
import json
import re
import sqlite3
import sys
import tomllib
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from patchwalk import make, read_problem, write_problem
from patchwalk.interface.cli import program

TEMPLATE = Path(__file__).parents[2] / "configs" / "device-template.py"
WALK = "walk"
DEVICE = f'external,command="{sys.executable} {TEMPLATE}"'
RIVALS = ("enumeration", "elimination", "metropolis", "uniform", "none")
VERDICTS = ("call", "call when", "do not call", "cannot tell")
CALLS, REPLAYED = 120, 40
CUTTING = ("--cluster-size", 8, "--clusters-per-round", 6, "--replicas", 2, "--calls", CALLS, "--record", "all")


def told(*words: object) -> str:
    """What a command prints on standard output; it must end well."""
    result = CliRunner().invoke(program, [str(word) for word in words])
    assert result.exit_code == 0, result.output
    return result.stdout


def answered(*words: object) -> dict[str, Any]:
    """What a command prints for programs."""
    value: dict[str, Any] = json.loads(told(*words, "--json"))
    return value


def rows(path: Path, query: str) -> list[tuple[Any, ...]]:
    with closing(sqlite3.connect(path)) as database:
        return database.execute(query).fetchall()


@pytest.mark.parametrize(("subsolver", "exact"), [(WALK, True), (DEVICE, False)], ids=["walk", "device"])
def test_from_a_file_to_a_rule_and_back(subsolver: str, exact: bool, tmp_path: Path) -> None:
    glass, run = tmp_path / "glass.txt", tmp_path / "run.sqlite"
    write_problem(make("lattice2d", 10, couplings="gaussian", seed=3), glass)
    assert "100 spins, 200 couplings" in told("forecast", glass, "--subsolver", subsolver, "--cluster-size", 8)
    solve_with_five_seeds(glass, run, subsolver)
    replay_against_everybody(run, exact)
    sentence = profile_in_words(run, exact)
    settings = apply_what_was_learnt(run, tmp_path / "next.toml")
    solve_by_the_rule(settings, tmp_path / "next.sqlite")
    ask_whether_it_was_kept(settings, tmp_path / "next.sqlite")
    compare_whole_runs(glass, tmp_path / "compared.sqlite", subsolver)
    report_on_one_page(run, tmp_path / "report.html", sentence)


def solve_with_five_seeds(glass: Path, run: Path, subsolver: str) -> None:
    """The answer is what the spins say, and every call has its row."""
    found = answered("solve", glass, "--subsolver", subsolver, *CUTTING, "--seeds", "1..5", "--run", run)
    assert read_problem(glass).energy(found["spins"]) == pytest.approx(found["energy"], abs=1e-9)
    per_seed = rows(run, "SELECT runs.seed, count(*) FROM calls JOIN runs USING (run) GROUP BY run ORDER BY run")
    assert [seed for seed, _ in per_seed] == [1, 2, 3, 4, 5]
    assert all(count >= CALLS for _, count in per_seed)
    assert rows(run, "SELECT count(*) FROM calls WHERE status != 0") == [(0,)]


def replay_against_everybody(run: Path, exact: bool) -> None:
    """Equally many calls of every run by all six, none failed; exact where the law or the minimum is known."""
    found = answered("replay", run, *(word for rival in RIVALS for word in ("--rival", rival)), "--calls", REPLAYED)
    assert len(found["rivals"]) == 5 * (1 + len(RIVALS))
    assert all(one["failed"] == 0 for one in found["rivals"])
    for number in range(1, 6):
        own = {one["rival"] if not one["own"] else "own": one for one in found["rivals"] if one["run"] == number}
        assert len({one["calls"] for one in own.values()}) == 1
        assert own["own"]["calls"] == pytest.approx(REPLAYED, abs=10)
        assert own["own"]["exact"] == float(exact)
        assert own["enumeration"]["exact"] == own["elimination"]["exact"] == own["uniform"]["exact"] == 1.0
        assert own["enumeration"]["mean_drop"] == pytest.approx(own["elimination"]["mean_drop"], rel=1e-9)
        assert own["uniform"]["mean_drop"] < own["own"]["mean_drop"] <= own["enumeration"]["mean_drop"] + 1e-9
    errors = rows(run, "SELECT max(drop_error) FROM replays WHERE rival IN (SELECT subsolver FROM calls)")
    assert (errors[0][0] == 0.0) == exact


def profile_in_words(run: Path, exact: bool) -> str:
    """A cost first, an interval on every help, and one sentence last; gives it back."""
    text, found = told("profile", run), answered("profile", run)
    lines = text.splitlines()
    assert "in 5 runs" in lines[0]
    assert "simulator time says nothing about a device" in lines[-2]
    assert lines[-1] == found["sentence"]
    assert found["verdict"] in VERDICTS
    assert set(found["helps"]) == set(RIVALS)
    for rival, one in found["helps"].items():
        assert one["per_call"]["low"] < one["per_call"]["value"] < one["per_call"]["high"]
        assert one["exact"] == float(exact and rival in ("enumeration", "elimination", "uniform"))
    return lines[-1]


def apply_what_was_learnt(run: Path, settings: Path) -> Path:
    """Held against guessing there is something to gain at any size of luck: a rule is written, for seeds never seen."""
    last = told("profile", run, "--against", "uniform", "--apply", settings).splitlines()[-1]
    assert last.startswith("Call")
    table = tomllib.loads(settings.read_text())
    assert table["seeds"] == [6, 7, 8, 9, 10]
    assert table["calls"] == CALLS
    assert Path(table["input"]).name == "glass.txt"
    return settings


def solve_by_the_rule(settings: Path, run: Path) -> None:
    told("solve", settings, "--run", run)
    asked = {name for (name,) in rows(run, "SELECT DISTINCT subsolver FROM calls")}
    allowed = {case["subsolver"] for case in tomllib.loads(settings.read_text())["callers"]}
    assert asked
    assert asked <= allowed
    assert rows(run, "SELECT seed FROM runs ORDER BY seed") == [(6,), (7,), (8,), (9,), (10,)]


def ask_whether_it_was_kept(settings: Path, run: Path) -> None:
    """What was promised against guessing on five seeds holds on five others."""
    told("replay", run, "--rival", "uniform", "--calls", REPLAYED)
    found = answered("profile", run, "--promised", settings)
    assert found["promised"]["against"] == "uniform"
    assert found["verdict"] == "kept", found["sentence"]
    assert found["sentence"].startswith("The promise was kept: promised")
    assert "in 5 runs." in found["sentence"]


def compare_whole_runs(glass: Path, run: Path, subsolver: str) -> None:
    """Three contenders make three pairs, each of as many runs as there are seeds and with a sentence of its own."""
    contenders = (word for name in (subsolver, "metropolis", "none") for word in ("--subsolver", name))
    found = answered("compare", glass, *contenders, *CUTTING, "--seeds", "11..13", "--run", run)
    assert [duel["wins"] + duel["ties"] + duel["losses"] for duel in found["duels"]] == [3, 3, 3]
    assert len(found["sentences"]) == 3
    assert len(found["outcomes"]) == 9
    assert min(one["residual"] for one in found["outcomes"]) == 0.0


def report_on_one_page(run: Path, page: Path, sentence: str) -> None:
    """The page says what the profile said."""
    told("report", run, "-o", page)
    words = html.unescape(re.sub(r"<[^>]*>", " ", page.read_text(encoding="utf-8")))
    assert " ".join(sentence.split()) in " ".join(words.split())
