"""Time to solution by its published formula, and exact binomial intervals against scipy's own."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binomtest

from patchwalk.evidence.time_to_solution import binomial_interval, runs_needed, runs_unrounded, time_to_solution


@pytest.mark.parametrize(("successes", "trials"), [(0, 7), (1, 12), (5, 10), (39, 40), (12, 12)])
@pytest.mark.parametrize("level", [0.9, 0.95, 0.99])
def test_intervals_are_those_of_scipy(successes: int, trials: int, level: float) -> None:
    theirs = binomtest(successes, trials).proportion_ci(level, method="exact")
    assert binomial_interval(successes, trials, level) == pytest.approx((theirs.low, theirs.high), abs=1e-10)


def test_runs_make_success_almost_sure_and_one_fewer_does_not() -> None:
    for chance in np.linspace(0.001, 0.98, 200):
        runs = float(runs_needed(chance))
        assert 1.0 - (1.0 - chance) ** runs >= 0.99 - 1e-12
        assert runs == 1.0 or 1.0 - (1.0 - chance) ** (runs - 1.0) < 0.99


def test_the_formula() -> None:
    """Ronnow et al., Science 345 (2014) 420: t ln(0.01) / ln(1 - p)."""
    assert float(runs_unrounded(0.3)) == pytest.approx(math.log(0.01) / math.log(0.7), rel=1e-14)
    assert float(runs_needed(0.99)) == 1.0
    assert float(runs_needed(0.0)) == math.inf


def test_what_never_succeeded_has_a_lower_end_alone() -> None:
    found = time_to_solution(10.0, 0, 8)
    assert (found.value, found.high) == (math.inf, math.inf)
    assert found.low == 10.0 * float(runs_needed(1.0 - 0.025 ** (1 / 8)))
    assert found.as_json()["value"] is None


@pytest.mark.parametrize("chance", [-0.1, 1.1, math.nan])
def test_what_is_no_probability_is_refused(chance: float) -> None:
    with pytest.raises(ValueError, match="probability"):
        runs_needed(chance)
