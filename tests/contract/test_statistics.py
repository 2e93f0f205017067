"""Error bars are as long as they should be: against closed forms for AR(1) series, and counted over repetitions."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import lfilter
from scipy.stats import binomtest

from patchwalk.statistics import FEWEST, Estimate, autocorrelation_time, function_of, mean_of

REPETITIONS = 400


def autoregressive(coefficient: float, shape: tuple[int, ...], seed: int) -> NDArray[np.float64]:
    """Stationary AR(1) series along the first axis, mean 0 and variance 1."""
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=shape) * np.sqrt(1 - coefficient**2)
    noise[0] = rng.normal(size=shape[1:])
    series: NDArray[np.float64] = lfilter([1.0], [1.0, -coefficient], noise, axis=0)
    return series


@pytest.mark.parametrize("coefficient", [0.0, 0.5, 0.9, 0.95])
def test_the_autocorrelation_time_of_ar1_is_its_closed_form(coefficient: float) -> None:
    """tau = (1 + a) / (1 - a), with a relative error of sqrt(2 (2W + 1) / n) for a window W = 6 tau, and at most
    1 % lost beyond the window (Madras & Sokal, J. Stat. Phys. 50 (1988) 109).
    """
    count, tau = 200_000, (1 + coefficient) / (1 - coefficient)
    measured = autocorrelation_time(autoregressive(coefficient, (count,), 1))
    allowed = 4.0 * np.sqrt(2 * (2 * 6 * tau + 1) / count) + 0.01
    assert measured == pytest.approx(tau, rel=allowed)


def test_copies_are_worth_as_much_as_one_long_series() -> None:
    copies = autoregressive(0.9, (5000, 40), 2)
    assert autocorrelation_time(copies) == pytest.approx(19.0, rel=4.0 * np.sqrt(2 * 229 / 200_000) + 0.01)


def test_copies_that_have_not_met_do_not_pretend_to_agree() -> None:
    """Four copies stuck at four levels know the mean no better than four values do."""
    stuck = np.array([0.0, 1.0, 2.0, 3.0]) + 0.1 * autoregressive(0.0, (1000, 4), 3)
    estimate = mean_of(stuck)
    assert estimate.error > 0.5 * np.std([0.0, 1.0, 2.0, 3.0]) / 2
    assert not estimate.reliable
    assert all(mean_of(stuck[:, copy]).error < 0.01 for copy in range(4)), "each on its own is sure of itself"


def test_what_does_not_move_has_no_error() -> None:
    assert mean_of(np.full(50, 0.1)) == Estimate(pytest.approx(0.1), pytest.approx(0.0, abs=1e-12), 1.0, 50)
    assert function_of(np.full((50, 2), 0.1), lambda values: float(values.var())).error == pytest.approx(0.0, abs=1e-12)


def test_one_value_has_no_error_bar() -> None:
    assert mean_of(np.array([3.0])).error == np.inf
    assert function_of(np.array([3.0]), lambda values: float(values.mean())).error == np.inf
    assert "too few samples" in str(mean_of(np.array([3.0])))


def covered(estimates: list[Estimate], truth: float) -> int:
    return sum(abs(one.value - truth) < one.error for one in estimates)


def assert_covers(hits: int, least: float) -> None:
    """One error bar holds the truth in 68.3 % of repetitions; with some hundred effective values slightly less."""
    assert binomtest(hits, REPETITIONS, 0.683, "greater").pvalue > 1e-4, "error bars are too long"
    assert binomtest(hits, REPETITIONS, least, "less").pvalue > 1e-4, "error bars are too short"


@pytest.mark.parametrize(("coefficient", "copies"), [(0.0, 1), (0.8, 1), (0.8, 4), (0.95, 4)])
def test_error_bars_of_means_cover_the_truth(coefficient: float, copies: int) -> None:
    series = autoregressive(coefficient, (4000, copies, REPETITIONS), 4)
    assert_covers(covered([mean_of(series[:, :, i]) for i in range(REPETITIONS)], 0.0), 0.65)


@pytest.mark.parametrize(("coefficient", "copies"), [(0.0, 1), (0.8, 1), (0.8, 4)])
def test_error_bars_of_variances_cover_the_truth(coefficient: float, copies: int) -> None:
    series = autoregressive(coefficient, (2000, copies, REPETITIONS), 5)
    estimates = [function_of(series[:, :, i], lambda values: float(values.var())) for i in range(REPETITIONS)]
    assert_covers(covered(estimates, 1.0), 0.62)


def test_the_jackknife_takes_the_bias_out_of_a_variance() -> None:
    """The plain variance of n values is short by tau / n = 0.019 here; what stays comes from short blocks."""
    series = autoregressive(0.9, (1000, 5 * REPETITIONS), 6)
    plain = series.var(axis=0).mean()
    corrected = np.mean([function_of(one, lambda values: float(values.var())).value for one in series.T])
    assert plain == pytest.approx(1 - 0.019, abs=0.012)  # four standard errors
    assert abs(corrected - 1.0) < 0.5 * abs(plain - 1.0)


def test_few_effective_values_are_called_unreliable() -> None:
    slow = mean_of(autoregressive(0.99, (1000,), 7))
    assert slow.effective < FEWEST
    assert not slow.reliable
    assert mean_of(autoregressive(0.5, (1000,), 7)).reliable
