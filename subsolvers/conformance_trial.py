"""A backend on trial: the clusters it is tried on, the calls it may cost, and the tests that statistics rest on."""

from __future__ import annotations

import dataclasses
import pickle
import time
from functools import cached_property
from typing import Any, NamedTuple, cast

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.complaints import shape_complaint, value_complaint
from patchwalk.subsolvers.contract import (
    DENSE_LIMIT,
    F64,
    WORK_FIELDS,
    ClusterBatch,
    Edges,
    Proposals,
    Status,
    Subsolver,
    Work,
)
from patchwalk.subsolvers.draws import generator_for

FALSE_ALARM = 1e-6
"""How likely a statistical check is, at most, to call an honest backend broken."""

BALANCE_SPINS = 3
MOST_DRAWS, FEWEST_DRAWS = 1024, 128
NO_ANSWER = "there was no answer of the right shape and values to look at"
COMPARED = ("outcomes", "status", "messages", "log_ratio", "times", "hit_probability", "noiseless_hit")
COUNTED = tuple(name for name in WORK_FIELDS if not name.endswith("_s"))
"""Work that is counted, and so the same every time; seconds are measured, and never compared."""


class BrokenError(Exception):
    """A promise that was not kept; the message says how."""


class NotPromisedError(Exception):
    """A promise that this backend does not make."""


class NotCheckedError(Exception):
    """A promise that could not be looked at, for want of calls or of answers."""


class Draws(NamedTuple):
    """Many calls on one small cluster from each of its configurations.

    ``starts`` and ``ends`` i64 (N,) are the numbers of the configurations before and after.
    """

    cluster: ClusterBatch
    answer: Proposals
    starts: npt.NDArray[np.int64]
    ends: npt.NDArray[np.int64]


class Trial:
    """Every question goes through :meth:`ask`, which counts calls and sees whether the inputs stay as they are."""

    def __init__(self, made: Subsolver, calls: int, size: int) -> None:
        self.made, self.left = made, calls
        self.slowest = 0.0
        self.touched: set[str] = set()
        self._ready: dict[int, Subsolver] = {}
        self._ready_for(glass(1, 1))
        self.size = max(1, min(size, self.subsolver.max_spins))

    @property
    def subsolver(self) -> Subsolver:
        """The backend as it was last prepared."""
        return next(iter(self._ready.values()))

    def ask(self, batch: ClusterBatch, subsolver: Subsolver | None = None) -> Proposals:
        """The answer to a batch where every call went well and everything has the right shape and good values.

        Raises :class:`NotCheckedError` where too few calls are left or the answer is of no use, about which the
        promises on answers, shapes and values say more.
        """
        try:
            answer = self.raw(batch, subsolver)
        except NotCheckedError:
            raise
        except Exception as error:
            raise NotCheckedError(f"the call raised {type(error).__name__}: {error}") from error
        if shape_complaint(answer, batch) or value_complaint(answer):
            raise NotCheckedError(NO_ANSWER)
        if lost := int(np.sum(answer.status == Status.FAILED)):
            raise NotCheckedError(f"{lost} of {len(batch)} calls failed")
        return answer

    def raw(self, batch: ClusterBatch, subsolver: Subsolver | None = None) -> Proposals:
        """The answer to a copy of the batch, whatever it is."""
        backend = self._ready_for(batch) if subsolver is None else subsolver
        self.spend(len(batch))
        given = pickle.loads(pickle.dumps(batch))
        began = time.perf_counter()
        answer = backend.propose(given)
        self.slowest = max(self.slowest, (time.perf_counter() - began) / len(batch))
        self.touched |= changed(batch, given)
        return answer

    @cached_property
    def samples(self) -> list[tuple[ClusterBatch, Proposals]]:
        """Four clusters each of one spin, of a few, and of the size asked for, with the answers as they came.

        An exception stands where it was raised in place of an answer.
        """
        answers = []
        sizes = sorted({1, min(BALANCE_SPINS, self.size), self.size})
        self.require(5 * len(sizes))
        for size in sizes:
            batch = glass(4, size)
            try:
                answers.append((batch, self.raw(batch)))
            except Exception as error:
                answers.append((batch, cast(Proposals, error)))
        return answers

    @cached_property
    def good_samples(self) -> list[tuple[ClusterBatch, Proposals]]:
        """The same; raises :class:`NotCheckedError` unless all are answers of the right shape."""
        if any(shape_complaint(answer, batch) for batch, answer in self.samples):
            raise NotCheckedError(NO_ANSWER)
        return self.samples

    @cached_property
    def draws(self) -> Draws:
        """Calls from every configuration of one small cluster, in equal numbers, as many as can be afforded."""
        size = min(BALANCE_SPINS, self.size)
        states = 1 << size
        each = min(MOST_DRAWS, self.left - 1) // states
        self.require(FEWEST_DRAWS + 1)
        starts = np.repeat(np.arange(states), each)
        cluster = repeated(glass(1, size, seed=7), len(starts), configurations(size)[starts])
        answer = self.ask(cluster)
        return Draws(cluster, answer, starts, numbers(answer.outcomes[:, 0]))

    def prepare(self, subsolver: Subsolver, batch: ClusterBatch) -> Subsolver:
        """The backend prepared on the first cluster of a batch, which counts as a call."""
        self.spend(1)
        return subsolver.prepare(batch.rows(0, 1))

    def require(self, calls: int) -> None:
        """Raise :class:`NotCheckedError` where so many calls are not left."""
        if calls > self.left:
            raise NotCheckedError(f"needs {calls} more calls, {self.left} are left; allow more (--calls)")

    def spend(self, calls: int) -> None:
        """Count calls; raises :class:`NotCheckedError` where so many are not left."""
        self.require(calls)
        self.left -= calls

    def _ready_for(self, batch: ClusterBatch) -> Subsolver:
        """The backend prepared for clusters of this size; what was prepared before is let go."""
        if batch.size not in self._ready:
            self._ready = {batch.size: self.prepare(self.made, batch)}
        return self._ready[batch.size]


