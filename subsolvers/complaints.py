"""What is wrong with an answer, in words: the one place that holds a backend's arrays against the contract.

The pipeline turns a complaint into failed calls; the conformance check turns it into a broken promise.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I8, WORK_FIELDS, ClusterBatch, Proposals, Status, Work

PROBABILITIES = ("hit_probability", "noiseless_hit")
OPTIONAL_MEMBERS = ("log_ratio", "times", *PROBABILITIES)
WORK_MEMBERS = tuple((f"work.{name}", name) for name in WORK_FIELDS)
LAST_STATUS = int(max(Status))


def shape_complaint(proposals: object, batch: ClusterBatch) -> str:
    """What is wrong with the kinds and shapes of what came back, or nothing."""
    if not isinstance(proposals, Proposals):
        return f"propose gave back a {type(proposals).__name__}, expected Proposals"
    outcomes, rows = proposals.outcomes, len(batch)
    if not isinstance(outcomes, np.ndarray) or outcomes.dtype != np.int8 or outcomes.ndim != 3:
        return "outcomes must be an int8 array (B, m, k)"
    if outcomes.shape[0] != rows or outcomes.shape[1] < 1 or outcomes.shape[2] != batch.size:
        return f"outcomes has shape {outcomes.shape}, expected ({rows}, shots, {batch.size})"
    status, messages = proposals.status, proposals.messages
    if np.shape(status) != (rows,) or not isinstance(messages, tuple) or len(messages) != rows:
        return f"status and messages must have {rows} entries, one per call"
    if not isinstance(status, np.ndarray) or status.dtype != np.uint8:
        return "status must be a uint8 array"
    if any(not issubclass(kind, str) for kind in set(map(type, messages))):
        return "messages must be texts"
    if not isinstance(proposals.work, Work):
        return f"work is a {type(proposals.work).__name__}, expected Work"
    for name, values in _extras(proposals):
        shape = outcomes.shape[:2] if name == "times" else (rows,)
        if not isinstance(values, np.ndarray) or values.dtype.kind not in "iuf" or values.shape != shape:
            return f"{name} must be an array of shape {shape} that holds numbers"
    return ""


def value_complaint(proposals: Proposals) -> str:
    """What is wrong with the numbers in an answer of the right shape, or nothing; nan marks a call that has none."""
    if not _are_spins(proposals.outcomes):
        return "outcomes holds numbers other than +1 and -1"
    if proposals.status.max() > LAST_STATUS:
        return f"status holds {proposals.status.max()}, it is 0, 1 or 2"
    for name, values in _extras(proposals):
        if name == "log_ratio":
            continue
        if np.fmin.reduce(values, axis=None) < 0:
            return f"{name} holds a negative number"
        if name in PROBABILITIES and np.fmax.reduce(values) > 1 + 1e-6:
            return f"{name} holds a probability above 1"
    return ""


@compiled
def _are_spins(outcomes: I8) -> bool:
    for row in range(outcomes.shape[0]):
        for shot in range(outcomes.shape[1]):
            for spin in outcomes[row, shot]:
                if spin != 1 and spin != -1:
                    return False
    return True


def _extras(proposals: Proposals) -> list[tuple[str, Any]]:
    """The optional members and the counted work that are there, each under its name."""
    extras = [(name, values) for name in OPTIONAL_MEMBERS if (values := getattr(proposals, name)) is not None]
    work = proposals.work
    extras += [(key, values) for key, name in WORK_MEMBERS if (values := getattr(work, name)) is not None]
    return extras
