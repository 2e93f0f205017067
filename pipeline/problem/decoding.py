"""From spins back to the user's own words: what an answer is, and what every encoding can do."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

I8 = npt.NDArray[np.int8]


@dataclass(frozen=True, eq=False)
class Answer:
    """What a configuration means, checked against the original problem.

    ``value`` is in the user's words: sets, colours, parts, truth values by name. ``objective`` is recomputed from the
    original problem, never from the energy. ``broken`` has a sentence for every violated constraint of ``value``;
    ``mended`` a sentence for every one that the configuration given violated, where a cheap repair gave the
    ``value`` that violates none. ``spins`` i8 (n,) is the configuration of ``value``.
    """

    value: Mapping[str, Any]
    objective: float
    spins: I8
    broken: tuple[str, ...] = ()
    mended: tuple[str, ...] = field(default=())

    @property
    def feasible(self) -> bool:
        """Whether ``value`` keeps every constraint."""
        return not self.broken

    @property
    def repaired(self) -> bool:
        """Whether it took a repair to keep them."""
        return bool(self.mended)


class Encoding(ABC):
    """How one original problem became spins. Subclasses are frozen and hold the original problem.

    A ``value`` is a mapping in the user's words, as ``Answer.value`` holds it. Its entry ``main`` says everything;
    further entries may repeat it in another way.
    """

    main: str
    """The entry of a value that decides it."""

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

    def mend(self, spins: I8) -> I8:
        """A configuration near this one that should break fewer constraints; by default the same."""
        return spins

    def decode(self, spins: npt.ArrayLike) -> Answer:
        """The answer in the user's words, mended where that is cheap and makes it keep every constraint."""
        given = np.ascontiguousarray(spins, np.int8)
        value = self.read(given)
        objective, broken = self.judge(value)
        if not broken:
            return Answer(value, objective, self.encode(value))
        mended = self.mend(given)
        new_value = self.read(mended)
        new_objective, still_broken = self.judge(new_value)
        if still_broken:
            return Answer(value, objective, given, broken=broken)
        return Answer(new_value, new_objective, self.encode(new_value), mended=broken)
