"""Drops against brute force over all configurations and against many sampled calls; order statistics against sums."""

from __future__ import annotations

import dataclasses
import itertools
import math
from dataclasses import replace

import numpy as np
import pytest

from patchwalk.acceptance import ACCEPTANCE_RULES, AcceptanceRule, judge
from patchwalk.evidence.drops import best_of, drops_of, repeated_seeds
from patchwalk.subsolvers.conformance_trial import glass, repeated
from patchwalk.subsolvers.contract import ClusterBatch
from patchwalk.subsolvers.registry import make_subsolver, subsolver_from

EXACT = ["walk", "walk,shots=3", "forward,shots=2", "walk,control_error=0.1,readout_flip=0.02,shots=2",
         "enumeration,draw=boltzmann,shots=2", "elimination,draw=boltzmann", "uniform,shots=4"]  # fmt: skip
RULES: list[AcceptanceRule] = ["metropolis", "threshold", "greedy"]


def brute(batch: ClusterBatch, row: int) -> tuple[np.ndarray, float]:
    """All energies of a row by the definition, and that of the incumbent."""
    assert batch.couplings is not None
    signs = np.array(list(itertools.product((1, -1), repeat=batch.size)))[:, ::-1].astype(float)
    energies = signs @ batch.fields[row] + 0.5 * np.einsum("xi,ij,xj->x", signs, batch.couplings[row], signs)
    own = batch.spins[row].astype(float)
    return energies, float(own @ batch.fields[row] + 0.5 * own @ batch.couplings[row] @ own)


@pytest.mark.parametrize("rule", RULES)
def test_uniform_against_the_definition(rule: AcceptanceRule) -> None:
    batch = glass(5, 6)
    found = drops_of(make_subsolver("uniform"), batch, rule)
    for row in range(5):
        energies, own = brute(batch, row)
        change, temperature = energies - own, batch.temperature[row]
        chance = {
            "metropolis": np.exp(np.minimum(0.0, -change / temperature)), "threshold": change <= temperature,
            "greedy": change <= 0,
        }[rule]  # fmt: skip
        assert found.mean_drop[row] == pytest.approx(-(change * chance).mean(), abs=1e-12)
        assert found.mean_fall[row] == pytest.approx(-np.minimum(0.0, change).mean(), abs=1e-12)
        assert found.improve_probability[row] == pytest.approx((change < -1e-9).mean(), abs=1e-12)
        assert found.hit_probability[row] == pytest.approx(1 / 64)
    assert found.exact.all()
    assert not found.drop_error.any()


@pytest.mark.parametrize("name", ["enumeration", "elimination", "enumeration,shots=3"])
def test_a_minimum_drops_to_the_minimum(name: str) -> None:
    batch = glass(6, 7, seed=3)
    found = drops_of(subsolver_from(name), batch)
    for row in range(6):
        energies, own = brute(batch, row)
        assert found.mean_drop[row] == pytest.approx(own - energies.min(), abs=1e-11)
    assert found.exact.all()
    assert np.all(found.hit_probability == 1.0)


@pytest.mark.parametrize("name", EXACT)
@pytest.mark.parametrize("rule", RULES)
def test_exact_drops_agree_with_100000_sampled_calls(name: str, rule: AcceptanceRule) -> None:
    """Within 5 standard errors, 21 checks of two averages: a false alarm in 40,000 suites.

    Control errors are drawn from the seed; those calls are held against shots of one and the same disturbed cluster.
    """
    one = glass(1, 4, seed=5)
    subsolver, calls = subsolver_from(name), 100_000
    if "control_error" in name:
        subsolver = dataclasses.replace(subsolver, control_error=0.0)  # type: ignore[type-var]
    exact = drops_of(subsolver, one, rule)
    many = repeated(one, calls)
    _, change, accepted = judge(many, subsolver.propose(many), rule)
    assert exact.exact.all()
    for expected, seen in ((exact.mean_drop[0], -change * accepted), (exact.improve_probability[0], change < -1e-9)):
        assert abs(seen.mean() - expected) < 5 * seen.std() / math.sqrt(calls) + 1e-12


def test_control_errors_are_those_of_the_calls_own_seed() -> None:
    batch = glass(3, 4)
    noisy = subsolver_from("walk,control_error=0.2")
    acting = noisy.noise.disturbed(batch)  # type: ignore[attr-defined]
    laws = noisy.noisy_distribution(batch)  # type: ignore[attr-defined]
    assert not np.array_equal(acting.fields, batch.fields)
    found = drops_of(noisy, batch, "greedy")
    for row in range(3):
        energies, own = brute(batch, row)
        assert found.mean_drop[row] == pytest.approx((laws[row] * np.maximum(0.0, own - energies)).sum(), abs=1e-12)