def glass(rows: int, size: int, seed: int = 1) -> ClusterBatch:
    """Random clusters with Gaussian couplings and fields, the same ones every time; rings above the dense limit."""
    random = generator_for(seed, rows, size)
    couplings, edges = None, None
    if size <= DENSE_LIMIT:
        upper = np.triu(random.normal(size=(rows, size, size)), 1)
        couplings = upper + upper.transpose(0, 2, 1)
    else:
        ring = np.sort(np.stack([np.arange(size), np.roll(np.arange(size), -1)], axis=1), axis=1)
        edges = Edges(np.arange(rows + 1) * size, np.tile(ring, (rows, 1)), random.normal(size=rows * size))
    return ClusterBatch(
        fields=random.normal(size=(rows, size)),
        spins=random.choice(np.array([-1, 1], np.int8), size=(rows, size)),
        temperature=np.full(rows, 1.5),
        seeds=random.integers(0, 2**63, rows, dtype=np.uint64),
        couplings=couplings,
        edges=edges,
    )


def repeated(one: ClusterBatch, count: int, spins: npt.NDArray[np.int8] | None = None) -> ClusterBatch:
    """A dense cluster ``count`` times over, each with a seed of its own, from ``spins`` i8 (count, k) if given."""
    assert one.couplings is not None
    return ClusterBatch(
        fields=np.repeat(one.fields, count, axis=0),
        spins=np.repeat(one.spins, count, axis=0) if spins is None else spins,
        temperature=np.repeat(one.temperature, count),
        seeds=generator_for(int(one.seeds[0]), count).integers(0, 2**63, count, dtype=np.uint64),
        couplings=np.repeat(one.couplings, count, axis=0),
    )


def picked(batch: ClusterBatch, order: npt.NDArray[np.int64]) -> ClusterBatch:
    """The rows of a batch in another order."""
    parts = [batch.rows(row, row + 1) for row in order.tolist()]
    plain: dict[str, Any] = {name: np.concatenate([getattr(part, name) for part in parts])
             for name in ("fields", "spins", "temperature", "seeds")}  # fmt: skip
    if batch.couplings is not None:
        return ClusterBatch(**plain, couplings=batch.couplings[order])
    own = [part.edges for part in parts if part.edges is not None]
    return ClusterBatch(
        **plain,
        edges=Edges(
            np.concatenate([[0], np.cumsum([len(edges.weights) for edges in own])]),
            np.concatenate([edges.pairs for edges in own]),
            np.concatenate([edges.weights for edges in own]),
        ),
    )


def configurations(size: int) -> npt.NDArray[np.int8]:
    """All configurations by number: i8 (2^k, k)."""
    return (1 - 2 * (np.arange(1 << size)[:, None] >> np.arange(size) & 1)).astype(np.int8)


def numbers(spins: npt.NDArray[np.int8]) -> npt.NDArray[np.int64]:
    """The numbers (N,) of configurations given as spins (N, k)."""
    return (spins < 0) @ (1 << np.arange(spins.shape[1], dtype=np.int64))


def changed(batch: ClusterBatch, given: ClusterBatch) -> set[str]:
    """The names of the arrays in which two batches differ."""
    different = set()
    for field in dataclasses.fields(batch):
        one, other = getattr(batch, field.name), getattr(given, field.name)
        if field.name == "edges" and one is not None:
            one, other = one.weights, other.weights
        if one is not None and one.tobytes() != other.tobytes():
            different.add(field.name)
    return different


def first_difference(one: Proposals, other: Proposals, order: npt.NDArray[np.int64] | None = None) -> str:
    """The name of the first member in which two answers differ by a bit, or nothing.

    ``order`` says which row of the first stands in which place of the second.
    """
    pairs = [(name, getattr(one, name), getattr(other, name)) for name in COMPARED]
    pairs += [(f"work.{name}", getattr(one.work, name), getattr(other.work, name)) for name in COUNTED]
    for name, left, right in pairs:
        if (left is None) != (right is None):
            return name
        if left is None:
            continue
        left, right = np.asarray(left), np.asarray(right)
        left = left if order is None else left[order]
        if left.dtype != right.dtype or left.tobytes() != right.tobytes():
            return name
    return ""


def close(subsolver: Subsolver) -> None:
    """Let go of whatever a backend keeps running."""
    let_go = getattr(subsolver, "close", None)
    if callable(let_go):
        let_go()


def joined(parts: list[Proposals]) -> Proposals:
    """Answers to single clusters put together again."""

    def join(owners: list[Proposals] | list[Work], name: str) -> F64 | None:
        columns = [getattr(owner, name) for owner in owners]
        return None if any(column is None for column in columns) else np.concatenate(columns)

    arrays = {name: join(parts, name) for name in COMPARED if name != "messages"}
    work = Work(**{name: join([part.work for part in parts], name) for name in WORK_FIELDS})  # type: ignore[arg-type]
    messages = tuple(message for part in parts for message in part.messages)
    return Proposals(**arrays, work=work, messages=messages)  # type: ignore[arg-type]


def chance_of(hits: int, trials: int, probability: float) -> float:
    """How likely so many hits, or a number as far out on its side, are at this probability: exact, two-sided."""
    from scipy.special import bdtr, bdtrc

    p = min(1.0, max(0.0, probability))
    below = float(bdtr(hits, trials, p))
    above = 1.0 if hits == 0 else float(bdtrc(hits - 1, trials, p))
    return min(1.0, 2 * min(below, above))
