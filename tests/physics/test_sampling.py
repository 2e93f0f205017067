"""Sampling follows the Boltzmann law: against Kaufman's exact ferromagnet and enumeration; what would not is caught."""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from patchwalk.clusters.mixture import mixture_of
from patchwalk.clusters.policy import policy_from
from patchwalk.problem.ising import Problem
from patchwalk.search import sampling
from patchwalk.search.observables import Level
from patchwalk.search.sampling import BoltzmannSampling, InadmissibleError, SamplingPlan

TEMPERATURES = (3.0, 2.27, 2.0)
METHODS: dict[str, tuple[str, str, int]] = {
    "walk from the incumbent": ("walk,start=incumbent", "ball", 6),
    "walk from the uniform state": ("walk", "ball", 5),
    "palindromic reverse anneal": ("reverse", "ball=1,scattered=1,stale=1", 5),
    "elimination draws": ("elimination,draw=boltzmann", "strip", 24),
}
"""Subsolver, blind rules, cluster size."""


def ferromagnet(side: int) -> Problem:
    """The ferromagnet on a torus: a coupling of -1 favours equal spins."""
    sites = np.arange(side * side).reshape(side, side)
    ends = np.concatenate([np.roll(sites, -1, axis).ravel() for axis in (0, 1)])
    return Problem.from_arrays(np.tile(sites.ravel(), 2), ends, np.full(2 * side * side, -1.0))


def log_partition_function(side: int, coldness: float) -> float:
    """ln Z of the ferromagnet on a torus: Kaufman, Phys. Rev. 76 (1949) 1232."""
    l = np.arange(1, 2 * side)  # noqa: E741 - as in the paper
    turning = np.cosh(2 * coldness) / np.tanh(2 * coldness) - np.cos(np.pi * l / side)
    gamma = np.concatenate([[2 * coldness + np.log(np.tanh(coldness))], np.arccosh(turning)])
    half = side * gamma / 2
    products = [(np.log(2 * np.cosh(half[first::2])).sum(), 1.0) for first in (1, 0)]
    sinh = 2 * np.sinh(half)
    products += [(np.log(np.abs(sinh[first::2])).sum(), np.prod(np.sign(sinh[first::2]))) for first in (1, 0)]
    largest = max(size for size, _ in products)
    together = sum(sign * np.exp(size - largest) for size, sign in products)
    return float(largest + np.log(together) - np.log(2) + side * side / 2 * np.log(2 * np.sinh(2 * coldness)))


def exact(side: int, temperature: float) -> tuple[float, float]:
    """Energy of the whole torus and heat capacity per spin, by five-point differences of ln Z."""
    step = 2e-3
    values = np.array([log_partition_function(side, 1 / temperature + i * step) for i in range(-2, 3)])
    slope = values @ np.array([1, -8, 0, 8, -1]) / (12 * step)
    curvature = values @ np.array([-1, 16, -30, 16, -1]) / (12 * step * step)
    return -float(slope), float(curvature) / (side * temperature) ** 2


def all_energies(problem: Problem) -> NDArray[np.float64]:
    """The energies of all configurations, listed."""
    size = len(problem)
    spins = 1.0 - 2.0 * ((np.arange(1 << size)[:, None] >> np.arange(size)) & 1)
    return 0.5 * np.einsum("xi,xi->x", spins @ problem.matrix.toarray(), spins) + spins @ problem.fields


@pytest.mark.parametrize("temperature", [1.0, *TEMPERATURES, 8.0])
def test_the_formula_is_that_of_the_listed_torus(temperature: float) -> None:
    energies = all_energies(ferromagnet(4))
    weights = np.exp(-(energies - energies.min()) / temperature)
    weights /= weights.sum()
    mean = weights @ energies
    capacity = weights @ (energies - mean) ** 2 / (16 * temperature**2)
    # the differences leave 1e-16 ln Z / step^2 from rounding and step^4 from cutting off, both below 1e-8 here
    assert exact(4, temperature) == pytest.approx((mean, capacity), abs=1e-7)


