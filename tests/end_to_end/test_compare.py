"""``compare``: whole runs that are those of ``solve``, in one run file, resumed, at one budget."""

from __future__ import annotations

import json
import math
import shlex
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest

from patchwalk import Problem, compare, make, solve, write_problem
from patchwalk.commands import comparing
from patchwalk.commands.comparing_tasks import calls_worth, entries_of, question_from
from patchwalk.cost import sweep_seconds
from patchwalk.evidence.stored import stored_file
from patchwalk.interface.compare_options import in_words
from patchwalk.settings_checks import SettingsError

PROGRAM = Path(sys.executable).with_name("patchwalk")
ROOT = Path(__file__).resolve().parents[2]
GLASS = make("lattice2d", 5, couplings="gaussian", seed=4)
SMALL: dict[str, Any] = {"cluster_size": 4, "clusters_per_round": 3, "calls": 24}


def test_every_run_is_that_of_solve_whoever_carries_it_out() -> None:
    serial = compare(GLASS, ["walk", "metropolis"], seeds=[1, 2], workers=1, run="a.sqlite", **SMALL)
    threads = compare(GLASS, ["walk", "metropolis"], seeds=[1, 2], workers=2, run="b.sqlite", **SMALL)
    assert serial.as_json() | {"run_path": ""} == threads.as_json() | {"run_path": ""}
    alone = solve(GLASS, subsolver="walk", seed=2, run="c.sqlite", workers=1, **SMALL)
    reference = serial.references["problem 1"]
    own = next(one for one in serial.outcomes if (one.contender, one.seed) == ("walk", 2))
    assert own.residual == (alone.energy - reference) / len(GLASS)


def test_the_run_file_holds_every_run_with_its_calls() -> None:
    compare(GLASS, ["walk", "enumeration"], seeds=[1, 2], record="all", run="a.sqlite", **SMALL)
    with stored_file(Path("a.sqlite")) as stored:
        assert [(run.seed, run.subsolver) for run in stored.runs()] == [
            (1, "walk"), (1, "enumeration"), (2, "walk"), (2, "enumeration"),
        ]  # fmt: skip
        assert [row["n"] for row in stored.rows("SELECT count(*) AS n FROM calls GROUP BY run")] == [24] * 4
        assert len(list(stored.rows("SELECT * FROM problems"))) == 1
        assert stored.last_checkpoint(3, GLASS).calls == 24


def test_finished_runs_are_not_run_again(monkeypatch: pytest.MonkeyPatch) -> None:
    compare(GLASS, ["walk", "uniform"], seeds=[1, 2], run="a.sqlite", workers=1, **SMALL)
    carried: list[tuple[str, int]] = []
    plain = comparing.carried_out
    monkeypatch.setattr(
        comparing,
        "carried_out",
        lambda work: carried.append((work[0].compared.contender, work[0].compared.seed)) or plain(work),
    )
    more = compare(GLASS, ["walk", "uniform", "tabu"], seeds=[1, 2, 3], run="a.sqlite", workers=1, **SMALL)
    assert sorted(carried) == [("tabu", 1), ("tabu", 2), ("tabu", 3), ("uniform", 3), ("walk", 3)]
    whole = compare(GLASS, ["walk", "uniform", "tabu"], seeds=[1, 2, 3], run="b.sqlite", workers=1, **SMALL)
    assert more.as_json() | {"run_path": ""} == whole.as_json() | {"run_path": ""}


def test_a_planted_energy_is_the_reference_and_a_target_goes_before_it() -> None:
    planted = make("tiles", 4, seed=1)
    found = compare(planted, ["enumeration", "none"], seeds=[1, 2], run="a.sqlite", **SMALL)
    assert found.references == {"problem 1": planted.details["planted_energy"]}
    assert all(one.residual >= -1e-12 for one in found.outcomes)
    assert not any("best energy of all these runs" in note for note in found.notes)
    aimed = compare(planted, ["enumeration", "none"], seeds=[1, 2], run="a.sqlite", target=0.0, **SMALL)
    assert aimed.references == {"problem 1": 0.0}


def test_a_time_that_these_runs_cannot_tell_is_said_in_words() -> None:
    """No run reaches an energy below all: the least time follows from the binomial interval, 3 runs of 24 calls."""
    found = compare(GLASS, ["walk", "uniform"], seeds="1..3", target=-100.0, run="a.sqlite", **SMALL)
    words = in_words(found)
    least = 24 * math.ceil(math.log(0.01) / math.log(0.025 ** (1 / 3)))  # 1 - p for the upper end of 0 in 3
    assert words.count(f"unknown, at least {least} calls (0 of 3 runs met the reference)") == 2
    assert "inf " not in words
    told = json.loads(json.dumps(found.as_json(), allow_nan=False))
    assert [one["solution"]["value"] for one in told["standings"]] == [None, None]


