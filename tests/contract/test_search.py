"""The loop: same bits however it is cut, energies that add up, ends that are kept, and nothing decided by the scale."""

from __future__ import annotations

import itertools
import json
import sys
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from numba.core.dispatcher import Dispatcher

from patchwalk import engine
from patchwalk.clusters.mixture import mixture_of
from patchwalk.clusters.policy import Case, Policy
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.calling import Ready
from patchwalk.search.ends import Ends
from patchwalk.search.neighbourhood import NeighbourhoodSearch, Plan
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers import make_subsolver
from patchwalk.subsolvers.contract import ClusterBatch
from patchwalk.subsolvers.uniform import Uniform

GLASS = make("lattice2d", 14, couplings="gaussian", seed=5)


def plan_for(problem: Problem, **ends: Any) -> Plan:
    cooling = GeometricCooling(0.5, 0.05, problem.field_scale)
    policy = Policy((Case(make_subsolver("walk", shots=2)),))
    return Plan(policy, mixture_of("ball"), 8, 16, 1, cooling, Ends(**ends))


def run(problem: Problem, plan: Plan, seed: int = 3, **options: Any) -> tuple[NeighbourhoodSearch, list[Round]]:
    search = NeighbourhoodSearch(problem, plan, seed, **options)
    search.prepare()
    return search, list(search.rounds())


def test_energies_are_those_of_the_configurations() -> None:
    search, rounds = run(GLASS, plan_for(GLASS, calls=300))
    assert search.calls == 300
    assert search.energy == pytest.approx(GLASS.energy(search.replicas.spins[0]), abs=1e-9)
    assert search.best_energy == pytest.approx(GLASS.energy(search.best_spins), abs=1e-9)
    np.testing.assert_allclose(search.replicas.local_fields[0], GLASS.local_fields(search.replicas.spins[0]), atol=1e-9)
    assert [round_.number for round_ in rounds] == list(range(len(rounds)))
    assert all(earlier.stage < later.stage for earlier, later in itertools.pairwise(rounds))
    assert rounds[0].temperatures[0] > rounds[-1].temperatures[0]


def kernels() -> dict[str, int]:
    """How many kinds of arguments every loaded kernel of ours is compiled for."""
    ours = [module for name, module in sys.modules.items() if name.startswith("patchwalk")]
    return {
        f"{kernel.__module__}.{kernel.__name__}": len(kernel.signatures)
        for module in ours
        for kernel in vars(module).values()
        if isinstance(kernel, Dispatcher)
    }


@pytest.mark.parametrize("replicas", [1, 3])
def test_everything_is_compiled_before_the_clock_starts(replicas: int) -> None:
    """Also what only some calls need: hot clusters walk in another precision than cold ones."""
    plan = replace(plan_for(GLASS, calls=400), replicas=replicas, cluster_size=10, rules=mixture_of("ball,loose"))
    plan.temperatures = GeometricCooling(0.5, 0.05, GLASS.field_scale, replicas=replicas)
    search = NeighbourhoodSearch(GLASS, plan, 3)
    search.prepare()
    before = kernels()
    assert len(list(search.rounds())) > 10
    assert {name for name, count in kernels().items() if count != before.get(name)} == set()


@dataclass(frozen=True)
class Tuned(Uniform):
    """Uniform guesses that remember the size of the clusters they got ready on."""

    tuned_for: int = 0

    def prepare(self, sample: ClusterBatch) -> Tuned:
        return replace(self, tuned_for=sample.size)


def grouped_glass() -> Problem:
    """Groups of four and five that stay whole, so that clusters of eight come out smaller here and there."""
    groups = (*np.arange(60).reshape(12, 5), *np.arange(60, 108).reshape(12, 4))
    return replace(make("lattice2d", 12, couplings="gaussian", seed=5), groups=groups)


def test_every_size_of_cluster_is_answered_by_who_got_ready_for_it() -> None:
    problem = grouped_glass()
    plan = plan_for(problem, calls=200)
    plan.policy = Policy((Case(Tuned()),))
    search, rounds = run(problem, plan)
    ready = [one.size for one in search.caller.by_size or ()]
    assert len(ready) > 2
    called = {(calls.batch.size, calls.subsolver) for round_ in rounds for calls in round_.calls}
    assert len(called) > 2
    for size, subsolver in called:
        assert isinstance(subsolver, Tuned)
        assert abs(subsolver.tuned_for - size) == min(abs(k - size) for k in ready)


