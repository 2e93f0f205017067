"""Settings: one table of names for each command, reachable alike from a TOML file, the command line and Python.

A setting called ``long_name`` here is the TOML key ``long_name``, the keyword ``long_name`` and the option
``--long-name``. How they are read and checked is in :mod:`patchwalk.settings_checks`.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field

from patchwalk.subsolvers.contract import Subsolver

DEFAULT_SECONDS = 60.0
DEFAULT_CLUSTER_SIZE = 12
DEFAULT_RUNGS = 16
FEWEST_SWEEPS, MOST_SWEEPS = 2, 1000
LADDER_LIMIT = 20_000


def _seed_list(value: object) -> object:
    """Seeds written as ``1..5``, ``3`` or ``1,4,9``, or a list."""
    if isinstance(value, int) and not isinstance(value, bool):
        return [value]
    if not isinstance(value, str):
        return value
    seeds: list[int] = []
    for part in value.split(","):
        first, dots, last = part.strip().partition("..")
        try:
            low, high = int(first), int(last if dots else first)
        except ValueError:
            raise ValueError("write seeds as 1..5, as 1,4,9 or as a list of whole numbers") from None
        if high < low or high - low > 100_000:
            raise ValueError(f"the range {part.strip()} is empty or holds more than 100,000 seeds")
        seeds.extend(range(low, high + 1))
    return seeds


def _number_list(value: object) -> object:
    """Numbers written as 2.0,2.27,3.0, one alone, or a list."""
    if isinstance(value, int | float) and not isinstance(value, bool):
        return [value]
    if isinstance(value, str):
        return [part.strip() for part in value.split(",")]
    return value


def _spelled_subsolver(value: object) -> object:
    """A subsolver as text, as a table or already made; anything else is refused."""
    if value is not None and not isinstance(value, str | Mapping | Subsolver):
        raise ValueError("write it as NAME,key=value,... , as a table with a name, or give a subsolver object")
    return value


def _spelled_rules(value: object) -> object:
    """Rules as text or as a table of weights; what they are called is checked where they are looked up."""
    if not isinstance(value, str | Mapping):
        raise ValueError("write it as ball, as ball=2,loose=1 or as a table of rules and weights")
    return value


def _spelled_callers(value: object) -> object:
    """Cases as a list of tables, or the same as TOML text; what stands in them is checked where it is looked up."""
    if isinstance(value, str):
        try:
            value = tomllib.loads(f"callers = {value}")["callers"]
        except tomllib.TOMLDecodeError as error:
            raise ValueError(f"write it as [{{when = '...', subsolver = '...'}}, ...]: {error}") from None
    if not isinstance(value, list):
        raise ValueError("write it as tables [[callers]], each with subsolver = ... and when = ...")
    return value


def _path(value: object) -> object:
    """A path that is not empty."""
    if value == "":
        raise ValueError("is empty; give the name of a file")
    return value


FileName = Annotated[Path, BeforeValidator(_path)]
Seed = Annotated[int, Field(ge=0, lt=2**63)]
AboveZero = Annotated[float, Field(gt=0, allow_inf_nan=False)]
SpelledSubsolver = Annotated[Any, BeforeValidator(_spelled_subsolver)]


class ProblemSettings(BaseModel):
    """What every command that reads a problem can be told."""

    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True, strict=False)

    kind: str | None = Field(
        None, description="What the file's numbers mean, unless it says so itself: ising, maxcut, qubo ..."
    )
    field_file: FileName | None = Field(
        None, description="A CSV of names and fields that are added to the couplings of INPUT (kind ising)."
    )
    flip_sign: bool = Field(
        False, description="The numbers of INPUT are of the opposite sign convention, E = -sum J s s - sum h s (ising)."
    )
    colours: int | None = Field(
        None, ge=2, le=1000, description="How many colours there are, unless INPUT says so itself (kind colouring)."
    )

    def conflicts(self) -> list[tuple[str, str]]:
        """Settings that are each possible but not together: the setting to look at first, and a sentence."""
        return []


class SearchSettings(ProblemSettings):
    """What every command that calls subsolvers on a problem can be told."""

    subsolver: SpelledSubsolver = Field(
        "walk",
        description="Who answers the clusters: NAME, NAME,key=value,... , @file.toml or module:Object; "
        "patchwalk backends lists the names.",
    )
    callers: Annotated[list[Any], BeforeValidator(_spelled_callers)] | None = Field(
        None,
        description="Several subsolvers, each with a condition, instead of one: tables [[callers]] of a TOML; the "
        "first that holds is called, and nobody where it says nothing.",
    )
    cluster_size: int | None = Field(
        None, ge=1, description=f"Spins in each cluster; {DEFAULT_CLUSTER_SIZE} if the problem has as many."
    )
    rule: Annotated[str | dict[str, float], BeforeValidator(_spelled_rules)] = Field(
        "ball",
        description="Which spins make a cluster: ball (a breadth-first ball round a random spin), scattered, strip "
        "(long and thin enough for elimination), frustrated (along violated bonds), loose (weak local fields), "
        "disputed (where good configurations disagree), stale (least called), or several with weights: ball=2,loose=1.",
    )
    rule_weights: Literal["adaptive", "fixed"] = Field(
        "adaptive", description="Whether rules that gain more per unit of counted work are drawn more often."
    )
    clusters_per_round: int = Field(
        64, ge=1, le=65536, description="At most this many clusters a round, no two of which touch."
    )
    sweeps: int | None = Field(
        None, ge=0,
        description="Metropolis sweeps of the whole problem after each round; 0 for none. Left out: as many as cost "
        "about half of the calls at fixed prices, 2 to 1000.",
    )  # fmt: skip
    start: FileName | None = Field(
        None, description="A file with a start configuration: +1 and -1 in the input's order, or what --json printed."
    )
    seed: Seed | None = Field(
        None, description="The seed of the run; same seed and counted budget, same bits. Default 1."
    )
    run: FileName | None = Field(
        None, description="Where the run file goes; by default patchwalk-NAME-DATE-TIME.sqlite in the current folder."
    )
    record: Literal["auto", "all", "share"] = Field(
        "auto",
        description="Which calls get a row in the run file: all, a seeded share with exact tallies of the rest, or "
        "auto (all, unless a call is very cheap).",
    )
    workers: int | None = Field(
        None, ge=1, le=1024, description="Work on so many pieces at once; as many as there are cores if left out."
    )
    engine: Literal["threads", "dask"] = Field(
        "threads", description="Who the workers are: threads of this process, or processes of a Dask cluster."
    )
    scheduler: str | None = Field(
        None, description="The address of a Dask cluster that is there already (tcp://HOST:PORT)."
    )
    mixed_workers: bool = Field(
        False, description="Allow Dask workers of another processor or other versions, whose bits may differ."
    )
    failures: int = Field(100, ge=1, description="Give up after so many failed calls in a row.")

    def conflicts(self) -> list[tuple[str, str]]:
        """Settings that are each possible but not together: the setting to look at first, and a sentence."""
        if self.callers is not None and "subsolver" in self.model_fields_set and self.subsolver is not None:
            return [("callers", "callers and subsolver cannot both be given; make the subsolver a case")]
        return super().conflicts()


class SolveSettings(SearchSettings):
    """Everything that ``solve`` can be told."""

    seconds: float | None = Field(
        None, gt=0, allow_inf_nan=False,
        description=f"Stop after so many seconds, compiling apart; {DEFAULT_SECONDS:g} where no other budget is given.",
    )  # fmt: skip
    calls: int | None = Field(None, ge=1, description="Stop after so many cluster calls.")
    total_sweeps: int | None = Field(None, ge=1, description="Stop after so many sweeps.")
    target: float | None = Field(
        None, allow_inf_nan=False, description="Stop at an objective (the cut for maxcut) at least as good as this."
    )
    seeds: Annotated[list[Seed], BeforeValidator(_seed_list)] | None = Field(
        None, description="Several runs in one file, as 1..5 or 1,4,9."
    )
    replicas: int | None = Field(
        None, ge=1, le=4096,
        description=f"Configurations searched side by side; 1, and {DEFAULT_RUNGS} on a ladder.",
    )  # fmt: skip
    tempering: Literal["ladder", "cooling", "adaptive"] | None = Field(
        None,
        description="How hot the replicas are: ladder (a temperature each, traded between neighbours), cooling "
        "(geometric) or adaptive (slower where the energy depends on temperature most). Left out: ladder, and cooling "
        f"for more than {LADDER_LIMIT:,} spins or where coolings are given.",
    )
    acceptance: Literal["metropolis", "threshold", "greedy"] = Field(
        "metropolis",
        description="Which answers are taken: metropolis, threshold (whenever the energy rises by at most the "
        "temperature) or greedy (whenever it does not rise).",
    )
    stall: int | None = Field(None, ge=1, description="Stop after so many rounds without a better configuration.")
    restart_after: int | None = Field(
        None, ge=1,
        description="After so many rounds without a better energy of its own, a replica goes on from one of the best "
        "distinct configurations.",
    )  # fmt: skip
    keep: int = Field(8, ge=1, le=1000, description="How many of the best distinct configurations are kept.")
    distance: int | None = Field(
        None, ge=1, description="Distinct means so many spins apart; a twentieth of the spins if left out."
    )
    hot: float = Field(
        1.0, ge=0, allow_inf_nan=False, description="Temperature at the beginning, in units of the typical local field."
    )  # fmt: skip
    cold: float = Field(0.05, ge=0, allow_inf_nan=False, description="Temperature at the end, in the same units.")
    coolings: int = Field(
        3, ge=1, le=20, description="How often it falls from hot to cold, every time over twice as long as before."
    )
    bound: float | None = Field(
        None, gt=0, allow_inf_nan=False,
        description="Spend at most so many seconds after the search on a lower bound, or a proof of the optimum.",
    )  # fmt: skip
    answer: FileName | None = Field(
        None, description="Write the answer, in the problem's own terms, to a file: .txt, .csv or .json."
    )

    def conflicts(self) -> list[tuple[str, str]]:
        """Settings that are each possible but not together: the setting to look at first, and a sentence."""
        found = super().conflicts()
        if self.seed is not None and self.seeds is not None:
            found.append(("seed", "seed and seeds cannot both be given; seeds = [7] is the same as seed = 7"))
        if self.seeds is not None and not self.seeds:
            found.append(("seeds", "seeds is empty; give at least one"))
        if self.seeds is not None and len(set(self.seeds)) < len(self.seeds):
            found.append(("seeds", "seeds holds a seed twice; the two runs would be the same"))
        if self.cold > self.hot:
            found.append(
                ("cold", f"cold ({self.cold:g}) is above hot ({self.hot:g}); the temperature falls from hot to cold")
            )
        if self.tempering == "ladder" and self.cold == 0.0:
            found.append(("cold", "cold is 0, but a ladder needs a temperature above zero on every rung"))
        if self.tempering == "ladder" and self.replicas == 1:
            found.append(("replicas", "a ladder needs at least 2 replicas; leave replicas out for its default"))
        if self.total_sweeps is not None and self.sweeps == 0:
            found.append(("total_sweeps", "total_sweeps is given but sweeps is 0, so that it would never be reached"))
        return found

    @property
    def every_seed(self) -> list[int]:
        """The seeds of all runs asked for, in order."""
        return self.seeds if self.seeds is not None else [1 if self.seed is None else self.seed]

    @property
    def time_limit(self) -> float | None:
        """Seconds per run: as given, or the default where nothing else would end the run."""
        if self.seconds is None and self.calls is None and self.total_sweeps is None:
            return DEFAULT_SECONDS
        return self.seconds


class SamplingSettings(SearchSettings):
    """Everything that ``sample`` can be told."""

    temperatures: Annotated[list[AboveZero], BeforeValidator(_number_list)] = Field(
        [1.0],
        description="The temperature in energy units, or several between which replicas trade places: 2.0,2.27,3.0.",
    )
    rounds: int = Field(2000, ge=2, description="Rounds that are measured.")
    burn_in: int | None = Field(
        None, ge=0, description="Rounds thrown away before; a fifth of those measured if left out."
    )
    copies: int = Field(2, ge=1, le=1024, description="Independent replicas at every temperature; the overlap needs 2.")

    @property
    def burn_in_rounds(self) -> int:
        """Rounds thrown away."""
        return self.rounds // 5 if self.burn_in is None else self.burn_in