def sampled(problem: Problem, method: tuple[str, str, int], seed: int = 1, **changed: Any) -> BoltzmannSampling:
    """A sampling run to its end; by default a ladder over :data:`TEMPERATURES` in four copies."""
    subsolver, rule, size = method
    plan: dict[str, Any] = {
        "policy": policy_from(subsolver), "rules": mixture_of(rule), "cluster_size": size, "clusters_per_round": 48,
        "sweeps_per_round": 1, "temperatures": np.array(TEMPERATURES), "copies": 4, "burn_in": 100, "rounds": 800,
    }  # fmt: skip
    run = BoltzmannSampling(problem, SamplingPlan(**{**plan, **changed}), seed)
    run.prepare()
    for _ in run.sample():
        pass
    return run


def levels_of(run: BoltzmannSampling) -> list[Level]:
    return [
        run.observables.at_level(number, float(temperature), len(run.problem))
        for number, temperature in enumerate(run.plan.temperatures)
    ]


def deviations(run: BoltzmannSampling, side: int) -> NDArray[np.float64]:
    """By how many error bars energy and heat capacity miss Kaufman's values, (L, 2)."""
    missed = []
    for level in levels_of(run):
        for estimate, value in zip((level.energy, level.heat_capacity), exact(side, level.temperature), strict=True):
            missed.append(abs(estimate.value - value) / max(estimate.error, 1e-9))
    return np.reshape(missed, (-1, 2))


def assert_sharp(run: BoltzmannSampling, side: int) -> None:
    """Error bars so long that they would hide anything are no success."""
    for level in levels_of(run):
        energy, capacity = exact(side, level.temperature)
        assert level.energy.reliable
        assert level.heat_capacity.reliable
        assert level.energy.error < 0.02 * abs(energy)
        assert level.heat_capacity.error < 0.1 * capacity


@pytest.mark.parametrize("name", METHODS)
def test_a_small_ferromagnet_has_kaufmans_averages(name: str) -> None:
    run = sampled(ferromagnet(8), METHODS[name])
    assert_sharp(run, 8)
    assert deviations(run, 8).max() < 4.0
    assert run.failed_calls == 0
    assert run.calls >= 10 * run.plan.rounds, "the clusters had their part in it"


@pytest.mark.slow
@pytest.mark.parametrize("sweeps", [1, 0])
@pytest.mark.parametrize("name", METHODS)
def test_the_ferromagnet_has_kaufmans_averages(name: str, sweeps: int) -> None:
    """The 16 x 16 torus; also without sweeps, where cluster calls alone have to move it."""
    rounds = 8000 if sweeps else 40_000  # autocorrelation times of up to 800 rounds without sweeps, 16 with them
    run = sampled(
        ferromagnet(16),
        METHODS[name],
        sweeps_per_round=sweeps,
        clusters_per_round=96,
        burn_in=rounds // 8,
        rounds=rounds,
    )
    for level in levels_of(run):
        print(f"{name}, {sweeps} sweeps, T = {level.temperature}: E {level.energy}; C {level.heat_capacity}")
    missed = deviations(run, 16)
    print("error bars off:", missed.round(2).tolist())
    assert_sharp(run, 16)
    assert missed.max() < 4.0


ALONE: dict[str, Any] = {"sweeps_per_round": 0, "temperatures": np.array([3.0]), "rounds": 2000, "burn_in": 200}
"""One temperature, above the critical one, and nothing but cluster calls."""


@pytest.mark.parametrize(
    "method",
    [
        ("descent", "ball", 4),
        ("forward", "ball", 4),
        ("walk,start=incumbent,shots=4", "ball", 4),
    ],
    ids=lambda method: f"{method[0]} {method[1]}",
)
def test_what_is_not_admissible_is_detected(method: tuple[str, str, int], monkeypatch: pytest.MonkeyPatch) -> None:
    """Let through on purpose, it misses Kaufman's values; refusing it is no mere caution."""
    with pytest.raises(InadmissibleError):
        sampled(ferromagnet(8), method, **ALONE)
    monkeypatch.setattr(sampling, "admit", lambda *_: None)
    assert deviations(sampled(ferromagnet(8), method, **ALONE), 8).max() > 5.0


def test_what_is_admissible_is_not_detected() -> None:
    """The same run, admissible: what tells the others apart is not that there are no sweeps."""
    assert deviations(sampled(ferromagnet(8), ("walk,start=incumbent", "ball", 4), **ALONE), 8).max() < 4.0


def small_glass(seed: int) -> Problem:
    """Ten spins, Gaussian couplings between most of them, and fields."""
    rng = np.random.default_rng(seed)
    pairs = np.array([pair for pair in itertools.combinations(range(10), 2) if rng.random() < 0.4])
    return Problem.from_arrays(pairs[:, 0], pairs[:, 1], rng.normal(size=len(pairs)), fields=rng.normal(size=10) / 2)