def test_a_resumed_run_knows_who_was_ready_for_which_size() -> None:
    problem = grouped_glass()
    search = NeighbourhoodSearch(problem, plan_for(problem, calls=200), 3)
    ready = tuple(Ready(0, size, make_subsolver("walk", hopping_factor=size / 4)) for size in (4, 5, 8))
    search.caller.by_size = ready
    next(search.rounds())
    state = search.snapshot()
    again = NeighbourhoodSearch(problem, plan_for(problem, calls=200), 3)
    again.go_on_from(replace(state, details=json.loads(json.dumps(state.details))))
    again.prepare()
    assert again.caller.by_size == ready


def test_slices_change_no_bit(monkeypatch: pytest.MonkeyPatch) -> None:
    whole, _ = run(GLASS, plan_for(GLASS, calls=200))
    monkeypatch.setattr(engine, "SLICE_SECONDS", 0.0)
    sliced, rounds = run(GLASS, plan_for(GLASS, calls=200))
    assert max(len(round_.calls) for round_ in rounds) > 1
    assert all(len(part) == 1 for round_ in rounds for part in round_.calls)
    assert sliced.replicas.spins.tobytes() == whole.replicas.spins.tobytes()
    assert sliced.replicas.local_fields.tobytes() == whole.replicas.local_fields.tobytes()


def test_a_common_power_of_two_changes_nothing() -> None:
    scale = 2.0**20
    large = replace(GLASS, couplings=GLASS.couplings * scale, fields=GLASS.fields * scale)
    one, _ = run(GLASS, plan_for(GLASS, calls=300))
    other, _ = run(large, plan_for(large, calls=300))
    assert one.replicas.spins.tobytes() == other.replicas.spins.tobytes()
    assert one.best_spins.tobytes() == other.best_spins.tobytes()
    assert other.energy == one.energy * scale


def test_other_seeds_go_other_ways() -> None:
    first, second = (run(GLASS, plan_for(GLASS, calls=50), seed)[0] for seed in (3, 4))
    assert first.replicas.spins.tobytes() != second.replicas.spins.tobytes()


def test_the_end_that_fired_is_named() -> None:
    assert "50 calls" in run(GLASS, plan_for(GLASS, calls=50))[0].message
    swept, _ = run(GLASS, plan_for(GLASS, sweeps=7))
    assert swept.sweeps == 7
    assert "7 sweeps" in swept.message
    timed, _ = run(GLASS, plan_for(GLASS, seconds=0.3))
    assert "0.3 seconds" in timed.message
    reached, _ = run(GLASS, plan_for(GLASS, calls=10_000, energy=-100.0))
    assert reached.status == "target_reached"
    assert reached.calls < 10_000
    assert reached.best_energy <= -100.0


def test_an_interrupt_ends_it_with_the_best_so_far() -> None:
    asked = iter([False] * 10 + [True] * 1000)
    search, _ = run(GLASS, plan_for(GLASS, calls=10_000), interrupted=lambda: next(asked))
    assert search.status == "interrupted"
    assert 0 < search.calls < 500


def test_a_start_is_never_made_worse() -> None:
    ring = Problem.from_arrays(range(30), [*range(1, 30), 0], [1.0] * 30)
    ground = (1 - 2 * (np.arange(30) % 2)).astype(np.int8)
    hot = replace(plan_for(ring, calls=60), temperatures=GeometricCooling(50.0, 50.0, 1.0))
    search, _ = run(ring, hot, start=ground)
    assert search.energy > -30.0
    assert search.best_energy == -30.0
    assert np.array_equal(search.best_spins, ground)


def test_the_last_descent_needs_sweeps() -> None:
    hot = GeometricCooling(2.0, 2.0, GLASS.field_scale)
    for sweeps, finder in ((1, "descent"), (0, "clusters")):
        plan = replace(plan_for(GLASS, calls=40), temperatures=hot, sweeps_per_round=sweeps)
        search, rounds = run(GLASS, plan)
        improvements = [*(i for round_ in rounds for i in round_.improvements), *search.take_improvements()]
        assert improvements[-1].finder == finder


def test_fields_are_derived_afresh_at_fixed_rounds(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("patchwalk.search.neighbourhood.REFRESH_ROUNDS", 1)
    search, _ = run(GLASS, plan_for(GLASS, calls=100))
    assert search.replicas.local_fields[0].tobytes() == GLASS.local_fields(search.replicas.spins[0]).tobytes()
    assert search.energy == GLASS.energy(search.replicas.spins[0])
