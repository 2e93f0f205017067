"""Calling a subsolver: in slices of about a second, and so that whatever it does wrong becomes a failed row.

A batch is cut by the subsolver's own forecast at the fixed prices of :mod:`patchwalk.cost`. Rows are independent of
each other, so the cut changes no bit of any answer; it bounds how long a time limit or an interrupt has to wait. A
subsolver with a ``largest_batch``, such as a device that takes so many clusters at once, is asked one such batch at a
time. Whoever has a ``close`` is told when a run is over.

Slices may be carried out side by side (:mod:`patchwalk.workers`), but only by a subsolver that says it is
``concurrent``; whoever does not is asked here, one slice after the other.
"""

from __future__ import annotations

import collections
import time
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from patchwalk.cost import SLICE_SECONDS, priced
from patchwalk.subsolvers.complaints import shape_complaint, value_complaint
from patchwalk.subsolvers.contract import ClusterBatch, Forecast, Proposals, Status, Subsolver, Work
from patchwalk.subsolvers.registry import NotReadyError, SubsolverError
from patchwalk.workers import Serial, Workers


class Answered(NamedTuple):
    """One slice: where it begins in its batch, what was asked, what came back, and the seconds it took."""

    start: int
    batch: ClusterBatch
    proposals: Proposals
    seconds: float


SHARES = 2
"""A slice for several workers holds one part in so many of every worker's share of what is left of the batch: slices
grow shorter, so that there are few of them and yet none of the workers waits long for the others at the end."""

BAD_NEWS = (Exception, SystemExit)
"""What a stranger's code may raise without ending the run; an interrupt is none of it."""


def prepared(subsolver: Subsolver, sample: ClusterBatch) -> Subsolver:
    """The subsolver to use, compiled and calibrated.

    Raises :class:`NotReadyError` with a sentence where it fails to get ready.
    """
    try:
        ready = subsolver.prepare(sample)
    except (SubsolverError, MemoryError):
        raise
    except BAD_NEWS as error:
        raise NotReadyError(f"{subsolver.name}: could not get ready: {type(error).__name__}: {error}") from error
    if not isinstance(ready, Subsolver):
        raise NotReadyError(f"{subsolver.name}: prepare gave back a {type(ready).__name__}, which is no subsolver")
    return ready


def forecast_of(subsolver: Subsolver, batch: ClusterBatch) -> Forecast | None:
    """The subsolver's forecast, or None where it cannot give one."""
    try:
        return subsolver.forecast(batch)
    except BAD_NEWS:
        return None


def release(subsolver: Subsolver) -> None:
    """Let go of whatever the subsolver keeps running beside us."""
    close = getattr(subsolver, "close", None)
    if callable(close):
        close()


def answers(subsolver: Subsolver, batch: ClusterBatch, workers: Workers | None = None) -> Iterator[Answered]:
    """The batch slice by slice, in order; the caller may stop between slices."""
    if workers is None or not getattr(subsolver, "concurrent", False):
        workers = Serial()
    try:
        bounds = slice_bounds(subsolver, batch, workers)
    except BAD_NEWS as error:
        sentence = f"{subsolver.name}: its forecast failed: {type(error).__name__}: {error}"
        yield Answered(0, batch, failed(batch, sentence), 0.0)
        return
    if len(bounds) == 1:
        yield Answered(0, batch, *timed_answer((subsolver, batch)))
        return
    asked: collections.deque[tuple[int, ClusterBatch]] = collections.deque()

    def tasks() -> Iterator[tuple[Subsolver, ClusterBatch]]:
        for start, stop in bounds:  # one after the other, so that the first worker begins at once
            asked.append((start, batch.rows(start, stop)))
            yield subsolver, asked[-1][1]

    for proposals, seconds in workers.ordered(timed_answer, tasks()):
        yield Answered(*asked.popleft(), proposals, seconds)


def timed_answer(task: tuple[Subsolver, ClusterBatch]) -> tuple[Proposals, float]:
    """One slice asked and timed, wherever this is carried out."""
    began = time.perf_counter()
    proposals = ask(*task)
    return proposals, time.perf_counter() - began


def slice_bounds(subsolver: Subsolver, batch: ClusterBatch, workers: Workers | None = None) -> list[tuple[int, int]]:
    """Row ranges whose forecast price is at most a slice each, or one row; shorter, and ever shorter, where there are
    workers to share them.
    """
    rows = len(batch)
    if rows == 1:
        return [(0, 1)]
    prices = priced(subsolver.forecast(batch).work, rows)
    longest = getattr(subsolver, "largest_batch", rows)
    left = float(prices.sum())
    shared = workers is not None and workers.count > 1
    if left <= SLICE_SECONDS and rows <= longest and not shared:
        return [(0, rows)]

    def limit() -> float:
        if workers is None or not shared:
            return SLICE_SECONDS
        return min(SLICE_SECONDS, max(workers.smallest_task_seconds, left / (SHARES * workers.count)))

    bounds, start, spent, most = [], 0, 0.0, limit()
    for row, price in enumerate(prices.tolist()):
        if row > start and (spent + price > most or row - start >= longest):
            bounds.append((start, row))
            left -= spent
            start, spent, most = row, 0.0, limit()
        spent += price
    return [*bounds, (start, rows)]


def ask(subsolver: Subsolver, batch: ClusterBatch) -> Proposals:
    """The subsolver's proposals; an exception or an answer of the wrong shape becomes failed rows with a sentence."""
    try:
        proposals = subsolver.propose(batch)
    except BAD_NEWS as error:
        return failed(batch, f"{subsolver.name}: {type(error).__name__}: {error}")
    complaint = shape_complaint(proposals, batch) or value_complaint(proposals)
    return failed(batch, f"{subsolver.name}: {complaint}") if complaint else proposals


def failed(batch: ClusterBatch, sentence: str) -> Proposals:
    """Proposals that leave every cluster as it was, because of ``sentence``."""
    rows = len(batch)
    return Proposals(
        outcomes=batch.spins[:, None, :].copy(),  # writable, as answers are: kernels are compiled for one kind
        work=Work(),
        status=np.full(rows, Status.FAILED, np.uint8),
        messages=(sentence,) * rows,
    )
