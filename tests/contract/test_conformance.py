"""The conformance check passes what is honest and names what is not: one broken backend for every promise."""

from __future__ import annotations

import math
import re
import sys
import time
from dataclasses import dataclass, field
from itertools import count
from pathlib import Path
from typing import Any, ClassVar, Self

import numpy as np
import pytest

from patchwalk.subsolvers import ClusterBatch, Forecast, Proposals, Status, Work, make_subsolver, subsolver_names
from patchwalk.subsolvers.conformance import PROMISES, Verdict, check
from patchwalk.subsolvers.conformance_trial import FALSE_ALARM, chance_of, configurations, numbers
from patchwalk.subsolvers.contract import F64, Balance, all_well, refuse_oversize
from patchwalk.subsolvers.registry import SubsolverError

TEMPLATE = Path(__file__).resolve().parents[2] / "configs" / "device-template.py"

UP = 0.8
"""The probability of +1 where a stand-in draws its spins unevenly."""


@dataclass(frozen=True)
class Honest:
    """A stand-in that keeps every promise: spins drawn independently, +1 with probability ``up``."""

    up: float = 0.5
    balance: Balance = "symmetric"

    name: ClassVar[str] = "honest"
    max_spins: ClassVar[int] = 10
    deterministic: ClassVar[bool] = True

    def prepare(self, sample: ClusterBatch) -> Self:
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        return Forecast(bytes=batch.size, work=self.work(batch))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "this stand-in")
        return self.proposals(batch, self.draw(batch))

    def draw(self, batch: ClusterBatch) -> np.ndarray:
        units = np.stack([np.random.default_rng(seed).random(batch.size) for seed in self.seeds(batch)])
        return np.where(units < self.up, 1, -1).astype(np.int8)[:, None, :]

    def seeds(self, batch: ClusterBatch) -> np.ndarray:
        return batch.seeds

    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        return Proposals(outcomes, self.work(batch), *all_well(len(batch)), **more)

    def work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(shots=np.ones(rows, np.int64), spin_updates=np.full(rows, batch.size))

    def law(self, batch: ClusterBatch) -> F64:
        """The probability of every configuration: f64 (2^k,)."""
        ups = (configurations(batch.size) == 1).sum(axis=1)
        return self.up**ups * (1 - self.up) ** (batch.size - ups)


class HonestRatio(Honest):
    """Uneven draws with the log ratio that makes up for it."""

    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        law = np.log(self.law(batch))
        ratio = law[numbers(batch.spins)] - law[numbers(outcomes[:, 0])]
        return super().proposals(batch, outcomes, log_ratio=ratio, **more)


class HonestHit(Honest):
    """Reports how often a shot hits, and its law."""

    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        assert batch.couplings is not None
        states, law, hit = configurations(batch.size).astype(float), self.law(batch), np.empty(len(batch))
        for row in range(len(batch)):
            energies = states @ batch.fields[row] + 0.5 * np.einsum("xi,ij,xj->x", states, batch.couplings[row], states)
            hit[row] = law[np.isclose(energies, energies.min(), atol=1e-9)].sum()
        return super().proposals(batch, outcomes, hit_probability=hit, noiseless_hit=hit, **more)

    def distribution(self, batch: ClusterBatch) -> F64:
        return np.tile(self.law(batch), (len(batch), 1))


class NoisyBeyondItsLaw(HonestHit):
    """Draws with noise whose own hit probability it does not know, and states the law it would have without."""

    def draw(self, batch: ClusterBatch) -> np.ndarray:
        return Honest(up=UP).draw(batch)

    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        quiet = super().proposals(batch, outcomes)
        return Honest.proposals(self, batch, outcomes, noiseless_hit=quiet.noiseless_hit)


class Raises(Honest):
    def propose(self, batch: ClusterBatch) -> Proposals:
        raise RuntimeError("the fridge is warm")


class FailsWithoutASentence(Honest):
    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        status = np.full(len(batch), Status.FAILED, np.uint8)
        return Proposals(outcomes, self.work(batch), status, ("",) * len(batch))


class ForgetsTheShots(Honest):
    def draw(self, batch: ClusterBatch) -> np.ndarray:
        return super().draw(batch)[:, 0]


class ReturnsBits(Honest):
    def draw(self, batch: ClusterBatch) -> np.ndarray:
        return np.maximum(super().draw(batch), np.int8(0))


class ForgetsItsSeed(Honest):
    turns: ClassVar[Any] = count()

    def seeds(self, batch: ClusterBatch) -> np.ndarray:
        return batch.seeds + np.uint64(next(self.turns))


