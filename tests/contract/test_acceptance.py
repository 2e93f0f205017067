"""The acceptance rule: the best shot, the first among ties, and the Metropolis law for taking it."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binomtest

from patchwalk.acceptance import judge
from patchwalk.engine import ask
from patchwalk.subsolvers.contract import I8, ClusterBatch, Edges, Forecast, Proposals, Status, Work, all_well


def one_field(rows: int, field: float, temperature: float) -> ClusterBatch:
    """Clusters of two spins, both up; flipping the first changes the energy by -2 ``field``."""
    return ClusterBatch(
        fields=np.tile([field, 0.0], (rows, 1)), spins=np.ones((rows, 2)), temperature=np.full(rows, temperature),
        seeds=np.arange(rows), couplings=np.zeros((rows, 2, 2)),
    )  # fmt: skip


def answer(batch: ClusterBatch, outcomes: list[list[int]]) -> Proposals:
    rows = len(batch)
    shots: I8 = np.tile(np.array(outcomes, np.int8), (rows, 1, 1))
    return Proposals(shots, Work(), *all_well(rows))


def test_the_best_shot_is_taken_and_the_first_among_ties() -> None:
    batch = one_field(1, 1.0, 0.0)
    chosen, change, accepted = judge(batch, answer(batch, [[1, 1], [-1, 1], [-1, -1]]))
    assert (chosen[0], change[0], accepted[0]) == (1, -2.0, True)


def test_metropolis_takes_a_rise_with_its_boltzmann_factor() -> None:
    batch = one_field(20_000, -0.5, 0.8)  # a rise of 1
    _, change, accepted = judge(batch, answer(batch, [[-1, 1]]))
    assert np.all(change == 1.0)
    assert binomtest(int(accepted.sum()), 20_000, np.exp(-1 / 0.8)).pvalue > 1e-6


@pytest.mark.parametrize(("field", "taken"), [(0.5, True), (0.0, True), (-0.5, False)])
def test_at_temperature_zero_nothing_that_rises_is_taken(field: float, taken: bool) -> None:
    batch = one_field(50, field, 0.0)
    _, _, accepted = judge(batch, answer(batch, [[-1, 1]]))
    assert np.all(accepted == taken)


def test_the_energy_is_recomputed_alike_from_matrix_and_edges() -> None:
    rng = np.random.default_rng(4)
    couplings = np.triu(rng.normal(size=(5, 6, 6)), 1)
    spins = rng.choice([-1, 1], (5, 6))
    outcomes = rng.choice(np.array([-1, 1], np.int8), (5, 3, 6))
    common = {"fields": rng.normal(size=(5, 6)), "spins": spins, "temperature": np.ones(5), "seeds": np.arange(5)}
    dense = ClusterBatch(**common, couplings=couplings + couplings.transpose(0, 2, 1))
    first, second = np.triu_indices(6, 1)
    pairs = np.tile(np.stack([first, second], axis=1), (5, 1))
    edges = Edges(np.arange(6) * len(first), pairs, couplings[:, first, second].ravel())
    proposals = Proposals(outcomes, Work(), *all_well(5))
    for one, other in zip(judge(dense, proposals), judge(ClusterBatch(**common, edges=edges), proposals), strict=True):
        np.testing.assert_allclose(one, other, atol=1e-12)


class Broken:
    """A subsolver that answers whatever it was told to."""

    name, max_spins, deterministic, balance = "broken", 64, True, "none"

    def __init__(self, answer: object) -> None:
        self.answer = answer

    def prepare(self, sample: ClusterBatch) -> Broken:
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        return Forecast(0, Work())

    def propose(self, batch: ClusterBatch) -> Proposals:
        if isinstance(self.answer, Exception):
            raise self.answer
        return Proposals(self.answer, Work(), *all_well(len(batch)))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("wrong", "words"),
    [
        (RuntimeError("the device is off"), "RuntimeError: the device is off"),
        (np.zeros((3, 1, 2), np.int8), "numbers other than"),
        (np.full((3, 1, 2), 2, np.int8), "numbers other than"),
        (np.ones((3, 1, 3), np.int8), "expected"),
        (np.ones((3, 2), np.int8), "int8 array"),
        (np.full((3, 1, 2), np.nan), "int8 array"),
        ("spins", "int8 array"),
    ],
)
def test_a_wrong_answer_is_a_failed_call_that_changes_nothing(wrong: object, words: str) -> None:
    batch = one_field(3, 1.0, 1.0)
    proposals = ask(Broken(wrong), batch)
    assert proposals.status.tolist() == [Status.FAILED] * 3
    assert all(words in message and message.startswith("broken: ") for message in proposals.messages)
    _, change, accepted = judge(batch, proposals)
    assert not accepted.any()
    assert not change.any()


@pytest.mark.parametrize(("rise", "taken"), [(-1.0, True), (0.0, True), (0.7, True), (0.8, True), (0.9, False)])
def test_a_threshold_takes_rises_up_to_the_temperature(rise: float, taken: bool) -> None:
    batch = one_field(50, -rise / 2, 0.8)
    _, change, accepted = judge(batch, answer(batch, [[-1, 1]]), "threshold")
    assert np.all(change == rise)
    assert np.all(accepted == taken)


@pytest.mark.parametrize(("rise", "taken"), [(-1.0, True), (0.0, True), (1e-6, False)])
def test_greed_takes_no_rise_however_hot(rise: float, taken: bool) -> None:
    batch = one_field(50, -rise / 2, 100.0)
    _, _, accepted = judge(batch, answer(batch, [[-1, 1]]), "greedy")
    assert np.all(accepted == taken)


def test_hastings_takes_a_rise_with_its_ratio() -> None:
    """exp(-1/0.8 + 0.5), and never a call whose ratio is not known."""
    batch = one_field(20_000, -0.5, 0.8)
    ratio = np.where(np.arange(20_000) % 2, 0.5, np.nan)
    shots = np.tile(np.array([[-1, 1]], np.int8), (20_000, 1, 1))
    _, _, accepted = judge(batch, Proposals(shots, Work(), *all_well(20_000), log_ratio=ratio), "hastings")
    assert not accepted[::2].any()
    assert binomtest(int(accepted.sum()), 10_000, np.exp(-1 / 0.8 + 0.5)).pvalue > 1e-6
