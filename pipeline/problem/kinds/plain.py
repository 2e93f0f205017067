"""The kinds whose spins are the user's own: bare spins, the two parts of a cut, the channels of beacons."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from patchwalk.problem.beacons import CAUTION, CHANNELS, beacon_map, describe, greedy_allocation
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.meanings import I8, Encoding, by_name, labels_of, two_lists, two_parts


@dataclass(frozen=True, eq=False)
class PlainSpins(Encoding):
    """The spin of every name; no table where spins have no names."""

    problem: Problem
    main = "spins_by_name"

    def read(self, spins: I8) -> dict[str, Any]:
        names = self.problem.names
        return {self.main: None if names is None else dict(zip(names, spins.tolist(), strict=True))}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        return self.problem.objective(self.problem.energy(self.encode(value))), ()

    def judge_spins(self, spins: I8) -> tuple[float, tuple[str, ...]]:
        return self.problem.objective(self.problem.energy(spins)), ()

    def encode(self, value: Mapping[str, Any]) -> I8:
        if self.problem.names is None:
            raise ProblemError("these spins have no names; give the list of spins, +1 and -1 in the input's order")
        return self.problem.spins_from(by_name(value, self.main, self.problem.names))


@dataclass(frozen=True, eq=False)
class CutParts(Encoding):
    """Two parts by name or, where there are no names, by number from 1; the cut is recounted edge by edge."""

    problem: Problem
    main = "parts"
    shape = "parts"

    def read(self, spins: I8) -> dict[str, Any]:
        names: list[Any] = list(self.problem.names or range(1, len(self.problem) + 1))
        parts = [[names[place] for place in np.flatnonzero(spins == side)] for side in (1, -1)]
        return {"cut": self._cut(spins), "parts": parts}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        return self._cut(self.encode(value)), ()

    def judge_spins(self, spins: I8) -> tuple[float, tuple[str, ...]]:
        return self._cut(spins), ()

    def encode(self, value: Mapping[str, Any]) -> I8:
        parts = [list(map(str, part)) for part in two_lists(value, self.main)]
        return two_parts({self.main: parts}, self.main, labels_of(self.problem.names, len(self.problem)))

    def _cut(self, spins: I8) -> float:
        problem = self.problem
        rows = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
        across = (rows < problem.neighbours) & (spins[rows] != spins[problem.neighbours])
        return float(2.0 * problem.couplings[across].sum())


@dataclass(frozen=True, eq=False)
class BeaconChannels(Encoding):
    """The channel of every beacon, the interference, and what a simple greedy rule gives."""

    problem: Problem
    main = "channels"

    def read(self, spins: I8) -> dict[str, Any]:
        greedy = describe(self.problem, greedy_allocation(self.problem))["interference"]
        return {**describe(self.problem, spins), "greedy_interference": greedy, "caution": CAUTION}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        said = describe(self.problem, self.encode(value))
        broken = [f"repeater pair broken: {one} and {other}" for one, other in said["broken_repeaters"]]
        return said["interference"], tuple(broken)

    def encode(self, value: Mapping[str, Any]) -> I8:
        names = beacon_map(self.problem).names
        channels = by_name(value, self.main, names)
        for name, channel in zip(names, channels, strict=True):
            if not isinstance(channel, str) or channel not in CHANNELS:
                raise ProblemError(f"channel {channel!r} of {name!r} does not exist; it is A or B")
        return np.array([CHANNELS[channel] for channel in channels], np.int8)


def encoding_of(problem: Problem) -> Encoding:
    """What a problem's spins mean, whether it was encoded or is made of the user's own spins."""
    if problem.encoding is not None:
        return problem.encoding
    own: dict[str, type[PlainSpins | CutParts | BeaconChannels]] = {"maxcut": CutParts, "beacons": BeaconChannels}
    return own.get(problem.kind, PlainSpins)(problem)