class SharesAStream(Honest):
    def seeds(self, batch: ClusterBatch) -> np.ndarray:
        return np.cumsum(batch.seeds // np.uint64(2 * len(batch)))


@dataclass(frozen=True)
class KnowsWhenItWasMade(Honest):
    serial: int = field(default_factory=count().__next__, init=False, compare=False)

    def seeds(self, batch: ClusterBatch) -> np.ndarray:
        return batch.seeds + np.uint64(self.serial)


class HoldsASocket(Honest):
    def __reduce__(self) -> Any:
        raise TypeError("cannot pickle a socket")


class TakesAnySize(Honest):
    def propose(self, batch: ClusterBatch) -> Proposals:
        return self.proposals(batch, self.draw(batch))


class CountsTooLittle(Honest):
    def forecast(self, batch: ClusterBatch) -> Forecast:
        work = self.work(batch)
        assert work.spin_updates is not None
        return Forecast(bytes=1, work=Work(shots=work.shots, spin_updates=work.spin_updates * 5))


class ForgetsTheRatio(Honest):
    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        return super().proposals(batch, outcomes, log_ratio=np.zeros(len(batch)), **more)


class TakesTheRatioUpsideDown(HonestRatio):
    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        law = np.log(self.law(batch))
        ratio = law[numbers(outcomes[:, 0])] - law[numbers(batch.spins)]
        return Honest.proposals(self, batch, outcomes, log_ratio=ratio, **more)


class Boasts(Honest):
    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        return super().proposals(batch, outcomes, hit_probability=np.full(len(batch), 0.25), **more)


class BoastsOfItsLaw(HonestHit):
    """Off by less than any count of draws would tell."""

    def proposals(self, batch: ClusterBatch, outcomes: np.ndarray, **more: Any) -> Proposals:
        true = super().proposals(batch, outcomes)
        assert true.hit_probability is not None
        hit = true.hit_probability * 1.0001
        return Honest.proposals(self, batch, outcomes, hit_probability=hit, noiseless_hit=hit)


class StatesAnotherLaw(Honest):
    def distribution(self, batch: ClusterBatch) -> F64:
        return np.full((len(batch), 1 << batch.size), 1.0 / (1 << batch.size))


class Scribbles(Honest):
    def propose(self, batch: ClusterBatch) -> Proposals:
        answer = super().propose(batch)
        batch.fields.flags.writeable = True
        batch.fields[:] = 0.0
        return answer


class Oversleeps(Honest):
    timeout: ClassVar[float] = 0.01

    def propose(self, batch: ClusterBatch) -> Proposals:
        if len(batch) == 1:
            time.sleep(0.2)
        return super().propose(batch)


BROKEN: list[tuple[Any, set[str], str]] = [
    (Raises(), {"answers"}, "RuntimeError: the fridge is warm"),
    (FailsWithoutASentence(), {"answers"}, "without a sentence"),
    (ForgetsTheShots(), {"shapes"}, r"int8 array \(B, m, k\)"),
    (ReturnsBits(), {"values"}, "other than"),
    (ForgetsItsSeed(), {"determinism", "rows alone", "equal parameters", "pickling"}, "asked twice"),
    (SharesAStream(), {"rows alone"}, "between a batch of 6 and the call alone"),
    (KnowsWhenItWasMade(), {"equal parameters"}, "made from the same parameters"),
    (HoldsASocket(), {"pickling"}, "cannot pickle a socket"),
    (TakesAnySize(), {"oversize"}, "answers 11 spins, its limit is 10"),
    (CountsTooLittle(), {"forecast"}, "forecasts 5 spin_updates .* counts 1"),
    (Honest(up=UP), {"symmetry"}, "the other way"),
    (HonestHit(up=UP), {"symmetry"}, "its law goes between two configurations"),
    (ForgetsTheRatio(up=UP, balance="ratio"), {"ratio"}, "the other way"),
    (TakesTheRatioUpsideDown(up=UP, balance="ratio"), {"ratio"}, "the other way"),
    (Honest(balance="ratio"), {"ratio"}, "reports no log_ratio"),
    (Boasts(), {"hit probability"}, "reports the hit probability 0.25"),
    (BoastsOfItsLaw(), {"hit probability"}, "noiseless hit probability"),
    (StatesAnotherLaw(up=UP, balance="none"), {"law"}, "its law has it with"),
    (Scribbles(), {"inputs untouched"}, "changed the fields"),
    (Oversleeps(), {"time-outs"}, "its timeout is 0.01 s"),
]

REGISTRY: list[tuple[str, dict[str, Any]]] = [
    *((name, {}) for name in subsolver_names() if name != "external"),
    ("external", {"command": [sys.executable, "-S", str(TEMPLATE)], "shots": 2}),
    ("walk", {"start": "incumbent", "time_in_hops": 1.0}),
    ("walk", {"shots": 3}),
    ("enumeration", {"draw": "boltzmann"}),
    ("elimination", {"draw": "boltzmann"}),
]


def by_name(verdicts: list[Verdict]) -> dict[str, Verdict]:
    return {verdict.promise: verdict for verdict in verdicts}


@pytest.mark.parametrize(
    ("name", "parameters"), REGISTRY, ids=[f"{name}{given or ''}"[:40] for name, given in REGISTRY]
)
def test_the_registry_keeps_every_promise(name: str, parameters: dict[str, Any]) -> None:
    verdicts = check(make_subsolver(name, **parameters))
    assert [verdict.promise for verdict in verdicts] == list(PROMISES)
    assert [verdict for verdict in verdicts if verdict.outcome in ("broken", "not checked")] == []


@pytest.mark.parametrize(
    ("stand_in", "kept"),
    [
        (Honest(), {"symmetry"}),
        (HonestRatio(up=UP, balance="ratio"), {"ratio"}),
        (HonestHit(), {"symmetry", "hit probability", "law"}),
        (HonestHit(up=UP, balance="none"), {"hit probability", "law"}),
    ],
)
def test_an_honest_stand_in_passes(stand_in: Any, kept: set[str]) -> None:
    """So that the broken ones below fail for the one thing that tells them apart."""
    verdicts = check(stand_in)
    assert {verdict.outcome for verdict in verdicts} <= {"kept", "not promised"}
    assert kept <= {verdict.promise for verdict in verdicts if verdict.outcome == "kept"}


def test_noisy_draws_are_not_held_against_the_noiseless_law() -> None:
    verdicts = by_name(check(NoisyBeyondItsLaw(balance="none")))
    assert "broken" not in {verdict.outcome for verdict in verdicts.values()}
    assert verdicts["law"].outcome == "not checked"
    assert "noisy" in verdicts["law"].sentence


@pytest.mark.parametrize(("stand_in", "promises", "words"), BROKEN, ids=[type(entry[0]).__name__ for entry in BROKEN])
def test_a_broken_backend_is_caught_by_name(stand_in: Any, promises: set[str], words: str) -> None:
    verdicts = by_name(check(stand_in))
    assert {promise for promise, verdict in verdicts.items() if verdict.outcome == "broken"} == promises
    first = next(verdict for verdict in verdicts.values() if verdict.outcome == "broken")
    assert re.search(words, first.sentence), first.sentence


def test_every_promise_has_a_backend_that_breaks_it() -> None:
    assert set().union(*(promises for _, promises, _ in BROKEN)) == set(PROMISES)


class Metered(HonestHit):
    """Counts the calls it is asked to answer."""

    spent: ClassVar[list[int]] = []

    def propose(self, batch: ClusterBatch) -> Proposals:
        self.spent.append(len(batch))
        return super().propose(batch)


@pytest.mark.parametrize("calls", [1, 10, 40, 100, 300, 400, 1500])
def test_a_check_costs_no_more_than_allowed(calls: int) -> None:
    Metered.spent.clear()
    verdicts = check(Metered(), calls=calls)
    assert sum(Metered.spent) <= calls
    unchecked = [verdict for verdict in verdicts if verdict.outcome == "not checked"]
    assert bool(unchecked) == (calls < 400)
    assert all("more calls" in verdict.sentence for verdict in unchecked)
    assert not [verdict for verdict in verdicts if verdict.outcome == "broken"]


def test_a_backend_that_cannot_get_ready_is_an_error_with_a_sentence() -> None:
    class Stillborn(Honest):
        def prepare(self, sample: ClusterBatch) -> Self:
            raise OSError("no licence")

    with pytest.raises(SubsolverError, match="could not get ready: OSError: no licence"):
        check(Stillborn())
    with pytest.raises(SubsolverError, match="did you mean 'walk'"):
        check("wolk")


def test_a_device_that_breaks_down_is_told_from_one_that_lies(tmp_path: Path) -> None:
    script = tmp_path / "device.py"
    script.write_text('print(\'{"protocol": 1, "name": "brief", "largest_cluster": 9}\', flush=True)\ninput()\n')
    verdicts = by_name(check(make_subsolver("external", command=[sys.executable, "-S", str(script)])))
    assert {promise for promise, verdict in verdicts.items() if verdict.outcome == "broken"} == {"answers"}
    assert "external: brief: ended, with exit code 0" in verdicts["answers"].sentence


@pytest.mark.parametrize(("hits", "trials", "p"), [(0, 9, 0.3), (9, 9, 0.3), (3, 9, 0.3), (5, 9, 0.5), (1, 9, 0.0)])
def test_the_binomial_test_is_exact(hits: int, trials: int, p: float) -> None:
    chances = [math.comb(trials, k) * p**k * (1 - p) ** (trials - k) for k in range(trials + 1)]
    expected = min(1.0, 2 * min(sum(chances[: hits + 1]), sum(chances[hits:])))
    assert chance_of(hits, trials, p) == pytest.approx(expected)


def test_nothing_tried_is_no_evidence() -> None:
    assert chance_of(0, 0, 0.5) == 1.0
    assert FALSE_ALARM <= 1e-6
