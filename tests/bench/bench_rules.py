"""What picking clusters costs: microseconds a cluster for every rule, and how that grows with the problem.

    python tests/bench/bench_rules.py

Prints figures and ratios; asserts nothing. The outer loop's aim, at most 5 microseconds a call outside the subsolver
at k = 12 in batches of 64, is shared by picking, conditioning and settling.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from time import process_time

import numpy as np

from patchwalk.clusters.conditioning import condition
from patchwalk.clusters.features import cheap_features
from patchwalk.clusters.grouping import closed_over_groups
from patchwalk.clusters.policy import policy_from
from patchwalk.clusters.rules import RULES, Marks, View
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.sweeps import metropolis_sweep
from patchwalk.subsolvers.draws import generator_for, stream_for

SIZE, WANTED, ROUNDS = 12, 64, 40


def view_of(problem: Problem, sweeps: int) -> View:
    """A cooled configuration, an earlier one beside it as the second elite, and counts of some rounds."""
    spins = generator_for(1).choice(np.array([-1, 1], np.int8), len(problem))
    local = problem.local_fields(spins)
    graph = (problem.row_starts, problem.neighbours, problem.couplings)
    elites = [spins, spins]
    for sweep in range(sweeps):
        metropolis_sweep(*graph, spins, local, 0.3 * problem.field_scale, stream_for(sweep))
        elites = [elites[1], spins.copy()]
    counts = generator_for(2).integers(0, 20, len(problem))
    return View(spins, local, np.array(elites), counts)


def per_unit(work: Callable[[int], int]) -> float:
    """Processor time a unit in microseconds, the least of three passes.

    ``work`` does so many rounds and says how many units those were.
    """
    work(1)
    least = np.inf
    for _ in range(3):
        began = process_time()
        units = work(ROUNDS)
        least = min(least, 1e6 * (process_time() - began) / units)
    return least


def rules_on(name: str, problem: Problem, baseline: dict[str, float]) -> None:
    view, marks = view_of(problem, 10), Marks.for_problem(problem)
    print(f"{name}: {len(problem):,} spins")
    for rule_name, rule in RULES.items():

        def pick(rounds: int, rule=rule) -> int:  # type: ignore[no-untyped-def]
            return sum(len(rule.pick(problem, SIZE, WANTED, seed, marks, view)[0]) for seed in range(rounds))

        cost = per_unit(pick)
        growth = f", {cost / baseline[rule_name]:.1f} times the small lattice" if rule_name in baseline else ""
        baseline.setdefault(rule_name, cost)
        print(f"    {rule_name:12s} {cost:8.2f} us a cluster{growth}")


def closing() -> None:
    """The rule ball closed over groups of four spins, beside the rule itself."""
    problem = make("lattice3d", 22, seed=1)
    grouped = replace(problem, groups=tuple(np.arange(len(problem), dtype=np.int32).reshape(-1, 4)))
    view, marks = view_of(problem, 10), Marks.for_problem(problem)
    rule = closed_over_groups(RULES["ball"], grouped, SIZE)

    def pick(rounds: int) -> int:
        return sum(len(rows) for seed in range(rounds) for rows in rule.pick(grouped, SIZE, WANTED, seed, marks, view))

    print(f"    ball, closed over groups of four: {per_unit(pick):.2f} us a cluster")


def looking_at_clusters() -> None:
    """Cheap features and a policy of three cases, beside conditioning."""
    problem = make("lattice3d", 22, seed=1)
    view, marks = view_of(problem, 10), Marks.for_problem(problem)
    (members,) = RULES["ball"].pick(problem, SIZE, WANTED, 1, marks, view)
    places, seeds = np.full(len(problem), -1, np.int32), np.zeros(len(members), np.uint64)
    policy = policy_from([
        {"when": "stage > 0.5 and frustration > 0.2", "subsolver": "walk"},
        {"when": "pull > 1 and k <= 12", "subsolver": "descent"},
        {"subsolver": "metropolis"},
    ])  # fmt: skip
    one = policy_from("walk")
    batch = condition(problem, members, view.spins, view.local_fields, 1.0, seeds, places)
    jobs: dict[str, Callable[[], object]] = {
        "conditioning": lambda: condition(problem, members, view.spins, view.local_fields, 1.0, seeds, places),
        "cheap features": lambda: cheap_features(batch),
        "three cases": lambda: policy.assign(batch, 0.7, 1.0),
        "one case": lambda: one.assign(batch, 0.7, 1.0),
    }
    for name, job in jobs.items():

        def work(rounds: int, job: Callable[[], object] = job) -> int:
            for _ in range(rounds):
                job()
            return rounds * len(batch)

        print(f"    {name:16s} {per_unit(work):6.3f} us a call, k = {SIZE}, batches of {len(batch)}")


def main() -> None:
    baseline: dict[str, float] = {}
    for name, problem in (
        ("cubic lattice", make("lattice3d", 22, seed=1)),
        ("cubic lattice", make("lattice3d", 100, seed=1)),
        ("fully connected", make("sk", 800, seed=1)),
    ):
        rules_on(name, problem, baseline)
    closing()
    looking_at_clusters()


if __name__ == "__main__":
    main()
