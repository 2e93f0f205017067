"""Mixtures of rules: drawn by their shares, moved towards what pays, never below the floor, resumed from a state."""

from __future__ import annotations

import json

import numpy as np
import pytest

from patchwalk.clusters.mixture import FLOOR, PATIENCE, Mixture, RuleError, RuleWeights, mixture_of
from patchwalk.clusters.rules import RULES, Marks, View
from patchwalk.problem.families import make
from patchwalk.subsolvers.draws import generator_for


@pytest.mark.parametrize(
    ("setting", "shares"),
    [
        ("ball", {"ball": 1.0}),
        ("ball=2, loose=1,stale", {"ball": 0.5, "loose": 0.25, "stale": 0.25}),
        ({"ball": 3, "strip": 1.0}, {"ball": 0.75, "strip": 0.25}),
    ],
)
def test_settings_are_read(setting: str | dict[str, float], shares: dict[str, float]) -> None:
    mixture = mixture_of(setting)
    assert {rule.name: share for rule, share in zip(mixture.rules, mixture.shares, strict=True)} == shares
    assert mixture_of(mixture.name) == mixture
    assert mixture.looks_at_spins == any(RULES[name].looks_at_spins for name in shares)


@pytest.mark.parametrize(
    ("setting", "words"),
    [
        ("bal", "did you mean 'ball'"),
        ("ball,lose=2", "did you mean 'loose'"),
        ("ball=two", "ball=2"),
        ("ball=0", "above zero"),
        ("ball=nan", "above zero"),
        ("ball=-1", "above zero"),
        ("ball,ball=2", "2 times"),
        ("", "There are: ball"),
        ({}, "there are: ball"),
        ({"ball": True}, "True"),
    ],
)
def test_mistakes_are_named(setting: str | dict[str, float], words: str) -> None:
    with pytest.raises(RuleError, match=words):
        mixture_of(setting)


def test_rules_are_drawn_by_their_shares() -> None:
    mixture = mixture_of("ball=6,loose=3,stale=1")
    draws = np.bincount([mixture.drawn(seed) for seed in range(4000)], minlength=3) / 4000
    shares = np.array(mixture.shares)
    assert np.all(np.abs(draws - shares) < 5 * np.sqrt(shares * (1 - shares) / 4000))


def test_a_round_is_a_round_of_the_rule_drawn() -> None:
    mixture, problem = mixture_of("ball,loose,strip"), make("lattice2d", 10, seed=1)
    view, marks = View.of(problem, np.ones(len(problem), np.int8)), Marks.for_problem(problem)
    for seed in range(12):
        (rows,) = mixture.pick(problem, 6, 4, seed, marks, view)
        drawn = mixture.rules[mixture.drawn(seed)]
        (own,) = drawn.pick(problem, 6, 4, seed, Marks.for_problem(problem), view)
        assert np.array_equal(rows, own)


def rewarded(mixture: Mixture, rates: list[float], rounds: int, weights: RuleWeights | None = None) -> RuleWeights:
    """As many rounds, each of the rule drawn, with gains that scatter round its rate as much as they are large."""
    weights = weights or RuleWeights(mixture)
    noise = generator_for(5)
    for seed in range(rounds):
        index = mixture.drawn(seed, weights)
        weights.reward(index, rates[index] + noise.normal() * max(rates), 1.0)
    return weights


def test_shares_move_to_what_pays_and_back() -> None:
    mixture = mixture_of("ball,loose")
    weights = rewarded(mixture, [1.0, 4.0], 1000)
    assert weights.shares[1] > 0.65
    weights = rewarded(mixture, [4.0, 1.0], 1000, weights)
    assert weights.shares[0] > 0.65


def test_dear_work_counts_against_a_rule() -> None:
    """Rates of 4 to 1 share what is left above the floor as 4 to 1, but for the few rounds' worth of patience."""
    weights = RuleWeights(mixture_of("ball,loose"))
    for _ in range(1000):
        weights.reward(0, gain=2.0, work=1.0)
        weights.reward(1, gain=2.0, work=4.0)
    rounds = weights.rounds / 2
    ratio = (4 * rounds + 2.5 * PATIENCE) / (rounds + 2.5 * PATIENCE)  # a round's work is 2.5 on average
    assert ratio > 3.5
    assert weights.shares[0] == pytest.approx(FLOOR + (1 - 2 * FLOOR) * ratio / (1 + ratio), abs=0.005)


@pytest.mark.parametrize("names", ["ball,loose", ",".join(RULES)])
def test_no_rule_falls_below_the_floor(names: str) -> None:
    mixture = mixture_of(names)
    weights = RuleWeights(mixture)
    for _ in range(500):
        for index in range(len(mixture.rules)):
            weights.reward(index, gain=1.0 if index == 0 else -1.0, work=1.0)
    assert weights.shares.sum() == pytest.approx(1.0)
    assert weights.shares[1:] == pytest.approx(np.full(len(mixture.rules) - 1, FLOOR))


def test_where_nothing_is_gained_shares_stay() -> None:
    mixture = mixture_of("ball=3,loose=1")
    weights = RuleWeights(mixture)
    assert weights.shares.tolist() == [0.75, 0.25]
    for index in (0, 1, 1, 0, 1):
        weights.reward(index, gain=0.0, work=1.0)
    assert weights.shares.tolist() == [0.75, 0.25]


def test_a_switch_keeps_shares_fixed() -> None:
    mixture = mixture_of("ball=3,loose=1", adapt=False)
    weights = RuleWeights(mixture)
    weights.reward(1, gain=100.0, work=1.0)
    assert weights.shares.tolist() == [0.75, 0.25]
    assert not any(weights.as_state().values())


def test_units_of_energy_and_work_do_not_matter() -> None:
    mixture = mixture_of("ball,loose,stale")
    one, other = RuleWeights(mixture), RuleWeights(mixture)
    for index, gain, work in [(0, 1.3, 0.7), (1, 2.9, 1.1), (2, -0.4, 0.2), (1, 0.3, 0.9)]:
        one.reward(index, gain, work)
        other.reward(index, 2.0**20 * gain, 2.0**-7 * work)
    assert one.shares.tobytes() == other.shares.tobytes()


def test_a_state_gives_the_same_weights_again() -> None:
    mixture = mixture_of("ball,loose")
    straight = rewarded(mixture, [1.0, 2.0], 60)
    stored = json.loads(json.dumps(straight.as_state()))
    resumed = RuleWeights.from_state(mixture, stored)
    assert resumed.shares.tobytes() == straight.shares.tobytes()
    for weights in (straight, resumed):
        weights.reward(0, 0.1, 0.3)
    assert resumed.as_state() == straight.as_state()
    with pytest.raises(KeyError):
        RuleWeights.from_state(mixture_of("ball,stale"), stored)


@pytest.mark.parametrize(("gain", "work"), [(float("nan"), 1.0), (1.0, -1.0), (1.0, float("inf"))])
def test_what_is_no_number_is_refused(gain: float, work: float) -> None:
    with pytest.raises(ValueError, match="cannot be counted"):
        RuleWeights(mixture_of("ball")).reward(0, gain, work)
