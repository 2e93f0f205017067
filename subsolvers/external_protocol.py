"""What travels between us and an external program, line by line; DEVELOPERS.md describes the same for its authors.

The program introduces itself, we ask about a few clusters at a time, it answers with every shot. Nothing of an answer
is taken on trust: whatever breaks the protocol raises :class:`DeviceError` with a sentence.
"""

from __future__ import annotations

import difflib
import math
from dataclasses import dataclass, fields
from typing import Any, NamedTuple

import numpy as np

from patchwalk.subsolvers.contract import F64, I8, I64, ClusterBatch
from patchwalk.subsolvers.external_process import DeviceError
from patchwalk.subsolvers.spectrum import TIE_SHARE

PROTOCOL = 1
TIME_NAMES = ("load_s", "evolve_s", "read_s", "wait_s")


@dataclass(frozen=True)
class Hello:
    """How a program introduces itself.

    ``largest_cluster`` in spins and ``largest_batch`` in clusters per line; ``deterministic``: same line, same
    answer. ``coupling_range`` and ``field_range``: the largest sizes it takes (the second is the first where it is
    left out), None for any; ``precision_bits``: in how many bits, sign included, None for all that a number holds.
    ``call_s``: about how many seconds a cluster takes it.
    """

    name: str
    largest_cluster: int
    largest_batch: int = 1
    deterministic: bool = False
    coupling_range: float | None = None
    field_range: float | None = None
    precision_bits: int | None = None
    call_s: float = 0.01

    def __post_init__(self) -> None:
        self._demand("name", _named(self.name), "1 to 80 printable letters")
        for name in ("largest_cluster", "largest_batch"):
            self._demand(name, _whole(getattr(self, name)) and getattr(self, name) >= 1, "a whole number, 1 or more")
        self._demand("deterministic", isinstance(self.deterministic, bool), "true or false")
        for name in ("coupling_range", "field_range"):
            value = getattr(self, name)
            self._demand(name, value is None or (_number(value) and value > 0), "a positive number, or left out")
        bits = self.precision_bits
        self._demand("precision_bits", bits is None or (_whole(bits) and 2 <= bits <= 52), "from 2 to 52, or left out")
        self._demand("precision_bits", bits is None or self.coupling_range is not None, "together with coupling_range")
        self._demand("field_range", self.field_range is None or self.coupling_range is not None,
                     "together with coupling_range")  # fmt: skip
        self._demand("call_s", _number(self.call_s) and self.call_s >= 0, "seconds, 0 or more")

    def _demand(self, name: str, satisfied: bool, wanted: str) -> None:
        if not satisfied:
            raise DeviceError(f"its hello says {name} {str(getattr(self, name))[:40]!r}; it must be {wanted}")

    @classmethod
    def read(cls, line: dict[str, Any]) -> Hello:
        """The hello in a program's first line; raises :class:`DeviceError` naming what is wrong with it."""
        said = dict(line)
        version = said.pop("protocol", None)
        if not _whole(version) or version != PROTOCOL:
            raise DeviceError(f"speaks protocol {str(version)[:40]}, this is protocol {PROTOCOL}")
        known = [field.name for field in fields(cls)]
        for key in said:
            if key not in known:
                close = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
                raise DeviceError(f"its hello says {key[:40]!r}{f'; {close[0]!r} was meant?' if close else ''}")
        for key in ("name", "largest_cluster"):
            if key not in said:
                raise DeviceError(f"its hello does not say {key}")
        return cls(**said)


class Question(NamedTuple):
    """One cluster as it travels, with a sentence about what rounding lost, empty where nothing was lost."""

    fields: list[float]
    couplings: list[tuple[int, int, float]]
    spins: list[int]
    temperature: float
    seed: str
    lost: str


def question(
    batch: ClusterBatch, row: int, coupling_range: float | None, field_range: float | None, bits: int | None
) -> Question:
    """Row ``row`` of a batch, scaled into the stated ranges and rounded to the stated precision.

    Fields, couplings and temperature are divided by one number, so that the cluster stays the same problem in another
    unit. It fills the range whether the cluster is stronger or weaker.
    """
    first, second, weights = _pairs(batch, row)
    own = batch.fields[row]
    unit = 1.0
    if coupling_range is not None:
        strongest = (
            np.abs(weights).max(initial=0.0) / coupling_range,
            np.abs(own).max() / (field_range or coupling_range),
        )
        unit = float(max(strongest)) or 1.0
    sent_fields, sent_weights, lost = own / unit, weights / unit, ""
    if coupling_range is not None and bits is not None:
        sent_fields = _rounded(sent_fields, field_range or coupling_range, bits)
        sent_weights = _rounded(sent_weights, coupling_range, bits)
        error = float(np.abs(sent_fields * unit - own).sum() + np.abs(sent_weights * unit - weights).sum())
        total = float(np.abs(own).sum() + np.abs(weights).sum())
        if error > TIE_SHARE * total:
            lost = (
                f"fields and couplings were rounded to {bits} bits: energies may be off by up to {error:.3g}, "
                f"{100 * error / total:.2g} % of the sum of their sizes"
            )
    return Question(
        fields=sent_fields.tolist(),
        couplings=list(zip(first.tolist(), second.tolist(), sent_weights.tolist(), strict=True)),
        spins=batch.spins[row].tolist(),
        temperature=float(batch.temperature[row]) / unit,
        seed=str(int(batch.seeds[row])),
        lost=lost,
    )


