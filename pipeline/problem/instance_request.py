"""What instance is to be made: the request that every family builds from."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

F64 = npt.NDArray[np.float64]


class Request(NamedTuple):
    """What is to be made, checked; options that the family does not have are None."""

    family: str
    size: int
    seed: int
    couplings: str | None
    open: bool
    fields: bool
    degree: int | None
    density: float | None
    draws: np.random.Generator

    def weights(self, count: int) -> F64:
        """Couplings or fields (count,) of mean 0 and variance 1, from the requested law."""
        if self.couplings == "gaussian":
            return self.draws.standard_normal(count)
        return np.where(self.draws.integers(0, 2, count) == 1, 1.0, -1.0)

    def recipe(self) -> tuple[str, ...]:
        """How to make the same instance again."""
        options = {"couplings": self.couplings, "degree": self.degree, "density": self.density}
        spelled = [f"--{name} {value}" for name, value in options.items() if value is not None]
        flags = ["--open"] * self.open + ["--fields"] * self.fields
        words = [f"make {self.family} --size {self.size}", *spelled, *flags, f"--seed {self.seed}"]
        return (" ".join(words),)
