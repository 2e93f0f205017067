"""Replays into the run file: every rival on every call, samples with weights, sweeps from the run's states."""

from __future__ import annotations

import html
import sqlite3
import sys
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from patchwalk import make, replay, sample, solve
from patchwalk.commands.retracing import retrace
from patchwalk.cost import PRICES
from patchwalk.evidence.selected_calls import selection
from patchwalk.evidence.stored import stored_file
from patchwalk.evidence.sweep_curves import CallName, StateBefore, sweep_curve
from patchwalk.problem.ising import Problem
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.registry import SubsolverError, subsolver_from

COLUMNS = "mean_drop, drop_error, mean_fall, improve_probability, hit_probability, exact, status"


def rows(path: Path, query: str, *values: Any) -> list[tuple[Any, ...]]:
    with closing(sqlite3.connect(path)) as database:
        return database.execute(query, values).fetchall()


@pytest.fixture
def walked(tmp_path: Path) -> Path:
    """A run with trades of temperature, restarts, two rules and Gaussian couplings: 120 calls of 5 spins."""
    glass = make("lattice2d", 6, couplings="gaussian", seed=6)
    solution = solve(
        glass, subsolver="walk", cluster_size=5, calls=120, clusters_per_round=6, tempering="ladder", replicas=3,
        restart_after=2, rule="ball=2,loose=1", record="all", run=tmp_path / "run.sqlite",
    )  # fmt: skip
    return solution.run_path


def test_a_subsolver_differs_from_itself_by_nothing(walked: Path) -> None:
    """Its own row and that of a rival which only spells itself otherwise, through the whole code path."""
    replayed = replay(walked, ["walk", "walk,tolerance=1.1e-6"])
    own = rows(walked, f"SELECT {COLUMNS} FROM replays WHERE rival = 'walk' ORDER BY round, replica, place")
    other = rows(walked, f"SELECT {COLUMNS} FROM replays WHERE rival != 'walk' ORDER BY round, replica, place")
    assert len(own) == 120
    assert own == other
    assert [one.rival for one in replayed.rivals] == ["walk", "walk,tolerance=1.1e-06"]
    assert replayed.rivals[0].own
    assert not replayed.rivals[1].own


def test_hits_and_work_are_those_that_the_run_recorded(walked: Path) -> None:
    replay(walked, [])
    pairs = rows(
        walked, "SELECT calls.hit_probability, replays.hit_probability, calls.amplitude_updates, "
        "replays.amplitude_updates FROM calls JOIN replays USING (run, round, replica, place)",
    )  # fmt: skip
    assert len(pairs) == 120
    seen, again, updates, updates_again = np.array(pairs, float).T
    np.testing.assert_allclose(again, seen, atol=1e-6)  # a call is drawn within the walk's tolerance of its law
    assert np.array_equal(updates, updates_again)


def test_rivals_answer_the_clusters_of_the_run(walked: Path) -> None:
    replay(walked, ["enumeration", "elimination", "tabu"], workers=2)
    ordered = "SELECT * FROM replays ORDER BY round, replica, place"
    drops = dict(rows(walked, f"SELECT rival, group_concat(mean_drop) FROM ({ordered}) GROUP BY rival"))
    by_rival = {rival: np.array(text.split(","), float) for rival, text in drops.items()}
    np.testing.assert_allclose(by_rival["enumeration"], by_rival["elimination"], atol=1e-9)
    changes = rows(walked, "SELECT change FROM calls ORDER BY round, replica, place")
    assert np.all(by_rival["enumeration"] >= -np.array(changes)[:, 0] - 1e-9)
    assert np.all(by_rival["enumeration"] >= by_rival["walk"] - 1e-9)


