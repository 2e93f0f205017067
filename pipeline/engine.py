"""Calling a subsolver: in slices of about a second, and so that whatever it does wrong becomes a failed row.

A batch is cut by the subsolver's own forecast at the fixed prices of :mod:`patchwalk.cost`. Rows are independent of
each other, so the cut changes no bit of any answer; it bounds how long a time limit or an interrupt has to wait.
"""

from __future__ import annotations

import time
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from patchwalk.cost import SLICE_SECONDS, priced
from patchwalk.subsolvers.contract import ClusterBatch, Proposals, Status, Subsolver, Work


class Answered(NamedTuple):
    """One slice: where it begins in its batch, what was asked, what came back, and the seconds it took."""

    start: int
    batch: ClusterBatch
    proposals: Proposals
    seconds: float


def answers(subsolver: Subsolver, batch: ClusterBatch) -> Iterator[Answered]:
    """The batch slice by slice; the caller may stop between slices."""
    for start, stop in slice_bounds(subsolver, batch):
        part = batch.rows(start, stop)
        began = time.perf_counter()
        proposals = ask(subsolver, part)
        yield Answered(start, part, proposals, time.perf_counter() - began)


def slice_bounds(subsolver: Subsolver, batch: ClusterBatch) -> list[tuple[int, int]]:
    """Row ranges whose forecast price is at most a slice each, or one row."""
    rows = len(batch)
    if rows == 1:
        return [(0, 1)]
    prices = priced(subsolver.forecast(batch).work, rows)
    if prices.sum() <= SLICE_SECONDS:
        return [(0, rows)]
    bounds, start, spent = [], 0, 0.0
    for row, price in enumerate(prices):
        if row > start and spent + price > SLICE_SECONDS:
            bounds.append((start, row))
            start, spent = row, 0.0
        spent += price
    return [*bounds, (start, rows)]


def ask(subsolver: Subsolver, batch: ClusterBatch) -> Proposals:
    """The subsolver's proposals; an exception or an answer of the wrong shape becomes failed rows with a sentence."""
    try:
        proposals = subsolver.propose(batch)
    except Exception as error:
        return failed(batch, f"{subsolver.name}: {type(error).__name__}: {error}")
    complaint = _complaint(proposals, batch)
    return failed(batch, f"{subsolver.name}: {complaint}") if complaint else proposals


def failed(batch: ClusterBatch, sentence: str) -> Proposals:
    """Proposals that leave every cluster as it was, because of ``sentence``."""
    rows = len(batch)
    return Proposals(
        outcomes=batch.spins[:, None, :],
        work=Work(),
        status=np.full(rows, Status.FAILED, np.uint8),
        messages=(sentence,) * rows,
    )


def _complaint(proposals: Proposals, batch: ClusterBatch) -> str:
    """What is wrong with the answer, or nothing."""
    outcomes, rows = proposals.outcomes, len(batch)
    if not isinstance(outcomes, np.ndarray) or outcomes.dtype != np.int8 or outcomes.ndim != 3:
        return "outcomes must be an int8 array (B, m, k)"
    if outcomes.shape[0] != rows or outcomes.shape[1] < 1 or outcomes.shape[2] != batch.size:
        return f"outcomes has shape {outcomes.shape}, expected ({rows}, shots, {batch.size})"
    if not np.all(np.abs(outcomes) == 1):
        return "outcomes holds numbers other than +1 and -1"
    if np.shape(proposals.status) != (rows,) or len(proposals.messages) != rows:
        return f"status and messages must have {rows} entries, one per call"
    return ""