@pytest.mark.parametrize(
    "name", ["tabu,steps=3,tenure=1", "metropolis,sweeps=2", "walk,dephasing=0.1", "descent,shots=2"]
)
def test_sampled_drops_agree_with_many_calls(name: str) -> None:
    """Mean of 40 clusters at 64 calls each against 500 each, within 5 standard errors of the difference, which the
    500 calls tell; the errors given are right within a factor of two in the sum of their squares.
    """
    batch = glass(40, 5, seed=8)
    subsolver = subsolver_from(name)
    found = drops_of(subsolver, batch, repetitions=64)
    assert not found.exact.any()
    differences, variances = [], []
    for row in range(40):
        many = repeated(batch.rows(row, row + 1), 500)
        _, change, _ = judge(many, subsolver.propose(many), "greedy")
        drops = -change * np.exp(np.minimum(0.0, -change / many.temperature))
        differences.append(found.mean_drop[row] - drops.mean())
        variances.append(drops.var())
    error = math.sqrt(sum(variances) * (1 / 64 + 1 / 500))
    assert abs(sum(differences)) <= 5 * error + 1e-9
    if error > 1e-6:
        assert 0.5 < (found.drop_error**2).sum() / (sum(variances) / 64) < 2.0


def test_the_best_of_many_by_enumerating_all_draws() -> None:
    law, energies = np.array([0.1, 0.4, 0.3, 0.2]), np.array([2.0, -1.0, 2.0, 0.5])
    for shots in (1, 2, 3):
        expected: dict[float, float] = {}
        for drawn in itertools.product(range(4), repeat=shots):
            lowest = min(energies[list(drawn)])
            expected[lowest] = expected.get(lowest, 0.0) + math.prod(law[list(drawn)])
        best = best_of(law, energies, shots)
        for energy, chance in expected.items():
            assert best[energies == energy].sum() == pytest.approx(chance, abs=1e-14)


def test_a_row_is_a_function_of_itself_alone() -> None:
    batch = glass(6, 6)
    for name in ("walk,shots=2", "tabu"):
        subsolver = subsolver_from(name)
        together = drops_of(subsolver, batch)
        for row in range(6):
            alone = drops_of(subsolver, batch.rows(row, row + 1))
            assert alone.mean_drop[0] == together.mean_drop[row]
            assert alone.drop_error[0] == together.drop_error[row]


def test_hits_are_counted_against_the_true_minima() -> None:
    batch, tabu = glass(30, 6, seed=2), subsolver_from("tabu,steps=5")
    found = drops_of(tabu, batch)
    counted = []
    for turn in range(40):
        seeds = np.arange(30, dtype=np.uint64) + np.uint64(1000 * turn)
        outcomes = tabu.propose(replace(batch, seeds=seeds)).outcomes[:, 0].astype(float)
        for row, spins in enumerate(outcomes):
            energy = spins @ batch.fields[row] + 0.5 * spins @ batch.couplings[row] @ spins
            counted.append(energy < brute(batch, row)[0].min() + 1e-9)
    share = float(np.mean(counted))
    assert 0.1 < share < 0.99
    assert abs(found.hit_probability.mean() - share) < 5 * math.sqrt(share * (1 - share) / (30 * 16))
    assert np.isnan(drops_of(make_subsolver("tabu"), glass(2, 70)).hit_probability).all()


def test_a_failed_call_is_worth_nothing() -> None:
    found = drops_of(subsolver_from("elimination,max_width=2"), glass(3, 6))
    assert np.all(found.status == 2)
    assert not found.mean_drop.any()
    assert not found.exact.any()
    assert all("width" in message for message in found.messages)


def test_hastings_knows_the_ratio() -> None:
    """Boltzmann draws are always accepted, so that their mean drop is that of the law."""
    one = glass(1, 4, seed=4)
    energies, own = brute(one, 0)
    law = np.exp(-(energies - energies.min()) / one.temperature[0])
    found = drops_of(subsolver_from("enumeration,draw=boltzmann"), one, "hastings", repetitions=4000)
    assert abs(found.mean_drop[0] - (own - (law * energies).sum() / law.sum())) < 5 * found.drop_error[0]
    assert set(RULES) | {"hastings"} == set(ACCEPTANCE_RULES)


def test_repeated_seeds_are_new_every_time() -> None:
    seeds = glass(50, 3).seeds
    drawn = [repeated_seeds(seeds, turn) for turn in range(1, 20)]
    assert len({int(seed) for part in [seeds, *drawn] for seed in part}) == 50 * 20