def sampled_glass(seed: int, method: tuple[str, str, int]) -> BoltzmannSampling:
    """Two temperatures that trade places; no sweeps, so that clusters do it alone."""
    return sampled(
        small_glass(seed), method, seed, temperatures=np.array([2.0, 1.0]), clusters_per_round=16, sweeps_per_round=0,
        rounds=1500,
    )  # fmt: skip


def distances_from_the_listed_law(run: BoltzmannSampling) -> dict[str, float]:
    """By how many error bars each average misses the one over all configurations; the worse of all temperatures."""
    energies, size = all_energies(run.problem), len(run.problem)
    spins = 1.0 - 2.0 * ((np.arange(1 << size)[:, None] >> np.arange(size)) & 1)
    distances: dict[str, float] = {}
    for level in levels_of(run):
        weights = np.exp(-(energies - energies.min()) / level.temperature)
        weights /= weights.sum()
        mean, each = weights @ energies, weights @ spins
        expected = {
            "energy": mean,
            "heat_capacity": weights @ (energies - mean) ** 2 / (size * level.temperature**2),
            "magnetisation": each.mean(),
            "absolute_magnetisation": weights @ np.abs(spins.mean(axis=1)),
            "overlap": np.mean(each**2),
        }
        for name, value in expected.items():
            estimate = getattr(level, name)
            distances[name] = max(distances.get(name, 0.0), abs(estimate.value - value) / estimate.error)
    return distances


@pytest.mark.parametrize("seed", range(3))
def test_small_glasses_with_fields_follow_the_listed_law(seed: int) -> None:
    run = sampled_glass(seed, ("walk,start=incumbent", "ball=1,scattered=1", 4))
    assert max(distances_from_the_listed_law(run).values()) < 5.0
    assert min(ladder.traded.sum() for ladder in run.ladders) > 100


@pytest.mark.parametrize("rule", ["frustrated", "loose"])
def test_rules_that_look_are_seen_on_a_small_glass(rule: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sampling, "admit", lambda *_: None)
    run = sampled_glass(0, ("metropolis,sweeps=1", rule, 2))
    assert max(distances_from_the_listed_law(run).values()) > 8.0


@pytest.mark.parametrize(
    ("callers", "rule", "words"),
    [
        ("descent", "ball", r"descent promises no detailed balance.*admissible are: walk,start=incumbent"),
        ("forward", "ball", "forward promises no detailed balance"),
        ("reverse,leg_ratio=2.0", "ball", r"reverse,.*leg_ratio=2.0.* promises no detailed balance"),
        ("walk,shots=2", "ball", r"walk,shots=2 promises no detailed balance"),
        ("walk,readout_flip=0.1", "ball", "promises no detailed balance"),
        ("enumeration", "ball", "enumeration promises no detailed balance"),
        ("walk", "frustrated", "the rule frustrated looks at the spins"),
        ("walk", "ball=1,loose=2", "the rule loose looks at the spins"),
        ("walk", "disputed", "the rule disputed looks at the spins"),
        ([{"subsolver": "walk", "when": "frustration > 0.2"}], "ball",
         r"a condition of the callers looks at the cluster's own spins \(frustration\)"),
        ([{"subsolver": "walk", "when": "stage > 0.5"}, {"subsolver": "tabu"}], "ball", "tabu promises no"),
    ],
)  # fmt: skip
def test_refusals_give_their_reason(callers: Any, rule: str, words: str) -> None:
    plan = SamplingPlan(policy_from(callers), mixture_of(rule), 4, 4, 1, np.array([1.0]), 2, 10, 10)
    with pytest.raises(InadmissibleError, match=words):
        BoltzmannSampling(ferromagnet(4), plan, 1)


def test_conditions_that_do_not_look_are_admitted() -> None:
    callers = [
        {"subsolver": "walk,start=incumbent", "when": "temperature > 0.6"},
        {"subsolver": "nothing", "when": "k > 9"},
        {"subsolver": "enumeration,draw=boltzmann"},
    ]
    run = sampled(ferromagnet(8), ("walk", "stale", 5), rounds=400, policy=policy_from(callers))
    assert deviations(run, 8).max() < 4.0
