"""What ``scale`` measures on: instances of a family as they are, or clusters cut from large problems.

A cluster is cut where a search would cut it: the large problem is put into a local minimum (from a random
configuration, flip by flip downhill), a rule picks the spins, and the frozen rest is folded into their fields.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Literal

import numpy as np

from patchwalk.clusters.conditioning import condition
from patchwalk.clusters.rules import RULES, Marks, View
from patchwalk.problem.families import FAMILIES, make
from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import Problem
from patchwalk.search.replicas import Replicas
from patchwalk.search.sweeps import descend
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import I8, ClusterBatch
from patchwalk.subsolvers.draws import seed_for

STATE, PICK, CALL, INSTANCE = 1, 2, 3, 4
"""Words of the streams of an instance: its configuration, its cluster, its call, the problem itself."""


@dataclass(eq=False)
class Instances:
    """``count`` instances of every size, each a function of the seed, its number and the size alone.

    ``source`` is a family or are files; ``within`` is the size of the family's problems that clusters are cut from,
    None for whole instances. ``boundary`` is ``frozen``, or ``none``: the same clusters with nothing around them.
    """

    source: str | tuple[Path, ...]
    count: int
    seed: int
    within: int | None = None
    rule: str = "ball"
    boundary: Literal["frozen", "none"] = "frozen"
    kind: str | None = None
    options: dict[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if isinstance(self.source, str) and self.source not in FAMILIES:
            raise SettingsError(
                [f"{self.source!r} is neither a family nor a file; families are: {', '.join(FAMILIES)}"]
            )
        if self.rule not in RULES:
            raise SettingsError([f"rule: {self.rule!r} is not known; it is one of: {', '.join(RULES)}"])
        if RULES[self.rule].looks_at_spins and self.rule == "disputed":
            raise SettingsError(["rule: disputed needs the good configurations of a search; take another"])
        if self.count < 2:
            raise SettingsError([f"instances is {self.count}; give at least 2"])
        self._files: tuple[Problem, ...] = ()
        if not isinstance(self.source, str):
            if self.options or self.within is not None:
                raise SettingsError(["a file is taken as it is: leave --within and the options of a family out"])
            self._files = tuple(read_problem(path, kind=self.kind) for path in self.source)

    @property
    def cut(self) -> bool:
        """Whether instances are clusters of something larger."""
        return bool(self._files) or self.within is not None

    def described(self) -> str:
        """What they are, in words."""
        options = "".join(f" {key}={value}" for key, value in sorted(self.options.items()))
        if not self.cut:
            return f"whole instances of {self.source}{options}"
        around = "with their frozen boundary" if self.boundary == "frozen" else "with nothing around them"
        where = (
            f"{self.source} of size {self.within}{options}"
            if isinstance(self.source, str)
            else ", ".join(map(str, self.source))
        )
        return f"clusters ({self.rule}) of {where}, cut in local minima, {around}"

    def of_size(self, size: int) -> tuple[ClusterBatch, list[str]]:
        """The instances of one size as a batch, and where each came from."""
        parts = [self._one(size, number) for number in range(self.count)]
        rows = [row for row, _ in parts]
        if len({row.size for row in rows}) > 1:
            raise SettingsError([f"instances of size {size} differ in their numbers of spins; take another family"])
        if any(row.couplings is None for row in rows):
            raise SettingsError([f"instances of size {size} have {rows[0].size} spins; exact statements stop at 22"])
        batch = ClusterBatch(
            fields=np.concatenate([row.fields for row in rows]),
            spins=np.concatenate([row.spins for row in rows]),
            temperature=np.zeros(self.count),
            seeds=np.concatenate([row.seeds for row in rows]),
            couplings=np.concatenate([row.couplings for row in rows if row.couplings is not None]),
        )
        return batch, [origin for _, origin in parts]

    def _one(self, size: int, number: int) -> tuple[ClusterBatch, str]:
        problem, origin = self._problem(size, number)
        spins = self._configuration(problem, number)
        members = self._members(problem, spins, size, number)
        places = np.full(len(problem), -1, np.int32)
        seeds = np.array([seed_for(self.seed, CALL, size, number) >> 1], np.uint64)
        row = condition(problem, members, spins, problem.local_fields(spins), 0.0, seeds, places)
        return (replace(row, fields=problem.fields[members]) if self.boundary == "none" else row), origin

    def _problem(self, size: int, number: int) -> tuple[Problem, str]:
        if not isinstance(self.source, str):
            which = number % len(self._files)
            return self._files[which], str(self.source[which])
        wanted = size if self.within is None else self.within
        own = seed_for(self.seed, INSTANCE, wanted, number) >> 33  # short enough to type after make --seed
        return make(self.source, wanted, seed=own, **self.options), f"{self.source} {wanted} seed {own}"

    def _configuration(self, problem: Problem, number: int) -> I8:
        replicas = Replicas.random(problem, 1, seed_for(self.seed, STATE, number))
        spins, local_fields = replicas.spins[0], replicas.local_fields[0]
        if self.cut:
            graph = (problem.row_starts, problem.neighbours, problem.couplings)
            descend(*graph, spins, local_fields, problem.tie_tolerance)
        return spins

    def _members(self, problem: Problem, spins: I8, size: int, number: int) -> np.typing.NDArray[np.int32]:
        if not self.cut:
            return np.arange(len(problem), dtype=np.int32)[None, :]
        if size > len(problem):
            raise SettingsError([f"size {size}: the problem has {len(problem)} spins; give smaller --sizes"])
        pick: Callable[..., Any] = RULES[self.rule].pick
        seed = seed_for(self.seed, PICK, size, number)
        found = pick(problem, size, 1, seed, Marks.for_problem(problem), View.of(problem, spins))
        fitting = [members for members in found if members.shape[1] == size]
        if not fitting:
            raise SettingsError([f"rule {self.rule} found no cluster of {size} spins; take another --rule or --sizes"])
        return fitting[0][:1]
