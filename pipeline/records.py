"""What the search tells about itself, round by round: plain values that anything downstream may store or show."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.contract import F64, I8, I32, I64, ClusterBatch, Proposals


@dataclass(frozen=True, eq=False)
class Calls:
    """One slice of cluster calls and what became of them, ``B`` rows.

    ``members`` i32 (B, k), the spins of each cluster; ``batch`` and ``proposals``, question and answer; ``chosen``
    i64 (B,), the shot taken; ``change`` f64 (B,), its energy change; ``accepted`` bool (B,); ``energy_before`` f64
    (B,), of the whole problem; ``first_index``, place of the first row within its round; ``seconds``, measured, for
    the whole slice.
    """

    members: I32
    batch: ClusterBatch
    proposals: Proposals
    chosen: I64
    change: F64
    accepted: npt.NDArray[np.bool_]
    energy_before: F64
    first_index: int
    seconds: float

    def __len__(self) -> int:
        return len(self.change)


@dataclass(frozen=True, eq=False)
class Round:
    """One round: cluster calls, then sweeps. ``stage`` is the fraction of the budget spent when it began."""

    number: int
    stage: float
    temperature: float
    calls: tuple[Calls, ...]
    energy: float
    improvements: tuple[Improvement, ...]


@dataclass(frozen=True)
class Improvement:
    """A new best energy, who found it (``start``, ``clusters``, ``sweeps`` or ``descent``) and after how much work."""

    energy: float
    finder: str
    round: int
    calls: int
    sweeps: int
    seconds: float


@dataclass(frozen=True, eq=False)
class Snapshot:
    """The state between two rounds, enough to go on from: spins and local fields bit for bit."""

    round: int
    calls: int
    sweeps: int
    energy: float
    spins: I8
    local_fields: F64
    best_energy: float
    best_spins: I8
