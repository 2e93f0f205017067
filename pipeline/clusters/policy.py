"""Who is called when: several subsolvers, each with a condition; the first whose condition holds is called.

In a settings file every case is a table, tried from the first to the last:

    [[callers]]
    when = "stage > 0.5 and frustration >= 0.3"
    subsolver = "walk,shots=4"

    [[callers]]
    when = "k <= 10"
    subsolver = "nothing"

    [[callers]]
    subsolver = "metropolis"

A cluster for which no case holds, or whose case is ``nothing``, is not called for: it costs nothing and stays as it is.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.clusters.conditions import Condition, ConditionError, condition_from
from patchwalk.clusters.features import CHEAP, FEATURES, cheap_features
from patchwalk.subsolvers.contract import F64, I64, ClusterBatch, Subsolver
from patchwalk.subsolvers.registry import SubsolverError, subsolver_from

QUANTITIES: Mapping[str, str] = {
    "stage": "fraction of the counted budget spent, 0 to 1",
    "temperature": "temperature in units of the typical local field",
    "k": "spins in the cluster",
    **{name: FEATURES[name].sentence for name in CHEAP},
}
"""What a condition may speak of, and what each says."""

NOTHING = ("nothing", "none")
"""How a case is spelled that calls nobody."""

CASE_KEYS = ("subsolver", "when")


class PolicyError(ValueError):
    """Cases that cannot be used, a line for each mistake."""


@dataclass(frozen=True)
class Case:
    """A subsolver, or None to call nobody, and when: None for always."""

    subsolver: Subsolver | None
    when: Condition | None = None


@dataclass(frozen=True)
class Policy:
    """The cases in the order in which they are tried."""

    cases: tuple[Case, ...]

    @property
    def quantities(self) -> tuple[str, ...]:
        """What any of the conditions speaks of."""
        return tuple(dict.fromkeys(name for case in self.cases if case.when for name in case.when.names))

    @property
    def looks_at_spins(self) -> bool:
        """Whether any condition depends on the cluster's own spins, which sampling does not admit."""
        return any(name in FEATURES and FEATURES[name].looks_at_spins for name in self.quantities)

    def answered_by(self, number: int, subsolver: Subsolver) -> Policy:
        """The same policy with another subsolver in one case."""
        cases = [replace(case, subsolver=subsolver) if own == number else case for own, case in enumerate(self.cases)]
        return Policy(tuple(cases))

    def assign(self, batch: ClusterBatch, stage: float, scale: float) -> I64:
        """The number of the case that each cluster falls under, i64 (B,), -1 where nobody is called.

        ``scale`` is the typical local field in energy units, the unit of ``temperature``. Each number depends on its
        own row, the stage and the scale alone.
        """
        chosen = np.full(len(batch), -1, np.int64)
        waiting = np.ones(len(batch), np.bool_)
        values = self._values(batch, stage, scale)
        for number, case in enumerate(self.cases):
            own = waiting if case.when is None else waiting & case.when.holds(values, len(batch))
            if case.subsolver is not None:
                chosen[own] = number
            waiting = waiting & ~own
        return chosen

    def _values(self, batch: ClusterBatch, stage: float, scale: float) -> dict[str, float | F64]:
        values: dict[str, float | F64] = {"stage": stage, "k": float(batch.size)}
        values["temperature"] = batch.temperature / scale if scale > 0.0 else batch.temperature
        features = [name for name in self.quantities if name in FEATURES]
        if features:
            values.update(cheap_features(batch, features))
        return values


def policy_from(setting: object, folder: Path | None = None) -> Policy:
    """The policy behind a setting: a list of cases, or one subsolver in any spelling, called always.

    A case is a table with ``subsolver`` and, unless it always holds, ``when``; ``@file.toml`` lies in ``folder``.
    Raises :class:`PolicyError` with every mistake at once, each with the number of its case, counted from 1.
    """
    if not isinstance(setting, Sequence) or isinstance(setting, str):
        return Policy((Case(_subsolver(setting, folder)),))
    complaints: list[str] = []
    cases = [_case(number, table, folder, complaints) for number, table in enumerate(setting, 1)]
    always = next((number for number, case in enumerate(cases, 1) if case is not None and case.when is None), None)
    if not cases:
        complaints.append('no case is given; write at least one table with subsolver = "..."')
    elif always is not None and always < len(cases):
        complaints.append(f"case {always} has no condition, so that no case after it is ever reached; put it last")
    if complaints:
        raise PolicyError("\n".join(complaints))
    return Policy(tuple(case for case in cases if case is not None))


def _case(number: int, table: object, folder: Path | None, complaints: list[str]) -> Case | None:
    """One case; None where complaints have been added."""
    before = len(complaints)
    if not isinstance(table, Mapping):
        complaints.append(f"case {number}: {table!r} is no table; give it subsolver = ... and when = ...")
        return None
    unknown = [str(key) for key in table if key not in CASE_KEYS]
    complaints.extend(f"case {number}: there is no key {key!r}{_nearest(key)}" for key in unknown)
    when, subsolver = None, None
    if "when" in table:
        when = _condition(number, table["when"], complaints)
    if "subsolver" not in table:
        complaints.append(f'case {number}: needs subsolver = "NAME,key=value", or "nothing" to call nobody')
    else:
        try:
            subsolver = _subsolver(table["subsolver"], folder)
        except SubsolverError as error:
            complaints.extend(f"case {number}: {line}" for line in str(error).splitlines())
    return Case(subsolver, when) if len(complaints) == before else None


def _condition(number: int, text: object, complaints: list[str]) -> Condition | None:
    try:
        if not isinstance(text, str):
            raise ConditionError(f'{text!r} is no text; write when = "stage > 0.5"')
        return condition_from(text, tuple(QUANTITIES))
    except ConditionError as error:
        complaints.append(f"case {number}: when: {error}")
        return None


def _subsolver(spelling: Any, folder: Path | None) -> Subsolver | None:
    if isinstance(spelling, str) and spelling.strip() in NOTHING:
        return None
    if not isinstance(spelling, str | Mapping | Subsolver):
        raise SubsolverError(f"{spelling!r} is no subsolver; write NAME,key=value, a table with a name, or nothing")
    return subsolver_from(spelling, folder)


def _nearest(word: str) -> str:
    close = difflib.get_close_matches(word, CASE_KEYS, n=1, cutoff=0.5)
    return f"; did you mean {close[0]!r}?" if close else f"; there are: {', '.join(CASE_KEYS)}"
