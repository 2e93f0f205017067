"""One subsolver on instances of one size: success per shot, exact where it is known, and counted work per shot."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from patchwalk.clusters.landscape import surveys
from patchwalk.cost import priced
from patchwalk.engine import answers, prepared
from patchwalk.evidence.scaling_rows import ScalingRow
from patchwalk.subsolvers.contract import F64, ClusterBatch, Proposals, Status, Subsolver
from patchwalk.subsolvers.spectrum import tie_tolerance
from patchwalk.workers import Workers

FACTORS = (0.35, 0.5, 0.7, 1.0, 1.4, 2.0, 2.8, 4.0)
"""Times that are tried when they are tuned, in multiples of those given."""

LONG = 4.0
"""Measuring times from some to more than so many times as much are an average over times, with nothing to tune."""


def measured_rows(
    subsolver: Subsolver, spelling: str, batch: ClusterBatch, origins: Sequence[str], numbers: Sequence[int],
    size: int, shots: int, workers: Workers,
) -> Iterator[ScalingRow]:  # fmt: skip
    """A row for each instance of the batch; ``numbers`` name them, ``shots`` are drawn where nothing exact is known."""
    ready = prepared(subsolver, batch.rows(0, min(8, len(batch))))
    first = ready.propose(batch.rows(0, 1))
    if first.hit_probability is None and getattr(ready, "shots", shots) < shots:
        ready = prepared(dataclasses.replace(ready, shots=shots), batch.rows(0, 1))  # type: ignore[type-var]
    known = surveys(batch)
    lowest = energies_of(batch, batch.spins[:, None, :])[:, 0] - known["excess"]
    for answered in answers(ready, batch, workers):
        for row in range(len(answered.batch)):
            place = answered.start + row
            success, exact = _success(answered.batch, answered.proposals, row, lowest[place])
            yield _row(
                answered.proposals, row, size=size, instance=numbers[place], subsolver=spelling, origin=origins[place],
                success=success, exact=exact, guess=float(known["degeneracy"][place]) / 2.0**batch.size,
            )  # fmt: skip


def _row(proposals: Proposals, row: int, **known: Any) -> ScalingRow:
    rows, shots = proposals.outcomes.shape[:2]

    def counted(name: str) -> float:
        count = getattr(proposals.work, name)
        return float("nan") if count is None else float(count[row]) / shots

    return ScalingRow(
        **known,
        shots=shots,
        seconds_priced=float(priced(proposals.work, rows)[row]) / shots,
        amplitude_updates=counted("amplitude_updates"),
        spin_updates=counted("spin_updates"),
        energies=counted("energies"),
        table_entries=counted("table_entries"),
        status=int(proposals.status[row]),
        message=proposals.messages[row],
    )


def _success(batch: ClusterBatch, proposals: Proposals, row: int, lowest: float) -> tuple[float, bool]:
    """The chance that one shot is a minimum, and whether it is exact; nan for a call that failed."""
    if proposals.status[row] == Status.FAILED:
        return float("nan"), False
    if proposals.hit_probability is not None and not np.isnan(proposals.hit_probability[row]):
        return min(1.0, float(proposals.hit_probability[row])), True
    assert batch.couplings is not None
    energies = energies_of(batch.rows(row, row + 1), proposals.outcomes[row : row + 1])[0]
    tolerance = 2.0 * tie_tolerance(batch.fields[row], batch.couplings[row])  # sums are taken in another order
    return float(np.mean(energies <= lowest + tolerance)), False


def energies_of(batch: ClusterBatch, outcomes: np.typing.NDArray[np.int8]) -> F64:
    """Energies f64 (B, m) of configurations i8 (B, m, k) of the batch's clusters."""
    assert batch.couplings is not None
    spins = outcomes.astype(np.float64)
    pulls = 0.5 * np.einsum("bij,bmj->bmi", batch.couplings, spins) + batch.fields[:, None, :]
    return np.einsum("bmi,bmi->bm", pulls, spins)


def timed_variants(subsolver: Subsolver) -> list[Subsolver]:
    """The subsolver with its time multiplied by each of ``FACTORS``; empty for one that has none to tune.

    An interval that is long on purpose is an average, and stays as it is.
    """
    if getattr(subsolver, "time", None) is not None or getattr(subsolver, "duration", None) is not None:
        return []
    if hasattr(subsolver, "time_in_hops"):
        ends = np.atleast_1d(subsolver.time_in_hops)
        if ends[-1] > LONG * ends[0]:
            return []
        return [_with(subsolver, time_in_hops=[_round(factor * end) for end in ends]) for factor in FACTORS]
    if hasattr(subsolver, "duration_in_hops") and getattr(subsolver, "_table", None) is None:
        hops = subsolver.duration_in_hops or getattr(subsolver, "default_in_hops", 1.0)
        return [_with(subsolver, duration_in_hops=_round(factor * hops)) for factor in FACTORS]
    return []


def _with(subsolver: Subsolver, **changed: Any) -> Subsolver:
    made: Subsolver = dataclasses.replace(subsolver, **changed)  # type: ignore[type-var]
    return made


def _round(value: float) -> float:
    return float(f"{value:.6g}")
