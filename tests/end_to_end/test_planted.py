"""Planted problems, whose ground energy is known at any size: it is reached, and nothing ever lies below it.

Budgets are counted in calls, so the machine's speed decides nothing. The slow ones hold the recipe of ``make --help``
at 10,000 spins.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

import patchwalk

STRIPS: dict[str, Any] = {"rule": "strip", "subsolver": "elimination", "cluster_size": 400, "coolings": 1}
"""What ``make --help`` advises for planted lattices: one slow cooling with long strips, each answered exactly."""


def solved(family: str, size: int, folder: Path, seed: int = 1, **settings: Any) -> tuple[patchwalk.Solution, float]:
    """The solution of a planted instance, stopped at its planted energy, and that energy."""
    problem = patchwalk.make(family, size, seed=seed)
    planted = float(problem.details["planted_energy"])
    result = patchwalk.solve(problem, target=planted, run=folder / "run.sqlite", **settings)
    assert result.energy == problem.energy(result.spins)
    return result, planted


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("family", ["loops", "tiles"])
def test_the_planted_energy_of_a_thousand_spins_is_reached(family: str, seed: int, tmp_path: Path) -> None:
    result, planted = solved(family, 32, tmp_path, seed, calls=300, **STRIPS)
    assert (result.status, result.energy) == ("target_reached", planted)


@pytest.mark.slow
@pytest.mark.parametrize("family", ["loops", "tiles"])
def test_the_planted_energy_of_ten_thousand_spins_is_reached(family: str, tmp_path: Path) -> None:
    result, planted = solved(family, 100, tmp_path, calls=2000, seeds=[1], **STRIPS)
    assert (result.status, result.energy) == ("target_reached", planted)


@pytest.mark.parametrize(("family", "size"), [("loops", 12), ("tiles", 12), ("wishart", 48)])
def test_nothing_lies_below_the_planted_energy(family: str, size: int, tmp_path: Path) -> None:
    """Asked for less than there is, a search ends with its budget, at the planted energy at best."""
    problem = patchwalk.make(family, size, seed=2)
    planted, step = float(problem.details["planted_energy"]), 1000 * problem.tie_tolerance
    result = patchwalk.solve(
        problem, target=planted - step, subsolver="enumeration", cluster_size=8, calls=4000, seeds=[1, 2],
        run=tmp_path / "run.sqlite",
    )  # fmt: skip
    assert result.status == "budget"
    assert all(run.energy >= planted - problem.tie_tolerance for run in result.runs)
    assert result.energy == pytest.approx(planted, abs=problem.tie_tolerance), "a few dozen spins are easily solved"
