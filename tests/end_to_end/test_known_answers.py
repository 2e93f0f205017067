"""Answers known from outside: published cuts, a matching's proof, and what beats random configurations.

Budgets are counted in calls, so the machine's speed decides nothing.
"""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Callable
from itertools import combinations, pairwise, product
from pathlib import Path
from typing import Any

import networkx as nx
import pytest

import patchwalk

PROGRAM = Path(sys.executable).with_name("patchwalk")
DEMO = Path(__file__).resolve().parents[2] / "configs" / "quillmere.toml"
PATIENCE = 300

CUTS = [
    # file, cut to reach, optimal or best known cut (Benlic & Hao 2013; the torus set of the 7th DIMACS challenge)
    ("G11.txt", 560, 564),
    ("toruspm3-8-50.dat", 452, 458),
    ("G1.txt", 11600, 11624),
]


def solved(*words: object) -> dict[str, Any]:
    """What ``solve --json`` prints."""
    done = subprocess.run(
        [PROGRAM, "solve", *map(str, words), "--json"], capture_output=True, text=True, timeout=PATIENCE, check=False
    )
    assert done.returncode == 0, done.stderr
    result: dict[str, Any] = json.loads(done.stdout)
    return result


def cut_in(path: Path, spins: list[int]) -> int:
    """The cut, recounted from the lines ``i j w`` of the file."""
    lines = [line.split() for line in path.read_text().splitlines()[1:]]
    return sum(int(w) for i, j, w in lines if spins[int(i) - 1] != spins[int(j) - 1])


@pytest.mark.parametrize(("name", "good", "known"), CUTS)
def test_published_cuts_are_nearly_reached(instance: Callable[[str], Path], name: str, good: int, known: int) -> None:
    path = instance(name)
    result = solved(
        path, "--kind", "maxcut", "--subsolver", "walk", "--cluster-size", 10, "--calls", 15_000, "--seeds", "1..3"
    )
    assert result["cut"] == cut_in(path, result["spins"]) == -result["energy"]
    assert good <= result["cut"] <= known


@pytest.mark.slow
@pytest.mark.parametrize(("name", "good", "known"), CUTS)
def test_published_cuts_in_forty_seconds(instance: Callable[[str], Path], name: str, good: int, known: int) -> None:
    path = instance(name)
    result = solved(path, "--kind", "maxcut", "--subsolver", "walk", "--cluster-size", 10, "--seconds", 40, "--seed", 1)
    assert result["cut"] == cut_in(path, result["spins"])
    assert good <= result["cut"] <= known


def ground_energy(problem: patchwalk.Problem, side: int) -> float:
    """The ground energy of an open L x L lattice of +-1 couplings without fields, by matching.

    A bond that is not satisfied parts two plaquettes, or a plaquette from the outside; round a frustrated plaquette
    there is an odd number of such bonds, round any other an even one. So the fewest unsatisfied bonds are a
    minimum-weight perfect matching of the frustrated plaquettes, with each other or with the outside (Bieche, Maynard,
    Rammal & Uhry, J. Phys. A 13 (1980) 2553).
    """
    coupling = problem.matrix.toarray()

    def site(x: int, y: int) -> int:
        return x + side * y

    def frustrated(x: int, y: int) -> bool:
        round_trip = [site(x, y), site(x + 1, y), site(x + 1, y + 1), site(x, y + 1), site(x, y)]
        signs = [coupling[one, other] for one, other in pairwise(round_trip)]
        return bool(signs[0] * signs[1] * signs[2] * signs[3] < 0)

    plaquettes = [place for place in product(range(side - 1), repeat=2) if frustrated(*place)]
    graph = nx.Graph()
    for x, y in plaquettes:
        graph.add_edge((x, y), ("outside", x, y), weight=1 + min(x, y, side - 2 - x, side - 2 - y))
    for (x, y), (u, v) in combinations(plaquettes, 2):
        graph.add_edge((x, y), (u, v), weight=abs(x - u) + abs(y - v))
        graph.add_edge(("outside", x, y), ("outside", u, v), weight=0)
    unsatisfied = sum(graph.edges[pair]["weight"] for pair in nx.min_weight_matching(graph))
    return float(2 * unsatisfied - problem.coupling_count)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_matching_agrees_with_listing_all_configurations(seed: int) -> None:
    problem = patchwalk.make("lattice2d", 4, seed=seed, open=True)
    lowest = min(problem.energy(spins) for spins in product((1, -1), repeat=16) if spins[0] == 1)
    assert ground_energy(problem, 4) == lowest


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_an_open_lattice_is_solved_to_the_ground_energy_that_matching_proves(seed: int, tmp_path: Path) -> None:
    problem = patchwalk.make("lattice2d", 10, seed=seed, open=True)
    ground = ground_energy(problem, 10)
    patchwalk.write_problem(problem, tmp_path / "open.txt")
    options = ("--cluster-size", 10, "--calls", 6000, "--seeds", "1..3")
    result = solved(tmp_path / "open.txt", f"--target={ground}", *options)
    assert result["status"] == "target_reached"
    assert result["energy"] == problem.energy(result["spins"]) == ground
    below = solved(tmp_path / "open.txt", f"--target={ground - 2}", "--calls", 1000, "--cluster-size", 10)
    assert below["status"] == "budget", "nothing lies below a ground energy"


def lowest_energies(problem: patchwalk.Problem | Path, subsolver: str, folder: Path, **settings: Any) -> list[float]:
    """What the clusters alone reach, without sweeps, from three seeds."""
    run = folder / f"{subsolver}.sqlite"
    result = patchwalk.solve(problem, subsolver=subsolver, sweeps=0, seeds=[1, 2, 3], run=run, **settings)
    return [run.energy for run in result.runs]


def test_walks_come_lower_than_random_configurations_on_a_lattice(tmp_path: Path) -> None:
    """3000 calls of 4 shots against 3000 calls of 16: on every instance, and clearly on the whole."""
    margins = []
    for seed in (1, 2, 3, 4):
        problem = patchwalk.make("lattice2d", 16, seed=seed)
        folder = tmp_path / str(seed)
        settings = {"cluster_size": 10, "calls": 3000}
        walk = lowest_energies(problem, "walk,shots=4", folder, **settings)
        uniform = lowest_energies(problem, "uniform,shots=16", folder, **settings)
        margins.append((sum(uniform) - sum(walk)) / 3)
    assert min(margins) > 0
    assert sum(margins) / len(margins) > 4, "more than one step of the energy, which moves by 4 at a time"


def test_on_the_demo_walks_come_clearly_lower_than_random_configurations(tmp_path: Path) -> None:
    walk = lowest_energies(DEMO, "walk,shots=2", tmp_path, calls=2000)
    uniform = lowest_energies(DEMO, "uniform,shots=2", tmp_path, calls=2000)
    assert max(walk) < 0.97 * min(uniform)


def test_the_optimum_of_the_demo_is_proved_and_the_proof_checked(tmp_path: Path) -> None:
    beacons = DEMO.with_name("quillmere.csv")
    found = patchwalk.bound(beacons, run=tmp_path / "demo.sqlite")
    assert found.status == "proved_optimal"
    assert found.energy == pytest.approx(2446.01, abs=0.005)  # the README's figure
    assert patchwalk.audit(beacons, tmp_path / "demo.sqlite").proved_optimal
    whole = patchwalk.solve(
        beacons, subsolver="elimination", cluster_size=600, calls=1, sweeps=0, replicas=1, run=tmp_path / "one.sqlite"
    )
    assert whole.energy == pytest.approx(found.lower_bound)
