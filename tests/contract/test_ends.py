"""Ends, restarts, kept configurations, acceptance, callers and mixtures: what settings promise, the search does."""

from __future__ import annotations

import itertools
import json
import sqlite3
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from patchwalk import make, solve
from patchwalk.problem.ising import Problem
from patchwalk.search.ends import Ends, Spent

GLASS = make("lattice2d", 12, couplings="gaussian", seed=5)
QUICK: dict[str, Any] = {"cluster_size": 6, "clusters_per_round": 8, "subsolver": "metropolis,sweeps=2"}


def rows(path: str, query: str) -> list[tuple[Any, ...]]:
    with closing(sqlite3.connect(Path(path))) as database:
        return database.execute(query).fetchall()


def spent(**facts: float) -> Spent:
    return Spent(**{"calls": 0, "sweeps": 0, "seconds": 0.0, "rounds_without_gain": 0, **facts})  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("reached", "status", "words"),
    [
        ({"calls": 10}, "budget", "10 calls"),
        ({"sweeps": 20}, "budget", "20 sweeps"),
        ({"seconds": 3.0}, "budget", "3 seconds"),
        ({"rounds_without_gain": 4}, "stalled", "4 rounds"),
    ],
)
def test_any_of_several_ends_fires_and_is_named(reached: dict[str, float], status: str, words: str) -> None:
    ends = Ends(calls=10, sweeps=20, seconds=3.0, stall=4)
    fired = ends.fired(spent(**reached))
    assert fired is not None
    assert fired[0] == status
    assert words in fired[1]
    assert ends.fired(spent(**{name: value - 0.5 for name, value in reached.items()})) is None


def test_the_stage_follows_counts_and_the_clock_only_where_nothing_is_counted() -> None:
    halfway = spent(calls=5, sweeps=15, seconds=2.9)
    assert Ends(calls=10, seconds=3.0).stage(halfway) == 0.5
    assert Ends(calls=10, sweeps=20, seconds=3.0).stage(halfway) == 0.75
    assert Ends(seconds=2.9 * 2).stage(halfway) == 0.5
    assert Ends(calls=2).stage(halfway) == 1.0
    assert Ends(stall=3).stage(halfway) == 0.0


def test_a_standstill_ends_the_run() -> None:
    ring = Problem.from_arrays(range(12), [*range(1, 12), 0], [1.0] * 12)
    solution = solve(ring, **QUICK, stall=20, calls=100_000, sweeps=2, run="stall.sqlite")
    assert solution.status == "stalled"
    assert "no better configuration was found in 20 rounds" in solution.message
    assert solution.energy == -12.0
    ((found,),) = rows("stall.sqlite", "SELECT max(round) FROM incumbents")
    ((rounds,),) = rows("stall.sqlite", "SELECT max(round) FROM checkpoints")
    assert rounds - found in (20, 21)


@pytest.mark.parametrize("way", [{}, {"replicas": 3}, {"tempering": "ladder", "replicas": 4}])
def test_kept_configurations_are_good_and_apart(way: dict[str, Any]) -> None:
    solution = solve(GLASS, **QUICK, **way, calls=1500, keep=5, distance=30, run="keep.sqlite")
    kept = solution.alternatives
    assert kept is not None
    assert 2 <= len(kept) <= 5
    energies = [GLASS.energy(spins) for spins in kept]
    assert energies == sorted(energies)
    assert energies[0] == pytest.approx(solution.energy)
    for one, other in itertools.combinations(kept, 2):
        different = np.count_nonzero(one != other)
        assert min(different, len(GLASS) - different) >= 30, "a global flip is no other configuration without fields"


def test_replicas_that_stand_still_go_on_from_a_kept_configuration() -> None:
    """So hot a search, with no luck of its own, comes back to the best configurations again and again."""
    settings = {**QUICK, "calls": 1200, "hot": 1.5, "cold": 1.5, "sweeps": 1, "record": "all"}
    seldom = solve(GLASS, **settings, run="seldom.sqlite")
    often = solve(GLASS, **settings, restart_after=3, run="often.sqlite")
    energies = {
        name: np.mean([row[0] for row in rows(f"{name}.sqlite", "SELECT energy_before FROM calls WHERE place = 0")])
        for name in ("seldom", "often")
    }
    assert energies["often"] < energies["seldom"]
    for solution in (seldom, often):
        assert solution.energy == pytest.approx(GLASS.energy(solution.spins))