def test_what_is_there_is_left_as_it_is(walked: Path) -> None:
    replay(walked, ["enumeration", "none"], calls=20)
    before = dict(rows(walked, "SELECT rival, count(*) FROM replays GROUP BY rival"))
    stamp = "SELECT round, replica, place, seconds, mean_drop FROM replays WHERE rival = ?"
    kept = {rival: set(rows(walked, stamp, rival)) for rival in before}
    replay(walked, ["enumeration", "none"])
    after = dict(rows(walked, "SELECT rival, count(*) FROM replays GROUP BY rival"))
    assert set(after.values()) == {120}
    assert max(before.values()) < 40
    for rival in before:
        assert kept[rival] <= set(rows(walked, stamp, rival))
    assert {weight for (weight,) in rows(walked, "SELECT weight FROM replays")} == {1.0}


def test_neither_workers_nor_pieces_change_a_bit(walked: Path) -> None:
    """A calibrated rival, too, whether replayed at once or first in part."""
    copy = walked.with_name("copy.sqlite")
    copy.write_bytes(walked.read_bytes())
    rivals = ["walk,hopping=calibrated", "metropolis,sweeps=3", "none"]
    replay(walked, rivals, workers=2)
    replay(copy, rivals, workers=1, calls=40, seed=3)
    replay(copy, rivals, workers=1)
    query = f"SELECT rival, round, replica, place, {COLUMNS} FROM replays ORDER BY 1, 2, 3, 4"
    assert rows(walked, query) == rows(copy, query)


def test_a_run_without_rows_says_so(tmp_path: Path) -> None:
    path = solve(make("lattice2d", 5, seed=2), subsolver="uniform", cluster_size=3, calls=3, run=tmp_path / "r.sqlite")
    replayed = replay(path.run_path, ["tabu", "none"])
    assert replayed.rivals == ()
    assert "3 cheap calls have no row" in replayed.notes[0]


def test_a_notebook_shows_the_table(walked: Path) -> None:
    replayed = replay(walked, ["uniform"], calls=10)
    lines = str(replayed).splitlines()
    assert lines[1].split() == ["rival", "calls", "failed", "exact", "drop", "improves", "hits", "seconds"]
    assert len({len(line) for line in lines[1:]}) == 1  # columns are straight
    assert replayed._repr_html_() == f"<pre>{html.escape(str(replayed))}</pre>"


def test_weights_make_up_for_what_a_sample_leaves_out(walked: Path) -> None:
    replay(walked, ["uniform"], calls=30)
    (total,) = rows(walked, "SELECT sum(weight) FROM replays WHERE rival = 'uniform'")[0]
    assert total == pytest.approx(120)
    tenths = "CAST(10 * stage AS INTEGER)"
    joined = "replays JOIN calls USING (run, round, replica, place) WHERE rival = 'uniform'"
    drawn = dict(rows(walked, f"SELECT {tenths}, sum(weight) FROM {joined} GROUP BY 1"))
    assert drawn == pytest.approx(dict(rows(walked, f"SELECT {tenths}, count(*) FROM calls GROUP BY 1")))


def test_a_smaller_sample_is_part_of_a_larger_one() -> None:
    strata = np.repeat(np.arange(4), [100, 50, 3, 1])
    small, large = selection(strata, 20, 1), selection(strata, 60, 1)
    assert set(small) < set(large)
    assert {2, 3} <= set(strata[small])
    assert not np.array_equal(small, selection(strata, 20, 2))


def test_every_state_comes_back(walked: Path) -> None:
    """Energies and clusters of all calls, also after trades and restarts; local fields belong to the spins."""
    names = {CallName(*row) for row in rows(walked, "SELECT round, replica, place FROM calls")}
    energies = {
        CallName(*row[:3]): row[3] for row in rows(walked, "SELECT round, replica, place, energy_before FROM calls")
    }
    seen: list[CallName] = []
    with stored_file(walked) as stored:
        (run,) = stored.runs()
        problem = stored.problem(run.problem)

        def visit(state: StateBefore) -> None:
            seen.append(state.call)
            assert problem.energy(state.spins) == pytest.approx(energies[state.call], abs=1e-9)
            np.testing.assert_allclose(state.local_fields, problem.local_fields(state.spins), atol=1e-9)

        retrace(stored, run, names, visit, lambda: False)
    assert len(seen) == 120
    assert set(seen) == names


