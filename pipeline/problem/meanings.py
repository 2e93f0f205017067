"""From spins back to the user's own words: what an answer is, and what every encoding can do."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import ProblemError

I8 = npt.NDArray[np.int8]


@dataclass(frozen=True, eq=False)
class Answer:
    """What a configuration means, checked against the original problem.

    ``value`` is in the user's words: sets, colours, parts, truth values by name. ``objective`` is recomputed from the
    original problem, never from the energy. ``broken`` has a sentence for every violated constraint of ``value``;
    ``mended`` a sentence for every one that the configuration given violated, where a cheap repair gave the
    ``value`` that violates none, and ``changed`` one for everything the repair did. ``spins`` i8 (n,) is the
    configuration of ``value``.
    """

    value: Mapping[str, Any]
    objective: float
    spins: I8
    broken: tuple[str, ...] = ()
    mended: tuple[str, ...] = ()
    changed: tuple[str, ...] = ()

    @property
    def feasible(self) -> bool:
        """Whether ``value`` keeps every constraint."""
        return not self.broken

    @property
    def repaired(self) -> bool:
        """Whether it took a repair to keep them."""
        return bool(self.mended)


def in_words(one: Any) -> str:
    """The value of a name as people say it."""
    if isinstance(one, bool):
        return "yes" if one else "no"
    return " and ".join(map(str, one)) or "nothing" if isinstance(one, list) else str(one)


def labels_of(names: Sequence[str] | None, size: int) -> tuple[str, ...]:
    """The user's own words for things, or their numbers from 1 where there are none."""
    return tuple(names) if names is not None else tuple(map(str, range(1, size + 1)))


def entry_of(value: Mapping[str, Any], key: str) -> Any:
    """The entry of a value that decides it; raises :class:`ProblemError` without it."""
    if key not in value:
        raise ProblemError(f'the answer has no entry "{key}"; it has: {", ".join(map(str, value)) or "none"}')
    return value[key]


def plain_list(given: Any, key: str) -> list[Any]:
    """A list of names or numbers out of a value; raises :class:`ProblemError` for anything else."""
    if not isinstance(given, list | tuple) or not all(isinstance(one, str | int | float) for one in given):
        raise ProblemError(f'"{key}" of the answer should hold a list of names, but has {str(given)[:40]!r}')
    return list(given)


def two_lists(value: Mapping[str, Any], key: str) -> list[list[Any]]:
    """The two lists of names or numbers of a value; raises :class:`ProblemError` for anything else."""
    parts = entry_of(value, key)
    if not isinstance(parts, list | tuple) or len(parts) != 2:
        raise ProblemError(f'"{key}" of the answer are not two lists')
    return [plain_list(part, key) for part in parts]


def by_name(value: Mapping[str, Any], key: str, labels: Sequence[str]) -> list[Any]:
    """What a value says of every name, in order; raises :class:`ProblemError` for names that are missing or unknown."""
    table = entry_of(value, key)
    if not isinstance(table, Mapping):
        raise ProblemError(f'"{key}" of the answer is no table of names')
    missing = [label for label in labels if label not in table]
    if missing:
        raise ProblemError(f'"{key}" of the answer says nothing of {missing[0]!r} ({len(missing)} missing)')
    if len(table) > len(labels):
        known = set(labels)
        extra = next(name for name in table if name not in known)
        raise ProblemError(f'"{key}" of the answer speaks of {extra!r}, which the problem does not have')
    return [table[label] for label in labels]


def truth_values(value: Mapping[str, Any], key: str, labels: Sequence[str]) -> npt.NDArray[np.int64]:
    """0 or 1 for every name, i64 (n,), from a value that holds 0, 1, false or true for each."""
    given = by_name(value, key, labels)
    for label, one in zip(labels, given, strict=True):
        if not isinstance(one, bool | int | float | np.integer | np.bool_) or one not in (0, 1):
            raise ProblemError(f'"{key}" of the answer has {one!r} for {label!r}; expected true or false (1 or 0)')
    return np.array(given, np.int64)


def two_parts(value: Mapping[str, Any], key: str, labels: Sequence[str]) -> I8:
    """+1 or -1 for every name, i8 (n,), from a value that holds two lists of names; raises :class:`ProblemError`."""
    parts = two_lists(value, key)
    sides = {name: side for part, side in zip(parts, (1, -1), strict=True) for name in part}
    if len(sides) < len(parts[0]) + len(parts[1]):
        raise ProblemError(f'"{key}" of the answer hold a name twice')
    return np.array(by_name({key: sides}, key, labels), np.int8)


class Encoding(ABC):
    """How one original problem became spins. Subclasses are frozen and hold the original problem.

    A ``value`` is a mapping in the user's words, as ``Answer.value`` holds it. Its entry ``main`` says everything;
    further entries may repeat it in another way.
    """

    main: str
    """The entry of a value that decides it."""
    shape: Literal["table", "set", "parts"] = "table"
    """What that entry is: a value for every name, a list of names, or two lists of names."""
    names_are_numbers = False

    @abstractmethod
    def read(self, spins: I8) -> dict[str, Any]:
        """What the spins say, whether it keeps the constraints or not."""

    @abstractmethod
    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        """The objective of a value and a sentence for every constraint it breaks, from the original problem.

        Raises :class:`~patchwalk.problem.ising.ProblemError` for what is no value of this problem at all.
        """

    @abstractmethod
    def encode(self, value: Mapping[str, Any]) -> I8:
        """The spins, i8 (n,), of a value; auxiliary spins as they cost least."""

    def settle(self, spins: I8) -> I8:
        """The same value with auxiliary spins as they cost least; by default there are none."""
        return spins

    def judge_spins(self, spins: I8) -> tuple[float, tuple[str, ...]]:
        """The objective of a configuration and a sentence for every constraint it breaks, nothing mended."""
        return self.judge(self.read(spins))

    def mend(self, spins: I8) -> I8:
        """A configuration near this one that should break fewer constraints; by default the same."""
        return spins

    def decode(self, spins: npt.ArrayLike) -> Answer:
        """The answer in the user's words, mended where that is cheap and makes it keep every constraint."""
        given = np.ascontiguousarray(spins, np.int8)
        value = self.read(given)
        objective, broken = self.judge_spins(given)
        if not broken:
            return Answer(value, objective, self.settle(given))
        mended = self.mend(given)
        new_value = self.read(mended)
        new_objective, still_broken = self.judge(new_value)
        if still_broken:
            return Answer(value, objective, given, broken=broken)
        changed = _changes(self.shape, value[self.main], new_value[self.main])
        return Answer(new_value, new_objective, self.settle(mended), mended=broken, changed=changed)


def _changes(shape: str, before: Any, after: Any) -> tuple[str, ...]:
    """A sentence for everything in which the deciding entries of two values differ."""
    if shape == "set":
        gone, new = set(before) - set(after), set(after) - set(before)
        taken = [f"{name} was taken out" for name in before if name in gone]
        return (*taken, *(f"{name} was put in" for name in after if name in new))
    if shape == "parts":
        sides = {name: part for part, names in enumerate(before, 1) for name in names}
        moved = [(name, part) for part, names in enumerate(after, 1) for name in names if sides[name] != part]
        return tuple(f"{name} went from part {sides[name]} to part {part}" for name, part in moved)
    return tuple(
        f"{name} was {in_words(before[name])}, now {in_words(now)}"
        for name, now in after.items()
        if before[name] != now
    )
