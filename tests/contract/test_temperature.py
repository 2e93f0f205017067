"""Coolings fall, end where they should, and the adaptive one spends its time where the energy depends on T."""

from __future__ import annotations

import numpy as np
import pytest

from patchwalk.search.temperature import AdaptiveCooling, GeometricCooling

STAGES = np.linspace(0.0, 1.0, 2001)


@pytest.mark.parametrize("coolings", [1, 2, 3, 5])
def test_every_cooling_falls_from_hot_to_cold_over_twice_the_time(coolings: int) -> None:
    plain = GeometricCooling(hot=2.0, cold=0.1, scale=3.0, coolings=coolings)
    temperatures = np.array([plain.temperature(stage) for stage in STAGES])
    assert temperatures[0] == 6.0
    assert temperatures[-1] == pytest.approx(0.3)
    assert np.all((temperatures <= 6.0) & (temperatures >= 0.3 - 1e-12))
    rises = np.flatnonzero(np.diff(temperatures) > 0.0)
    assert len(rises) == coolings - 1
    expected = [(2**n - 1) / (2**coolings - 1) for n in range(1, coolings)]
    assert STAGES[rises + 1] == pytest.approx(expected, abs=1e-3)


def test_zero_means_zero() -> None:
    assert GeometricCooling(0.0, 0.0, 3.0, 2, 4).at(0.4).tolist() == [0.0] * 4
    assert GeometricCooling(1.0, 0.0, 3.0).temperature(1.0) == 0.0


def watched(cooling: AdaptiveCooling, step_at: float, seed: int = 1) -> AdaptiveCooling:
    """The first cooling seen with energies that fluctuate most near the temperature ``step_at`` (share fallen)."""
    rng = np.random.default_rng(seed)
    for number, stage in enumerate(np.linspace(0.0, 1.0, 4001)):
        fallen = cooling.plain.fallen(stage)
        spread = 0.1 + 5.0 * np.exp(-((fallen - step_at) ** 2) / 0.002)
        cooling.watch(rng.normal(scale=spread, size=2), float(stage), number)
    return cooling


@pytest.mark.parametrize("step_at", [0.2, 0.5, 0.8])
def test_the_adaptive_clock_is_monotone_bounded_and_slow_where_it_matters(step_at: float) -> None:
    plain = GeometricCooling(hot=1.0, cold=0.05, scale=2.0, coolings=2, replicas=2)
    cooling = watched(AdaptiveCooling(plain), step_at)
    later = STAGES[STAGES > 1 / 3 + 1e-9]
    temperatures = np.array([cooling.at(stage)[0] for stage in later])
    assert np.all(np.diff(temperatures) <= 0.0)
    assert temperatures[0] == pytest.approx(2.0, rel=0.02)
    assert temperatures[-1] == pytest.approx(0.1, rel=1e-9)
    fallen = np.log(temperatures / 2.0) / np.log(0.05)
    near = np.mean(np.abs(fallen - step_at) < 0.1)
    assert near > 0.35, "a geometric cooling spends a fifth of its time there"
    for low in np.arange(0.0, 1.0, 0.25):  # half of the time is always spread geometrically
        assert np.mean((fallen >= low) & (fallen < low + 0.25)) > 0.11


def test_it_is_geometric_until_it_has_learnt() -> None:
    for coolings, stages in ((1, STAGES), (2, STAGES[STAGES < 1 / 3])):
        plain = GeometricCooling(hot=1.0, cold=0.05, scale=2.0, coolings=coolings)
        cooling = watched(AdaptiveCooling(plain), 0.5)
        assert [cooling.at(stage)[0] for stage in stages] == [plain.temperature(stage) for stage in stages]
    unseen = AdaptiveCooling(GeometricCooling(hot=1.0, cold=0.05, scale=2.0, coolings=3))
    assert [unseen.at(stage)[0] for stage in STAGES] == pytest.approx([unseen.plain.temperature(s) for s in STAGES])


@pytest.mark.parametrize(("hot", "cold", "scale"), [(0.0, 0.0, 1.0), (1.0, 0.0, 1.0), (1.0, 0.1, 0.0)])
def test_nothing_breaks_at_zero(hot: float, cold: float, scale: float) -> None:
    cooling = watched(AdaptiveCooling(GeometricCooling(hot, cold, scale, coolings=2)), 0.5)
    assert all(np.all(np.isfinite(cooling.at(stage))) for stage in STAGES)


def test_what_it_has_learnt_is_plain_state() -> None:
    plain = GeometricCooling(hot=1.0, cold=0.05, scale=2.0, coolings=2)
    cooling = watched(AdaptiveCooling(plain), 0.5)
    again = AdaptiveCooling(plain)
    again.set_state(cooling.as_state())
    assert [again.at(stage)[0] for stage in STAGES] == [cooling.at(stage)[0] for stage in STAGES]
    rng = np.random.default_rng(3)
    for number, energy in enumerate(rng.normal(size=100)):
        again.watch(np.array([energy]), number / 300, number)
        cooling.watch(np.array([energy]), number / 300, number)
    assert again.as_state() == cooling.as_state()
