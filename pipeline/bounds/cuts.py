"""Odd-cycle inequalities as flat arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.contract import F64, I8, I32, I64


@dataclass(frozen=True, eq=False)
class Cuts:
    """Odd-cycle inequalities: ``edges`` i32 and ``odd`` i8 (1 for edges of F), both (total,), cut after cut, bounded by
    ``offsets`` i64 (count + 1,).
    """

    offsets: I64
    edges: I32
    odd: I8

    def __len__(self) -> int:
        return len(self.offsets) - 1

    @property
    def signs(self) -> F64:
        """The coefficients f64 (total,): +1 on F and -1 on the rest of the cycle."""
        return np.where(self.odd == 1, 1.0, -1.0)

    @property
    def limits(self) -> F64:
        """The right-hand sides ``|F| - 1``, f64 (count,)."""
        if not len(self):
            return np.empty(0)
        return np.asarray(np.add.reduceat(self.odd.astype(np.float64), self.offsets[:-1]) - 1.0, np.float64)

    def chosen(self, rows: npt.NDArray[np.intp] | I64) -> Cuts:
        """The cuts of these numbers, in this order."""
        lengths = np.diff(self.offsets)[rows]
        offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
        places = np.repeat(self.offsets[:-1][rows] - offsets[:-1], lengths) + np.arange(offsets[-1])
        return Cuts(offsets, self.edges[places], self.odd[places])

    def joined(self, other: Cuts) -> Cuts:
        """These cuts and then the other ones."""
        offsets = np.concatenate([self.offsets, other.offsets[1:] + self.offsets[-1]])
        return Cuts(offsets, np.concatenate([self.edges, other.edges]), np.concatenate([self.odd, other.odd]))

    @classmethod
    def none(cls) -> Cuts:
        """No cuts."""
        return cls(np.zeros(1, np.int64), np.empty(0, np.int32), np.empty(0, np.int8))
