"""Paired comparisons: intervals that keep their promise, curves by hand, sentences that claim no more than is there."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binomtest
from scipy.stats import t as student

from patchwalk.evidence.comparing import (
    Outcome,
    curves_of,
    duels,
    mean_interval,
    performance_curves,
    standings,
    widened_tail,
)


def outcome(instance: str, contender: str, seed: int, residual: float, reached: float = math.inf) -> Outcome:
    return Outcome(instance, contender, seed, residual, reached, 100.0)


@pytest.mark.parametrize(("instances", "seeds"), [(1, 3), (1, 10), (2, 5), (6, 4)])
def test_no_difference_is_found_no_more_often_than_stated(instances: int, seeds: int) -> None:
    """Differences of mean zero, normal within and between instances; at most 5 % false alarms, which more than
    expected would be a p-value below 0.005 in 300 trials.
    """
    rng, trials, alarms = np.random.default_rng(instances + seeds), 300, 0
    numbers = np.repeat(np.arange(instances), seeds)
    for trial in range(trials):
        shifts = rng.normal(size=instances) if instances > 1 else np.zeros(1)
        alarms += mean_interval(shifts[numbers] + rng.normal(size=len(numbers)), numbers, seed=trial).tells
    assert binomtest(alarms, trials, 0.05, alternative="greater").pvalue > 0.005


def test_a_difference_that_is_there_is_found() -> None:
    rng, numbers = np.random.default_rng(1), np.zeros(10, np.int64)
    found = sum(mean_interval(2.0 + rng.normal(size=10), numbers, seed=trial).tells for trial in range(50))
    assert found >= 45  # power of Student's test at two standard deviations and ten pairs: above 0.9999


def test_an_interval_is_never_narrower_than_students() -> None:
    values = np.array([1.0, 2.0, 4.0])
    found = mean_interval(values, np.zeros(3, np.int64))
    reach = student.ppf(0.975, 2) * values.std(ddof=1) / 3**0.5
    assert found.low is not None
    assert found.low <= values.mean() - reach + 1e-12
    assert widened_tail(5) < widened_tail(50) < 0.025


def test_one_pair_gives_no_interval_and_says_so() -> None:
    runs = [outcome("a", "walk", 1, 0.1), outcome("a", "tabu", 1, 0.2)]
    duel = duels(runs, ["walk", "tabu"])[0]
    assert duel.difference.low is None
    assert "more --seeds" in duel.verdict
    assert "no interval" in str(duel.difference)


def test_runs_are_paired_by_instance_and_seed() -> None:
    runs = [outcome("a", "walk", seed, seed + 0.5) for seed in (1, 2, 3)]
    runs += [outcome("a", "tabu", seed, float(seed)) for seed in (3, 2, 4)]
    duel = duels(runs, ["walk", "tabu"])[0]
    assert (duel.difference.value, duel.difference.low, duel.difference.high) == (0.5, 0.5, 0.5)
    assert (duel.wins, duel.ties, duel.losses) == (0, 0, 2)
    assert duel.verdict.startswith("tabu ended lower than walk, by 0.5 ")
    assert duels(runs, ["tabu", "walk"])[0].verdict == duel.verdict  # told from the better one's side


def test_equal_runs_cannot_be_told_apart() -> None:
    runs = [outcome("a", name, seed, float(seed)) for name in ("walk", "tabu") for seed in (1, 2)]
    assert "cannot be told from none" in duels(runs, ["walk", "tabu"])[0].verdict


def test_three_pairs_share_the_level() -> None:
    runs = [outcome("a", name, seed, float(seed)) for name in "abc" for seed in (1, 2)]
    assert [duel.level for duel in duels(runs, list("abc"))] == pytest.approx([1.0 - 0.05 / 3] * 3)


def test_curves_by_hand() -> None:
    """Dolan & More, Math. Program. 91 (2002) 201: the share of problems with a ratio to the best of at most tau."""
    costs = np.array([[1.0, 2.0, 4.0], [3.0, 1.0, np.inf], [2.0, 2.0, 2.0], [np.inf, np.inf, np.inf]])
    curves = curves_of(costs, ["a", "b", "c"])
    assert curves[0].ratios == (1.0, 2.0, 3.0, 4.0)
    assert [curve.shares for curve in curves] == [
        (0.5, 0.5, 0.75, 0.75), (0.5, 0.75, 0.75, 0.75), (0.25, 0.25, 0.25, 0.5),
    ]  # fmt: skip


def test_curves_of_runs_rest_on_time_to_solution() -> None:
    runs = [outcome("p", "a", 1, 0.0, 10.0), outcome("p", "a", 2, 0.0, 20.0)]
    runs += [outcome("p", "b", 1, 0.0, 10.0), outcome("p", "b", 2, 0.5)]
    curves = performance_curves(runs, ["a", "b"])
    assert curves[0].shares == (1.0, 1.0)
    assert curves[1].ratios == (1.0, 7.0)  # half of the runs succeed: ln(0.01)/ln(0.5), rounded up
    assert curves[1].shares == (0.0, 1.0)


def test_standings_count_what_met_the_reference() -> None:
    runs = [outcome("p", "a", 1, 0.0, 10.0), outcome("p", "a", 2, 0.4), outcome("p", "a", 3, 0.2)]
    standing = standings(runs, ["a"])[0]
    assert (standing.solution.successes, standing.solution.trials, standing.median_reach) == (1, 3, None)
    assert standing.residual.value == pytest.approx(0.2)
