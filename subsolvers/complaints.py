"""What is wrong with an answer, in words: the one place that holds a backend's arrays against the contract.

The pipeline turns a complaint into failed calls; the conformance check turns it into a broken promise.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from patchwalk.subsolvers.contract import WORK_FIELDS, ClusterBatch, Proposals, Status, Work

PER_CALL = ("log_ratio", "hit_probability", "noiseless_hit")
WORK_MEMBERS = tuple((f"work.{name}", name) for name in WORK_FIELDS)
LAST_STATUS = max(Status)


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
    for name, (values, shape) in _extras(proposals).items():
        if values is None:
            continue
        if not isinstance(values, np.ndarray) or values.dtype.kind not in "iuf" or values.shape != shape:
            return f"{name} must be an array of shape {shape} that holds numbers"
    return ""


def value_complaint(proposals: Proposals) -> str:
    """What is wrong with the numbers in an answer of the right shape, or nothing; nan marks a call that has none."""
    if not np.all(np.abs(proposals.outcomes) == 1):
        return "outcomes holds numbers other than +1 and -1"
    if proposals.status.max() > LAST_STATUS:
        return f"status holds {proposals.status.max()}, it is 0, 1 or 2"
    for name, (values, _) in _extras(proposals).items():
        if values is None or name == "log_ratio":
            continue
        if np.any(np.less(values, 0)):
            return f"{name} holds a negative number"
        if name in PER_CALL and np.any(np.greater(values, 1 + 1e-6)):
            return f"{name} holds a probability above 1"
    return ""


def _extras(proposals: Proposals) -> dict[str, tuple[Any, tuple[int, ...]]]:
    """The optional members and the counted work, each with the shape that it must have."""
    rows, shots, _ = proposals.outcomes.shape
    extras: dict[str, tuple[Any, tuple[int, ...]]] = {name: (getattr(proposals, name), (rows,)) for name in PER_CALL}
    extras["times"] = (proposals.times, (rows, shots))
    return extras | {key: (getattr(proposals.work, name), (rows,)) for key, name in WORK_MEMBERS}