@pytest.mark.parametrize(
    "settings",
    [
        {"seconds": 0.3, "tempering": "adaptive"},
        {"calls": 200, "rule": "ball,loose,stale,disputed", "rule_weights": "adaptive", "tempering": "adaptive"},
        {"calls": 60, "replicas": 4, "acceptance": "threshold", "sweeps": 3, "workers": 2},
        {"total_sweeps": 8, "stall": 3, "start": "START"},
    ],
    ids=["clock", "weights that learn", "threads", "from a start"],
)
def test_states_come_back_however_a_run_was_steered(tmp_path: Path, settings: dict[str, Any]) -> None:
    glass = make("lattice2d", 7, couplings="gaussian", seed=6)
    if "start" in settings:
        settings = {**settings, "start": tmp_path / "start.txt"}
        settings["start"].write_text("\n".join(["1"] * 49))
    path = solve(
        glass, subsolver="walk", cluster_size=5, record="all", run=tmp_path / "run.sqlite", **settings
    ).run_path
    replayed = replay(path, ["none"], calls=50)
    counts = {one.rival: one.calls for one in replayed.rivals}
    assert counts["none"] == counts["walk"] > 10
    assert replayed.notes == ()


def test_cheap_calls_without_rows_are_asked_again(tmp_path: Path) -> None:
    glass = make("lattice2d", 8, seed=2)
    solution = solve(glass, subsolver="uniform", cluster_size=4, calls=1500, run=tmp_path / "run.sqlite")
    replayed = replay(solution.run_path, ["none"])
    (recorded,) = rows(solution.run_path, "SELECT count(*) FROM calls")[0]
    assert 0 < recorded < 200
    assert rows(solution.run_path, "SELECT count(*) FROM replays WHERE rival = 'none'") == [(recorded,)]
    assert any("have no row" in note for note in replayed.notes)


def test_sweep_curves_against_a_closed_form() -> None:
    """Free spins that lie against their fields h: at T = 0 each update flips its spin for good, a drop of 2 h."""
    fields = np.linspace(1.0, 2.0, 50)
    free = Problem.from_arrays([0], [1], [0.0], fields=fields)
    spins = np.ones(len(fields), np.int8)
    price = PRICES["spin_updates"]
    state = StateBefore(CallName(0, 0, 0), spins, free.local_fields(spins), 0.0, 7, 40.0 * price)
    curve = sweep_curve(free, state, 4000)
    assert curve.updates.tolist() == [40, 10, 2]
    assert curve.whole
    assert curve.budgets == pytest.approx(state.cost / 4.0 ** np.arange(3))
    error = curve.drops.std(axis=0) / np.sqrt(4000)
    assert np.all(np.abs(curve.drops.mean(axis=0) - 2 * fields.mean() * curve.updates) < 5 * error)
    assert spins.all()
    assert (spins == 1).all()


def test_sweeps_are_worth_the_calls_cost(walked: Path) -> None:
    replay(walked, ["none"], calls=10)
    curves = rows(
        walked, "SELECT sweep_curves.budget_s, sweeps, sweep_curves.mean_drop, replays.mean_drop, spin_updates FROM "
        "sweep_curves JOIN replays USING (run, round, replica, place) WHERE rival = 'none' "
        "ORDER BY round, replica, place, budget_s DESC",
    )  # fmt: skip
    budgets, sweeps, at_budget, at_cost, updates = np.array(curves, float).T
    first = np.r_[True, budgets[1:] > budgets[:-1]]
    assert np.array_equal(at_budget[first], at_cost[first])
    assert first.sum() < len(budgets)
    assert np.allclose(sweeps[first] * 36, updates[first])
    assert np.all(np.abs(updates * PRICES["spin_updates"] - budgets)[first] <= PRICES["spin_updates"])