@pytest.mark.parametrize(("rule", "highest"), [("greedy", 0.0), ("threshold", 1.0)])
def test_acceptance_keeps_its_word_through_a_whole_run(rule: str, highest: float) -> None:
    solve(GLASS, **QUICK, acceptance=rule, calls=600, sweeps=0, hot=1.0, cold=0.5, record="all", run="accept.sqlite")
    found = rows("accept.sqlite", "SELECT change, temperature, accepted FROM calls")
    assert {accepted for _, _, accepted in found} == {0, 1}
    for change, temperature, accepted in found:
        assert bool(accepted) == (change <= highest * temperature)


def test_callers_are_asked_when_their_case_holds_and_nobody_is_left_alone() -> None:
    callers = [
        {"when": "stage < 0.5", "subsolver": "nothing"},
        {"when": "frustration > 0.2", "subsolver": "enumeration"},
        {"subsolver": "metropolis,sweeps=2"},
    ]
    settings = {key: value for key, value in QUICK.items() if key != "subsolver"}
    solution = solve(GLASS, **settings, callers=callers, calls=800, record="all", run="callers.sqlite")
    assert solution.calls + solution.skipped == 800
    assert 350 <= solution.skipped <= 450, "clusters that nobody was called for count for the budget"
    by_subsolver = dict(rows("callers.sqlite", "SELECT subsolver, count(*) FROM calls GROUP BY subsolver"))
    assert {name.split(",")[0] for name in by_subsolver} == {"enumeration", "metropolis"}
    assert sum(by_subsolver.values()) == solution.calls
    ((earliest,),) = rows("callers.sqlite", "SELECT min(stage) FROM calls")
    assert earliest >= 0.5
    for subsolver, members, spins in rows("callers.sqlite", "SELECT subsolver, members, spins_before FROM calls"):
        cluster, own = np.frombuffer(members, "<i4"), np.frombuffer(spins, np.int8).astype(float)
        inner = GLASS.matrix.toarray()[np.ix_(cluster, cluster)]
        bonds, violated = (np.count_nonzero(np.triu(inner * part)) for part in (1, np.outer(own, own) * inner > 0))
        assert subsolver.startswith("enumeration") == (bonds > 0 and violated / bonds > 0.2)


def test_where_nobody_is_ever_called_the_budget_still_ends_the_run() -> None:
    callers = [{"when": "stage < 2", "subsolver": "nothing"}, {"subsolver": "walk"}]
    solution = solve(GLASS, callers=callers, calls=200, cluster_size=6, sweeps=1, run="nobody.sqlite")
    assert (solution.status, solution.calls, solution.skipped) == ("budget", 0, 200)
    assert solution.sweeps > 0


@pytest.mark.parametrize("weights", ["fixed", "adaptive"])
def test_a_mixture_draws_all_its_rules(weights: str) -> None:
    solve(GLASS, **QUICK, rule="ball=6,loose=1,stale=1", rule_weights=weights, calls=1600, record="all",
          run="mixed.sqlite")  # fmt: skip
    counts = dict(rows("mixed.sqlite", "SELECT rule, count(DISTINCT round) FROM calls GROUP BY rule"))
    assert set(counts) == {"ball", "loose", "stale"}
    rounds = sum(counts.values())
    if weights == "fixed":  # binomial: 4 standard errors of a share of 3/4
        assert abs(counts["ball"] / rounds - 0.75) < 4 * np.sqrt(0.75 * 0.25 / rounds)
    ((details,),) = rows("mixed.sqlite", "SELECT details FROM checkpoints WHERE details IS NOT NULL")
    assert (json.loads(details)["rules"]["rounds"] > 0) == (weights == "adaptive")
