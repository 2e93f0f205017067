"""Intervals: coverage against a known law, exact binomial ones against scipy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binomtest

from patchwalk.statistics import binomial_interval, bootstrap, by_run, ratio


@pytest.mark.parametrize(("successes", "trials"), [(0, 7), (3, 11), (40, 40), (517, 3000)])
@pytest.mark.parametrize("level", [0.9, 0.99])
def test_binomial_intervals_are_those_of_scipy(successes: int, trials: int, level: float) -> None:
    found = binomial_interval(successes, trials, level)
    exact = binomtest(successes, trials).proportion_ci(level, method="exact")
    assert (found.low, found.high) == pytest.approx((exact.low, exact.high), abs=1e-12)
    assert found.value == successes / trials


def test_impossible_counts_are_refused() -> None:
    with pytest.raises(ValueError, match="5 successes in 3 trials"):
        binomial_interval(5, 3)


@pytest.mark.parametrize("runs", [3, 5, 12])
def test_coverage_for_a_normal_law(runs: int) -> None:
    """300 sets of runs whose mean is 2: 95 % of the intervals hold it, within four standard errors of 300 trials."""
    generator = np.random.default_rng(runs)
    held = 0
    for _ in range(300):
        values = generator.normal(2.0, 1.0, runs)
        spread = bootstrap(np.stack([values, np.ones(runs)], axis=1), ratio)
        held += spread.low <= 2.0 <= spread.high
    assert abs(held / 300 - 0.95) < 4.0 * (0.95 * 0.05 / 300) ** 0.5


def test_coverage_for_weighted_means_of_calls_with_a_share_of_each_run() -> None:
    """Calls of one run share an error: over calls the interval would be far too narrow, over runs it is not."""
    generator = np.random.default_rng(5)
    runs, held = np.repeat(np.arange(8), 40), 0
    for _ in range(300):
        values = generator.normal(0.0, 1.0, 8)[runs] + generator.normal(0.0, 1.0, len(runs))
        weights = generator.uniform(0.5, 2.0, len(runs))
        spread = bootstrap(by_run(runs, weights * values, weights), ratio)
        held += spread.low <= 0.0 <= spread.high
    assert abs(held / 300 - 0.95) < 4.0 * (0.95 * 0.05 / 300) ** 0.5


def test_one_run_has_no_interval_and_silent_runs_do_not_count() -> None:
    alone = bootstrap(np.array([[3.0, 2.0], [0.0, 0.0]]), ratio)
    assert alone.value == 1.5
    assert alone.runs == 1
    assert not alone.known
    assert not alone.above_zero
    assert "no interval" in str(alone)


def test_ratios_on_the_logarithmic_scale_stay_above_zero() -> None:
    sums = np.array([[1.0, 10.0], [8.0, 10.0], [2.0, 10.0]])
    assert bootstrap(sums, ratio, logarithmic=True).low > 0.0
    assert bootstrap(sums, ratio).low < 0.0


def test_an_infinite_answer_stays_one() -> None:
    spread = bootstrap(np.ones((4, 2)), lambda sums: np.full(len(sums), np.inf))
    assert spread.value == spread.high == np.inf
