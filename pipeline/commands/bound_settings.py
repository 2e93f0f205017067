"""What ``bound`` can be told: one table of names for the keyword and the command line."""

from __future__ import annotations

from typing import Annotated, Literal, get_args

from pydantic import BeforeValidator, Field

from patchwalk.settings import FileName, ProblemSettings, Seed, SpelledSubsolver

Part = Literal["cuts", "heuristic", "branching", "clusters"]
PARTS: tuple[Part, ...] = get_args(Part)


def _parts(value: object) -> object:
    """Parts written as cuts,heuristic or a list."""
    words = [word.strip() for word in value.split(",")] if isinstance(value, str) else value
    if not isinstance(words, list | tuple):
        raise ValueError(f"write it as words between commas, or as a list, of {', '.join(PARTS)}")
    unknown = [word for word in words if word not in PARTS]
    if unknown:
        raise ValueError(f"{unknown[0]!r} cannot be switched off; {', '.join(PARTS)} can")
    return words


class BoundSettings(ProblemSettings):
    """Everything that ``bound`` can be told."""

    method: Literal["auto", "cycles", "semidefinite", "clusters"] = Field(
        "auto",
        description="What bounds: odd cycles, semidefinite duals (dense problems), exact minima of clusters (narrow or "
        "crowded ones), or what suits the couplings.",
    )
    seconds: float | None = Field(
        None, gt=0, allow_inf_nan=False,
        description="Stop after so many seconds, compiling apart; 60 where nodes are not limited either.",
    )  # fmt: skip
    nodes: int | None = Field(None, ge=1, description="Stop after so many nodes of the tree.")
    subsolver: SpelledSubsolver = Field(
        "elimination", description="Who answers clusters of spins that the bound leaves undecided."
    )
    cluster_size: int | None = Field(
        None, ge=1, description="Spins in each cluster; by default what the subsolver answers at once."
    )
    sweeps: int = Field(2000, ge=0, description="Sweeps of the first cooling, 0 for none at all.")
    seed: Seed = Field(1, description="The seed of the run.")
    start: FileName | None = Field(None, description="A configuration to begin with.")
    earlier: FileName | None = Field(
        None, description="Go on from the tree and the best configuration of an earlier run of this command."
    )
    run: FileName | None = Field(None, description="Where the run file goes: calls, node log and certificate.")
    without: Annotated[list[Part], BeforeValidator(_parts)] | None = Field(
        None, description=f"Switch parts off to see what they are worth: {', '.join(PARTS)}."
    )

    def conflicts(self) -> list[tuple[str, str]]:
        """Settings that are each possible but not together: the setting to look at first, and a sentence."""
        found = super().conflicts()
        if self.earlier is not None and self.method not in ("auto", "cycles"):
            found.append(("method", f"method is {self.method!r}, but an earlier run is gone on with by cycles only"))
        if self.earlier is not None and self.start is not None:
            found.append(("start", "start and earlier cannot both be given; the earlier run has its configuration"))
        return found
