"""Exponents: fits that find what was put in, intervals that hold it as often as they say."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binomtest

from patchwalk.evidence.scaling import line_through, models_of, scaling_fits

SIZES = np.arange(5, 13)


def test_the_line_is_that_of_numpy() -> None:
    rng = np.random.default_rng(1)
    points, errors = rng.normal(size=len(SIZES)), rng.uniform(0.5, 2.0, len(SIZES))
    theirs = np.polyfit(SIZES, points, 1, w=1.0 / errors)
    assert line_through(SIZES, points, errors) == pytest.approx(tuple(theirs), rel=1e-9)


def test_an_exact_law_has_its_exponent_in_every_average() -> None:
    fits = scaling_fits({int(k): np.full(20, 2.0 ** (-0.41 * k - 1.0)) for k in SIZES})
    assert [fit.average for fit in fits] == ["mean", "median", "mean of logarithms"]
    for fit in fits:
        assert (fit.exponent, fit.low, fit.high) == pytest.approx((0.41, 0.41, 0.41), abs=1e-9)
        assert fit.intercept == pytest.approx(-1.0, abs=1e-9)
        assert np.abs(fit.residuals).max() < 1e-9


def test_zeros_have_no_logarithm() -> None:
    samples = {int(k): np.array([0.0, 0.5, 0.5]) for k in SIZES}
    assert [fit.average for fit in scaling_fits(samples)] == ["mean", "median"]


def test_two_sizes_have_no_exponent() -> None:
    assert scaling_fits({5: np.ones(3), 6: np.ones(3)}) == []


def test_intervals_cover_as_they_say() -> None:
    """Log-normal successes of known slope: 95 % intervals miss in 1 to 10 % of 200 trials, which a fair coin of 5 %
    leaves with probability below 0.5 %.
    """
    rng, trials, held = np.random.default_rng(3), 200, 0
    for trial in range(trials):
        samples = {k: 2.0 ** (-0.5 * k + rng.normal(0.0, 0.6, 60)) for k in (4, 6, 8)}
        fit = next(fit for fit in scaling_fits(samples, seed=trial) if fit.average == "mean of logarithms")
        held += fit.low <= 0.5 <= fit.high
    assert binomtest(trials - held, trials, 0.05).pvalue > 0.005


@pytest.mark.parametrize(
    ("law", "points"),
    [
        ("exponential", -0.4 * SIZES - 1.0),
        ("power law", -3.0 * np.log2(SIZES) + 1.0),
        ("stretched exponential", -1.0 * SIZES**1.8),
    ],
)
def test_the_law_that_was_put_in_is_found(law: str, points: np.typing.NDArray[np.float64]) -> None:
    models = models_of(SIZES, points, np.full(len(SIZES), 0.02))
    assert next(model.name for model in models if model.excess == 0.0) == law