def test_nobody_is_called_by_none() -> None:
    compare(GLASS, ["walk", "none"], seeds=[1], run="a.sqlite", **SMALL)
    with closing(sqlite3.connect("a.sqlite")) as database:
        rows = database.execute("SELECT calls, skipped, sweeps FROM runs ORDER BY run").fetchall()
    assert rows[0][0] == 24
    assert rows[1][:2] == (0, 24)
    assert rows[0][2] == rows[1][2] > 0


def test_model_seconds_are_worth_so_many_calls() -> None:
    """Sweeps alone cost a spin update a spin, which leaves nothing to a forecast."""
    question = question_from([GLASS], ["none", "walk"], {"model_seconds": 1e-4, "cluster_size": 4, "seeds": [1],
                                                         "sweeps": 2, "replicas": 1})  # fmt: skip
    entries = entries_of(question)
    sweeping = 2 * sweep_seconds(len(GLASS), 2.0 * GLASS.coupling_count / len(GLASS), 1)
    calls = {entry.compared.contender: entry.task.settings.calls for entry in entries}
    assert calls["none"] is not None
    assert calls["walk"] is not None
    assert calls["none"] % round(1e-4 / sweeping) == 0
    assert calls["walk"] < calls["none"]
    assert calls_worth(entries[1].task, 2e-4) == pytest.approx(2 * calls["walk"], rel=0.05)


def test_contenders_of_a_file_may_differ_in_any_setting() -> None:
    write_problem(GLASS, Path("glass.txt"))
    Path("question.toml").write_text(
        'question = "Which size?"\ninput = "glass.txt"\ncalls = 12\nseeds = "1..2"\nrecord = "all"\n'
        '[[contenders]]\nsubsolver = "walk"\ncluster_size = 3\n[[contenders]]\nsubsolver = "walk"\ncluster_size = 5\n'
    )
    found = compare("question.toml", run="a.sqlite")
    assert [one.contender for one in found.standings] == ["walk, cluster size 3", "walk, cluster size 5"]
    with closing(sqlite3.connect("a.sqlite")) as database:
        assert database.execute("SELECT DISTINCT k FROM calls ORDER BY k").fetchall() == [(3,), (5,)]


@pytest.mark.parametrize("path", sorted(ROOT.glob("configs/question-*.toml")), ids=lambda path: path.stem)
def test_the_questions_that_come_along_can_be_asked(path: Path) -> None:
    entries = entries_of(question_from([path], [], {}))
    assert len({entry.compared.identity for entry in entries}) == len(entries) >= 6
    assert path.read_text().count("question = ") == 1


@pytest.mark.parametrize(
    ("subsolvers", "settings", "sentence"),
    [
        (["walk"], {"calls": 3}, "at least two contenders"),
        (["walk", "walk"], {"calls": 3}, "given twice"),
        (["walk", "tabu"], {}, "one budget"),
        (["walk", "tabu"], {"calls": 3, "seconds": 1.0}, "one budget"),
        (["walk", "tabu"], {"calls": 0}, "above 0"),
        (["walk", "tabu"], {"calls": 3, "bound": 1.0}, "no place"),
        (["walk", "none"], {"calls": 3, "sweeps": 0}, "nothing but sweeps"),
        (["walk", "tabu"], {"calls": 3, "cluster_sise": 4}, "cluster_size"),
    ],
)
def test_mistakes_are_named(subsolvers: list[str], settings: dict[str, Any], sentence: str) -> None:
    with pytest.raises(SettingsError, match=sentence):
        compare(GLASS, subsolvers, run="a.sqlite", **settings)
    assert not Path("a.sqlite").exists()


def test_a_contender_that_always_fails_is_named_with_its_reason() -> None:
    from patchwalk.subsolvers.registry import NotReadyError

    with pytest.raises(NotReadyError, match="external"):
        compare(GLASS, ["uniform", 'external,command="false"'], seeds=[1], failures=5, run="a.sqlite", **SMALL)


def test_the_command_speaks_and_prints() -> None:
    ring = Problem.from_arrays([0, 1, 2, 3, 4], [1, 2, 3, 4, 0], [1.0] * 5)
    write_problem(ring, Path("ring.txt"))
    line = "compare ring.txt --subsolver uniform --subsolver tabu --cluster-size 3 --calls 9 --seeds 1..2"
    run = subprocess.run([PROGRAM, *shlex.split(line), "--json"], capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stderr
    found = json.loads(run.stdout)
    assert found["status"] == "finished"
    assert len(found["outcomes"]) == 4
    again = subprocess.run([PROGRAM, *shlex.split(line)], capture_output=True, text=True, check=False)
    assert "4 runs, 4 of them there already" in again.stderr
    assert "told from none" in again.stdout
