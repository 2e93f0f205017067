"""The whole contract between the pipeline and a subsolver, on one page.

A subsolver receives a :class:`ClusterBatch` (clusters of one size, each with its frozen boundary folded into the
fields) and answers with :class:`Proposals`. It never sees the big problem. Three promises make it swappable:

* row ``b`` of the result is a function of row ``b`` of the batch alone, to the last bit;
* a call that cannot be answered is a row with status ``FAILED`` and a sentence, never another method's answer;
* the pipeline recomputes every energy itself, so nothing a subsolver says about energies is trusted.

Energies follow ``E(s) = sum_i h_i s_i + sum_{i<j} J_ij s_i s_j`` with ``s_i`` in {+1, -1}, minimised. A configuration
of ``k`` spins is numbered by an integer whose bit ``i`` (least significant first) is 0 for +1 and 1 for -1.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from enum import IntEnum
from typing import Any, Literal, Protocol, Self, runtime_checkable

import numpy as np
import numpy.typing as npt

F64 = npt.NDArray[np.float64]
I8 = npt.NDArray[np.int8]
I32 = npt.NDArray[np.int32]
I64 = npt.NDArray[np.int64]
U8 = npt.NDArray[np.uint8]
U64 = npt.NDArray[np.uint64]

Balance = Literal["symmetric", "ratio", "none"]

DENSE_LIMIT = 64
"""Largest cluster whose couplings travel as a dense matrix; larger ones travel as edges."""


def _lock(array: npt.NDArray[Any]) -> None:
    array.flags.writeable = False


class _Locked:
    """A dataclass whose arrays are read-only, also after unpickling."""

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        for value in state.values():
            if isinstance(value, np.ndarray):
                _lock(value)

    def _settle(self, name: str, dtype: type[np.generic], shape: tuple[int, ...]) -> None:
        """Replace the field by a contiguous read-only array of this type, or say what is wrong with its shape."""
        given = getattr(self, name)
        array = np.ascontiguousarray(given, dtype=dtype)
        if array.shape != shape:
            raise ValueError(f"{type(self).__name__}: {name} has shape {array.shape}, expected {shape}")
        if array is given and array.flags.writeable:
            array = array.copy()
        _lock(array)
        object.__setattr__(self, name, array)


@dataclass(frozen=True, eq=False)
class Edges(_Locked):
    """Couplings of ``B`` sparse clusters, row after row.

    ``offsets`` i64 (B+1,) bounds each row's slice; ``pairs`` i32 (E, 2) holds local indices i < j, each pair once;
    ``weights`` f64 (E,).
    """

    offsets: I64
    pairs: I32
    weights: F64

    def __post_init__(self) -> None:
        total = len(self.weights)
        self._settle("offsets", np.int64, (len(self.offsets),))
        self._settle("pairs", np.int32, (total, 2))
        self._settle("weights", np.float64, (total,))
        if self.offsets[0] != 0 or self.offsets[-1] != total or np.any(np.diff(self.offsets) < 0):
            raise ValueError(f"Edges: offsets must rise from 0 to {total}, the number of pairs")

    def rows(self, start: int, stop: int) -> Edges:
        """The edges of rows ``start`` to ``stop`` alone."""
        first, last = self.offsets[start], self.offsets[stop]
        return Edges(
            offsets=self.offsets[start : stop + 1] - first,
            pairs=self.pairs[first:last],
            weights=self.weights[first:last],
        )


@dataclass(frozen=True, eq=False)
class ClusterBatch(_Locked):
    """``B`` clusters of one size ``k``; arrays are contiguous and read-only.

    ``fields`` f64 (B, k), the frozen boundary folded in; ``spins`` i8 (B, k), the incumbent configuration;
    ``temperature`` f64 (B,) in energy units, zero allowed; ``seeds`` u64 (B,), one per call. Couplings are either
    ``couplings`` f64 (B, k, k), symmetric with zero diagonal, up to ``k = 64``, or ``edges`` above.
    Raises ``ValueError`` naming the field whose shape or value is wrong.
    """

    fields: F64
    spins: I8
    temperature: F64
    seeds: U64
    couplings: F64 | None = None
    edges: Edges | None = None

    def __post_init__(self) -> None:
        shape = np.shape(self.fields)
        if len(shape) != 2 or shape[0] < 1 or shape[1] < 1:
            raise ValueError(f"ClusterBatch: fields has shape {shape}, expected (B, k) with B and k at least 1")
        rows, size = shape
        self._settle("fields", np.float64, (rows, size))
        self._settle("spins", np.int8, (rows, size))
        self._settle("temperature", np.float64, (rows,))
        self._settle("seeds", np.uint64, (rows,))
        if (self.couplings is None) == (self.edges is None):
            raise ValueError("ClusterBatch: give exactly one of couplings and edges")
        if self.couplings is not None:
            if size > DENSE_LIMIT:
                raise ValueError(
                    f"ClusterBatch: dense couplings stop at k = {DENSE_LIMIT}, these have {size} spins; give edges"
                )
            self._settle("couplings", np.float64, (rows, size, size))
        elif self.edges is not None and len(self.edges.offsets) != rows + 1:
            raise ValueError(f"ClusterBatch: edges holds {len(self.edges.offsets) - 1} rows, expected {rows}")

    def __len__(self) -> int:
        return len(self.fields)

    @property
    def size(self) -> int:
        """Spins per cluster, ``k``."""
        return int(self.fields.shape[1])

    def rows(self, start: int, stop: int) -> ClusterBatch:
        """Rows ``start`` to ``stop`` as a batch of their own."""
        if start == 0 and stop == len(self):
            return self
        return ClusterBatch(
            fields=self.fields[start:stop],
            spins=self.spins[start:stop],
            temperature=self.temperature[start:stop],
            seeds=self.seeds[start:stop],
            couplings=None if self.couplings is None else self.couplings[start:stop],
            edges=None if self.edges is None else self.edges.rows(start, stop),
        )


@dataclass(frozen=True, eq=False)
class Work:
    """Counted work per call: arrays (B,), or None where a quantity does not apply.

    ``evolution_time`` is simulated time summed over shots (units of 1/energy); the four ``*_s`` members are seconds
    that a device reports about itself.
    """

    shots: I64 | None = None
    evolution_time: F64 | None = None
    amplitude_updates: I64 | None = None
    spin_updates: I64 | None = None
    energies: I64 | None = None
    table_entries: I64 | None = None
    load_s: F64 | None = None
    evolve_s: F64 | None = None
    read_s: F64 | None = None
    wait_s: F64 | None = None


WORK_FIELDS = tuple(field.name for field in fields(Work))


@dataclass(frozen=True, eq=False)
class Forecast:
    """What a batch will need, said before anything is allocated: peak ``bytes`` and counted ``work`` per call."""

    bytes: int
    work: Work


class Status(IntEnum):
    """How a call ended."""

    OK = 0
    TRUNCATED = 1
    FAILED = 2


@dataclass(frozen=True, eq=False)
class Proposals:
    """A subsolver's answer to a batch of ``B`` clusters with ``m`` shots each.

    ``outcomes`` i8 (B, m, k), every shot; the pipeline takes the best by energies it recomputes, the first among
    ties. ``status`` u8 (B,) and ``messages``, a sentence for every call that is not ``OK``. The optional members are
    None for the whole batch or arrays in which nan marks a call that has none: ``log_ratio`` f64 (B,), the logarithm
    of q(s'->s) / q(s->s') for one shot; ``times`` f64 (B, m), the measuring times drawn; ``hit_probability`` f64 (B,),
    that one shot lands in any minimum, averaged over the measuring times; ``noiseless_hit``, the same without noise.
    """

    outcomes: I8
    work: Work
    status: U8
    messages: tuple[str, ...]
    log_ratio: F64 | None = None
    times: F64 | None = None
    hit_probability: F64 | None = None
    noiseless_hit: F64 | None = None


@runtime_checkable
class Subsolver(Protocol):
    """What the pipeline needs of a subsolver: a frozen bundle of parameters with three methods."""

    @property
    def name(self) -> str: ...

    @property
    def max_spins(self) -> int: ...

    @property
    def deterministic(self) -> bool:
        """Same batch, same bits."""
        ...

    @property
    def balance(self) -> Balance:
        """What its proposals promise when the Boltzmann law is sampled."""
        ...

    def prepare(self, sample: ClusterBatch) -> Self:
        """Compile and calibrate on sample clusters; returns the subsolver to use, once per k."""
        ...

    def forecast(self, batch: ClusterBatch) -> Forecast:
        """Bytes and counted work for this batch, before anything is allocated."""
        ...

    def propose(self, batch: ClusterBatch) -> Proposals:
        """Answer every cluster of the batch."""
        ...


def all_well(count: int) -> tuple[U8, tuple[str, ...]]:
    """Status and messages of ``count`` calls that went well."""
    return np.zeros(count, np.uint8), ("",) * count


def refuse_oversize(name: str, size: int, limit: int, reason: str) -> None:
    """Raise ``ValueError`` where a cluster is larger than a subsolver takes."""
    if size > limit:
        raise ValueError(
            f"{name}: a cluster has {size} spins, {reason} stops at {limit}; "
            "use smaller clusters (--cluster-size) or another subsolver."
        )