def test_dear_calls_are_swept_for_less_and_it_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("patchwalk.evidence.sweep_curves.MOST_UPDATES", 50)
    glass = make("lattice2d", 5, seed=2)
    path = solve(glass, subsolver="walk", cluster_size=5, calls=8, run=tmp_path / "run.sqlite").run_path
    replay(path, ["none"])
    for status, message, updates in rows(
        path, "SELECT status, message, spin_updates FROM replays WHERE rival = 'none'"
    ):
        assert status == 1
        assert "swept for" in message
        assert updates <= 50


def test_several_callers_are_each_weighed_on_their_own_calls(tmp_path: Path) -> None:
    glass = make("lattice2d", 6, seed=2)
    callers = [{"when": "stage < 0.5", "subsolver": "walk"}, {"subsolver": "enumeration"}]
    path = solve(glass, callers=callers, cluster_size=5, calls=60, record="all", run=tmp_path / "run.sqlite").run_path
    replay(path, [])
    wrong = "SELECT count(*) FROM replays JOIN calls USING (run, round, replica, place) WHERE rival != calls.subsolver"
    assert rows(path, wrong) == [(0,)]
    assert rows(path, "SELECT count(*) FROM replays") == [(60,)]
    replay(path, ["walk", "none"])
    assert rows(path, "SELECT rival, count(*), sum(weight) FROM replays GROUP BY 1 ORDER BY 1")[1:] == [
        ("none", 60, 60.0), ("walk", 60, 60.0)
    ]  # fmt: skip


def test_clusters_that_are_too_large_are_failed_rows(tmp_path: Path) -> None:
    glass = make("lattice2d", 6, seed=2)
    path = solve(
        glass, subsolver="descent", cluster_size=26, calls=4, record="all", run=tmp_path / "run.sqlite"
    ).run_path
    replayed = replay(path, ["enumeration", "elimination"])
    failed = {one.rival: one.failed for one in replayed.rivals}
    assert failed == {"descent": 0, "elimination": 0, "enumeration": 4}
    assert any(
        "enumeration FAILED on 4 calls: enumeration: takes clusters of at most 24" in note for note in replayed.notes
    )


def test_a_sampling_run_is_replayed_but_not_swept(tmp_path: Path) -> None:
    glass = make("lattice2d", 5, seed=2)
    path = sample(glass, subsolver="walk,start=incumbent", cluster_size=4, temperatures=[1.0], rounds=10, record="all",
                  run=tmp_path / "run.sqlite").run_path  # fmt: skip
    assert replay(path, ["uniform"]).rivals[0].exact == 1.0  # symmetric, so that its chance of acceptance is known
    with pytest.raises(SettingsError, match="only runs of solve"):
        replay(path, ["none"])


def test_an_external_backend_is_asked_again(tmp_path: Path) -> None:
    template = Path(__file__).resolve().parents[2] / "configs" / "device-template.py"
    name = f'external,command="{sys.executable} {template}"'
    glass = make("lattice2d", 5, seed=2)
    path = solve(glass, subsolver=name, cluster_size=4, calls=6, record="all", run=tmp_path / "run.sqlite").run_path
    replayed = replay(path, ["none"], repetitions=2)
    own = replayed.rivals[0]
    assert own.own
    assert own.calls == 6
    assert own.failed == 0
    assert own.exact == 0.0


def test_python_subsolvers_may_be_rivals(walked: Path) -> None:
    replayed = replay([walked], [subsolver_from("uniform,shots=2")])
    assert replayed.rivals[1].rival == "uniform,shots=2"
    assert "uniform,shots=2" in str(replayed)


def test_mistakes_are_told_before_anything_is_written(walked: Path) -> None:
    with pytest.raises(SettingsError, match="calls: is 0"):
        replay(walked, ["tabu"], calls=0)
    with pytest.raises(SettingsError, match="give a list"):
        replay(walked, "tabu")
    with pytest.raises(SettingsError, match="no run is named"):
        replay([], ["tabu"])
    with pytest.raises(SubsolverError, match="did you mean 'tabu'"):
        replay(walked, ["tabuu"])
    assert rows(walked, "SELECT count(*) FROM replays") == [(0,)]
