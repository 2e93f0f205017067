"""Settings: one table of names, reachable alike from a TOML file, the command line and Python.

A setting called ``long_name`` here is the TOML key ``long_name``, the keyword ``long_name`` and the option
``--long-name``. What is given on the command line or as a keyword overrides the file. All mistakes are reported at
once, each with the place it stands in and, for an unknown name, the nearest known one.
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, model_validator

DEFAULT_SECONDS = 60.0


class SettingsError(ValueError):
    """One or more settings that cannot be used, a line each."""

    def __init__(self, complaints: list[str]) -> None:
        self.complaints = complaints
        super().__init__("\n".join(complaints))


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


Seed = Annotated[int, Field(ge=0, lt=2**63)]


class SolveSettings(BaseModel):
    """Everything that ``solve`` can be told."""

    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True, strict=False)

    kind: str | None = Field(None, description="What the file's numbers mean: ising, maxcut or beacons.")
    subsolver: Any = Field(
        "walk",
        description="Who answers the clusters: NAME, NAME,key=value,... , @file.toml or module:Object "
        "(ours: walk, enumeration, metropolis, uniform).",
    )
    cluster_size: int = Field(12, ge=1, description="Spins in each cluster.")
    rule: Literal["ball", "scattered", "strip"] = Field(
        "ball",
        description="Which spins make a cluster: ball (a breadth-first ball round a random spin), scattered, or strip "
        "(long and thin enough for elimination).",
    )
    clusters_per_round: int = Field(
        64, ge=1, le=65536, description="At most this many clusters a round, no two of which touch."
    )
    sweeps: int = Field(2, ge=0, description="Metropolis sweeps of the whole problem after each round; 0 for none.")
    seconds: float | None = Field(
        None, gt=0, allow_inf_nan=False,
        description=f"Stop after so many seconds, compiling apart; {DEFAULT_SECONDS:g} where no other budget is given.",
    )  # fmt: skip
    calls: int | None = Field(None, ge=1, description="Stop after so many cluster calls.")
    total_sweeps: int | None = Field(None, ge=1, description="Stop after so many sweeps.")
    target: float | None = Field(
        None, allow_inf_nan=False, description="Stop at an objective (the cut for maxcut) at least as good as this."
    )
    start: Path | None = Field(
        None, description="A file with a start configuration: +1 and -1 in the input's order, or what --json printed."
    )
    seed: Seed | None = Field(
        None, description="The seed of the run; same seed and counted budget, same bits. Default 1."
    )
    seeds: Annotated[list[Seed], BeforeValidator(_seed_list)] | None = Field(
        None, description="Several runs in one file, as 1..5 or 1,4,9."
    )
    run: Path | None = Field(
        None, description="Where the run file goes; by default patchwalk-NAME-DATE-TIME.sqlite in the current folder."
    )
    record: Literal["auto", "all", "share"] = Field(
        "auto",
        description="Which calls get a row in the run file: all, a seeded share with exact tallies of the rest, or "
        "auto (all, unless a call is very cheap).",
    )
    hot: float = Field(
        0.5, ge=0, allow_inf_nan=False, description="Temperature at the beginning, in units of the typical local field."
    )  # fmt: skip
    cold: float = Field(0.05, ge=0, allow_inf_nan=False, description="Temperature at the end, in the same units.")
    failures: int = Field(100, ge=1, description="Give up after so many failed calls in a row.")

    @model_validator(mode="after")
    def _belong_together(self) -> Self:
        if self.seed is not None and self.seeds is not None:
            raise ValueError("seed and seeds cannot both be given; seeds = [7] is the same as seed = 7")
        if self.seeds is not None and not self.seeds:
            raise ValueError("seeds is empty; give at least one")
        if self.seeds is not None and len(set(self.seeds)) < len(self.seeds):
            raise ValueError("seeds holds a seed twice; the two runs would be the same")
        if self.cold > self.hot:
            raise ValueError(
                f"cold ({self.cold:g}) is above hot ({self.hot:g}); the temperature falls from hot to cold"
            )
        if self.total_sweeps is not None and self.sweeps == 0:
            raise ValueError("total_sweeps is given but sweeps is 0, so that it would never be reached")
        return self

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


def read_settings(path: Path) -> tuple[Path, dict[str, Any]]:
    """The input named in a TOML file and its settings, paths made relative to the file.

    Raises :class:`SettingsError` for a file that is missing, not TOML, or names no input.
    """
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise SettingsError([f"{path}: {error.strerror or error}"]) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SettingsError([f"{path}: not a TOML file: {error}"]) from error
    problem = table.pop("input", None)
    if not isinstance(problem, str):
        raise SettingsError([f'{path}: needs a key input = "FILE", the problem to solve'])
    for key in ("start", "run"):
        if isinstance(table.get(key), str):
            table[key] = path.parent / table[key]
    return path.parent / problem, table


def checked_settings(
    table: Mapping[str, Any], given: Mapping[str, Any], place: str, spelled: str = "{}"
) -> SolveSettings:
    """Settings from a file's ``table`` overridden by those ``given``; ``spelled`` is how a given key is written
    (``--{}``).

    Raises :class:`SettingsError` with every complaint at once.
    """
    rivals = {"seed": "seeds", "seeds": "seed"}
    overridden = {rivals[key] for key in given if key in rivals}
    kept = {key: value for key, value in table.items() if key not in overridden}
    try:
        return SolveSettings.model_validate({**kept, **given})
    except ValidationError as error:
        complaints = []
        for detail in error.errors():
            key = str(detail["loc"][0]) if detail["loc"] else ""
            complaints.append(_complaint(detail, key, place if key in table and key not in given else "", spelled))
        raise SettingsError(complaints) from error


def _complaint(detail: Any, key: str, place: str, spelled: str) -> str:
    where = f"{place}: {key}" if place else spelled.format(key.replace("_", "-") if "-" in spelled else key)
    if detail["type"] == "extra_forbidden":
        close = difflib.get_close_matches(key, SolveSettings.model_fields, n=1, cutoff=0.5)
        hint = f"; did you mean {close[0]!r}?" if close else ""
        return f"{where}: there is no such setting{hint}"
    message = detail["msg"].removeprefix("Value error, ")
    if not key:
        return f"{place}: {message}" if place else message
    return f"{where}: {message[0].lower()}{message[1:]} (given: {detail['input']!r})"
