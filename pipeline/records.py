"""What the search tells about itself, round by round: plain values that anything downstream may store or show."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.contract import F64, I8, I32, I64, ClusterBatch, Proposals, Subsolver


@dataclass(frozen=True, eq=False)
class Calls:
    """One slice of cluster calls and what became of them, ``B`` rows.

    ``members`` i32 (B, k), the spins of each cluster; ``replicas`` i64 (B,), whose configuration it was cut from;
    ``places`` i64 (B,), its place within the replica's round; ``rule``, which rule picked it; ``subsolver``, who was
    asked; ``batch`` and ``proposals``, question and answer; ``chosen`` i64 (B,), the shot taken; ``change`` f64 (B,),
    its energy change; ``accepted`` bool (B,); ``energy_before`` f64 (B,), of the replica's whole configuration;
    ``seconds``, measured, for the whole slice.
    """

    members: I32
    replicas: I64
    places: I64
    rule: str
    subsolver: Subsolver
    batch: ClusterBatch
    proposals: Proposals
    chosen: I64
    change: F64
    accepted: npt.NDArray[np.bool_]
    energy_before: F64
    seconds: float

    def __len__(self) -> int:
        return len(self.change)


@dataclass(frozen=True, eq=False)
class Round:
    """One round: cluster calls, then sweeps.

    ``stage`` is the fraction of the budget spent when it began; ``temperatures`` and ``energies`` f64 (R,) belong to
    the replicas, the energies when it was over; ``whole`` says whether it was carried out to its end.
    """

    number: int
    stage: float
    temperatures: F64
    calls: tuple[Calls, ...]
    energies: F64
    improvements: tuple[Improvement, ...]
    whole: bool = True


@dataclass(frozen=True)
class Improvement:
    """A new best energy, who found it (``start``, ``clusters``, ``sweeps``, ``descent`` or ``bound``) and after how
    much work."""

    energy: float
    finder: str
    round: int
    calls: int
    sweeps: int
    seconds: float


@dataclass(frozen=True, eq=False)
class Snapshot:
    """The state between two rounds, all that is needed to go on from: spins and local fields bit for bit.

    ``spins`` i8 (R, n), ``local_fields`` f64 (R, n) and ``energies`` f64 (R,) of the replicas; ``best_spins`` i8 (n,);
    ``elites`` i8 (E, n), good distinct configurations; ``counts`` i64 (n,), how often each spin was in a call;
    ``details``, plain values (numbers, texts, lists of them) of everything else that decides.
    """

    round: int
    calls: int
    sweeps: int
    seconds: float
    spins: I8
    local_fields: F64
    energies: F64
    best_energy: float
    best_spins: I8
    elites: I8
    counts: I64
    details: Mapping[str, Any] = field(default_factory=dict)