def as_request(questions: list[Question], shots: int) -> dict[str, Any]:
    """The line that asks these questions, but for its number."""
    return {
        "shots": shots,
        "fields": [one.fields for one in questions],
        "couplings": [one.couplings for one in questions],
        "spins": [one.spins for one in questions],
        "temperature": [one.temperature for one in questions],
        "seeds": [one.seed for one in questions],
    }


def answer_bytes(clusters: int, shots: int, size: int) -> int:
    """How long a line may be that answers so many clusters: room for any honest layout, none for a flood."""
    return (1 << 20) + 32 * clusters * shots * size


class Answer:
    """The answer to one request: columns of the right length, whose entries are read one cluster at a time."""

    def __init__(self, line: dict[str, Any], clusters: int) -> None:
        for key in line:
            if key not in ("answer", "spins", "failures", *TIME_NAMES):
                raise DeviceError(f"its answer holds {key[:40]!r}, which the protocol does not know")
        if "spins" not in line:
            raise DeviceError("its answer holds no spins")
        self._columns: dict[str, list[Any]] = {}
        for key, column in line.items():
            if key == "answer":
                continue
            if not isinstance(column, list) or len(column) != clusters:
                count = f"{len(column)} entries" if isinstance(column, list) else "no list"
                raise DeviceError(f"its {key} holds {count} where {clusters} clusters were asked about")
            self._columns[key] = column

    def shots(self, row: int, shots: int, size: int) -> I8:
        """Every shot of one cluster, i8 (m, k)."""
        failure = self._columns.get("failures", {row: ""})[row]
        if failure:
            raise DeviceError(f"it says: {str(failure)[:400]}")
        given = self._columns["spins"][row]
        if not isinstance(given, list) or len(given) != shots:
            raise DeviceError(f"its spins hold {_count(given)} shots of a cluster, {shots} were asked for")
        for shot in given:
            if not isinstance(shot, list) or len(shot) != size:
                raise DeviceError(f"a shot holds {_count(shot)} spins, the cluster has {size}")
            if set(map(type, shot)) != {int} or not set(shot) <= {1, -1}:
                wrong = next(spin for spin in shot if type(spin) is not int or spin not in (1, -1))
                raise DeviceError(f"a shot holds the spin {str(wrong)[:40]}; spins are the whole numbers 1 and -1")
        return np.array(given, np.int8)

    def seconds(self, name: str, row: int) -> float:
        """A time that the program measured itself, nan where it gave none."""
        value = self._columns[name][row] if name in self._columns else None
        if value is None:
            return math.nan
        if not _number(value) or value < 0:
            raise DeviceError(f"its {name} is {str(value)[:40]}; it must be seconds, 0 or more, or null")
        return float(value)


def _pairs(batch: ClusterBatch, row: int) -> tuple[I64, I64, F64]:
    """The couplings of one cluster: both ends, i < j, and the weights, without those that are zero."""
    if batch.couplings is not None:
        first, second = np.nonzero(np.triu(batch.couplings[row], 1))
        return first.astype(np.int64), second.astype(np.int64), batch.couplings[row, first, second]
    assert batch.edges is not None
    edges = batch.edges.rows(row, row + 1)
    return edges.pairs[:, 0].astype(np.int64), edges.pairs[:, 1].astype(np.int64), edges.weights


def _rounded(values: F64, limit: float, bits: int) -> F64:
    """Values within ``[-limit, limit]``, each at the nearest of the evenly spaced levels that the bits tell apart."""
    steps = 2 ** (bits - 1) - 1
    return np.clip(np.rint(values * (steps / limit)), -steps, steps) * (limit / steps)


def _count(value: object) -> str:
    return str(len(value)) if isinstance(value, list) else "no list of"


def _named(value: object) -> bool:
    return isinstance(value, str) and 0 < len(value) <= 80 and value.isprintable()


def _whole(value: object) -> bool:
    return isinstance(value, int) and not isinstance(value, bool)


def _number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
