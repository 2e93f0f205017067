"""Whether a rule learnt from evidence is worth following: on seeds it never saw, beside always calling and never.

    python tests/bench/bench_learnt_rule.py

The demo and a 3D glass are solved with the walk, replayed and profiled under two cost models; each rule learnt is then
run on fresh seeds. Beside it stand the walk called for every cluster, sweeps alone, and sweeps alone for as many model
seconds as always calling costs. Prints energies with 95 % intervals over seeds, calls made and their cost in model
seconds, every call charged at the walk's price, whoever was called; asserts nothing. The device's cost model is
invented. Some ten minutes on two quiet cores.
"""

from __future__ import annotations

import tempfile
import time
import tomllib
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from patchwalk import make, profile, read_problem, replay, solve, write_problem
from patchwalk.commands.solving import Solution
from patchwalk.cost import sweep_seconds
from patchwalk.evidence.comparing import mean_interval
from patchwalk.evidence.rule_learning import Rule

CONFIGS = Path(__file__).parents[2] / "configs"
LEARNT_ON, JUDGED_ON = "1..5", "101..108"
DEMO, GLASS = 4000, 2000
"""Calls of a run."""
REPLAYED = 400
NEVER = [{"when": "k < 1", "subsolver": "uniform"}]
WALK = "walk,shots=2"
COSTS = {"simulator": None, "fast device": str(CONFIGS / "device-fast-invented.toml")}
RIVALS = {"walk or nobody": ["none"], "anybody": ["none", "enumeration", "metropolis"]}
"""Who may be called by a rule: with rivals replayed, they are among its choices."""


class Story(NamedTuple):
    """A problem file and the settings of every run on it, but for the caller and the seeds."""

    name: str
    path: Path
    settings: dict[str, Any]


def stories(folder: Path) -> list[Story]:
    """The demo as its settings file has it, and a glass in three dimensions."""
    demo = tomllib.loads((CONFIGS / "quillmere.toml").read_text())
    settings = {key: value for key, value in demo.items() if key not in ("input", "subsolver", "seed", "calls")}
    glass = folder / "glass.txt"
    write_problem(make("lattice3d", 6, couplings="gaussian", seed=1), glass)
    alike = {"cluster_size": 12, "sweeps": 1, "tempering": "cooling", "calls": GLASS}
    return [
        Story("the Quillmere demo", CONFIGS / demo["input"], settings | {"calls": DEMO}),
        Story("3D Gaussian glass, 6 x 6 x 6", glass, alike),
    ]


def main() -> None:
    """Both stories, learnt and judged."""
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        for number, story in enumerate(stories(folder)):
            own = folder / str(number)
            own.mkdir()
            print(f"\n{story.name}: {story.settings}, {WALK}; learnt on seeds {LEARNT_ON}, judged on {JUDGED_ON}")
            rules = learn(story, own)
            judge(story, rules, own)


def learn(story: Story, folder: Path) -> dict[str, Rule]:
    """The rules that were learnt, by who may be called and at which cost, advised or not; each of them once."""
    run = folder / "learnt.sqlite"
    solve(story.path, subsolver=WALK, seeds=LEARNT_ON, run=run, **story.settings)
    found: dict[str, Rule] = {}
    for whom, rivals in RIVALS.items():
        replay(run, rivals, calls=REPLAYED)
        for cost, model in COSTS.items():
            known = profile(run, model)
            rule, advised = known.judgement.rule, known.verdict == "call when"
            print(f"  {whom}, costs of the {cost}: {known.sentence}")
            print(f"    learnt: {rule}; break-even against sweeps: {known.break_evens['none']}")
            if rule not in found.values():
                found[f"rule ({whom}, {cost}), {'advised' if advised else 'not advised'}"] = rule
    return found


def judge(story: Story, rules: dict[str, Rule], folder: Path) -> None:
    """A table of everybody on the seeds that no rule saw."""
    problem = read_problem(story.path)
    degree = 2.0 * problem.coupling_count / len(problem)
    one_sweep = sweep_seconds(len(problem), degree, 1)
    fast = call_seconds(folder / "learnt.sqlite", COSTS["fast device"])
    dear = call_seconds(folder / "learnt.sqlite", None)
    contenders: dict[str, list[Solution]] = {"always": run_all(story, folder, subsolver=WALK)}
    contenders["never"] = run_all(story, folder, callers=NEVER)
    always = contenders["always"][0]
    rounds = always.sweeps / story.settings["sweeps"]
    for name, price in (("fast device", fast), ("simulator", dear)):
        sweeps = round(story.settings["sweeps"] + always.calls * price / rounds / one_sweep)
        more = story.settings | {"sweeps": sweeps}
        label = f"never, {sweeps} sweeps a round (cost of always, {name})"
        contenders[label] = run_all(story._replace(settings=more), folder, callers=NEVER)
    for name, rule in rules.items():
        contenders[name] = run_all(story, folder, callers=rule.callers)
    table(contenders, one_sweep, fast, dear)


def call_seconds(run: Path, model: str | None) -> float:
    """What a call of the walk costs on average under a cost model."""
    known = profile(run, model)
    return float(np.nanmean(known.replayed.answers[known.own].costs))


def run_all(story: Story, folder: Path, **caller: Any) -> list[Solution]:
    path = folder / f"{time.monotonic_ns()}.sqlite"
    return runs_of(solve(story.path, seeds=JUDGED_ON, run=path, **story.settings, **caller))


def runs_of(best: Solution) -> list[Solution]:
    return sorted(best.runs, key=lambda one: one.seed)


def table(contenders: dict[str, list[Solution]], one_sweep: float, fast: float, dear: float) -> None:
    """A line each: energy, paired differences (below zero is lower), calls made, model seconds."""
    energies = {name: np.array([one.energy for one in runs]) for name, runs in contenders.items()}
    same = np.zeros(len(energies["always"]), np.int64)
    heads = f"{'energy':<28}{'minus always':<30}{'minus never':<30}{'calls':>7}"
    print("  the last three columns are model seconds; every call is charged at the walk's price, whoever was called")
    print(f"  {'':<60}{heads}{'fast device':>13}{'simulator':>11}{'sweeps':>9}")
    for name, runs in contenders.items():
        made, sweeps = (float(np.mean([getattr(one, what) for one in runs])) for what in ("calls", "sweeps"))
        less = [
            "" if name == other else str(mean_interval(energies[name] - energies[other], same))
            for other in ("always", "never")
        ]
        costs = f"{made * fast:>13.4f}{made * dear:>11.3f}{sweeps * one_sweep:>9.4f}"
        told = f"{mean_interval(energies[name], same)!s:<28}{less[0]:<30}{less[1]:<30}{made:>7,.0f}{costs}"
        print(f"  {name:<60}{told}")


if __name__ == "__main__":
    began = time.perf_counter()
    main()
    print(f"everything took {time.perf_counter() - began:.0f} s")
