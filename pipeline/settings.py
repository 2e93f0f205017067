"""Settings: one table of names, reachable alike from a TOML file, the command line and Python.

A setting called ``long_name`` here is the TOML key ``long_name``, the keyword ``long_name`` and the option
``--long-name``. What is given on the command line or as a keyword overrides the file. All mistakes are reported at
once, each with the place it stands in and, for an unknown name, the nearest known one.
"""

from __future__ import annotations

import difflib
import tomllib
import types
import typing
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError

from patchwalk.subsolvers.contract import Subsolver

DEFAULT_SECONDS = 60.0
DEFAULT_CLUSTER_SIZE = 12


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


def _spelled_subsolver(value: object) -> object:
    """A subsolver as text, as a table or already made; anything else is refused."""
    if not isinstance(value, str | Mapping | Subsolver):
        raise ValueError("write it as NAME,key=value,... , as a table with a name, or give a subsolver object")
    return value


def _path(value: object) -> object:
    """A path that is not empty."""
    if value == "":
        raise ValueError("is empty; give the name of a file")
    return value


FileName = Annotated[Path, BeforeValidator(_path)]
Seed = Annotated[int, Field(ge=0, lt=2**63)]


class SolveSettings(BaseModel):
    """Everything that ``solve`` can be told."""

    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True, strict=False)

    kind: Literal["ising", "maxcut", "beacons"] | None = Field(
        None, description="What the file's numbers mean: ising, maxcut or beacons."
    )
    subsolver: Annotated[Any, BeforeValidator(_spelled_subsolver)] = Field(
        "walk",
        description="Who answers the clusters: NAME, NAME,key=value,... , @file.toml or module:Object; "
        "patchwalk backends lists the names.",
    )
    cluster_size: int | None = Field(
        None, ge=1, description=f"Spins in each cluster; {DEFAULT_CLUSTER_SIZE} if the problem has as many."
    )
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
    start: FileName | None = Field(
        None, description="A file with a start configuration: +1 and -1 in the input's order, or what --json printed."
    )
    seed: Seed | None = Field(
        None, description="The seed of the run; same seed and counted budget, same bits. Default 1."
    )
    seeds: Annotated[list[Seed], BeforeValidator(_seed_list)] | None = Field(
        None, description="Several runs in one file, as 1..5 or 1,4,9."
    )
    run: FileName | None = Field(
        None, description="Where the run file goes; by default patchwalk-NAME-DATE-TIME.sqlite in the current folder."
    )
    record: Literal["auto", "all", "share"] = Field(
        "auto",
        description="Which calls get a row in the run file: all, a seeded share with exact tallies of the rest, or "
        "auto (all, unless a call is very cheap).",
    )
    hot: float = Field(
        1.0, ge=0, allow_inf_nan=False, description="Temperature at the beginning, in units of the typical local field."
    )  # fmt: skip
    cold: float = Field(0.05, ge=0, allow_inf_nan=False, description="Temperature at the end, in the same units.")
    coolings: int = Field(
        3, ge=1, le=20, description="How often it falls from hot to cold, every time over twice as long as before."
    )
    failures: int = Field(100, ge=1, description="Give up after so many failed calls in a row.")

    def conflicts(self) -> list[tuple[str, str]]:
        """Settings that are each possible but not together: the setting to look at first, and a sentence."""
        found = []
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


def read_settings(path: Path) -> tuple[Path, dict[str, Any]]:
    """The input named in a TOML file and its settings, paths made relative to the file.

    Raises :class:`SettingsError` for a file that is missing, not TOML, or names no input.
    """
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        reason = "there is no such file" if isinstance(error, FileNotFoundError) else error.strerror or error
        raise SettingsError([f"{path}: {reason}"]) from error
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
    """Settings from a file's ``table`` overridden by those ``given``.

    ``place`` names the file; ``spelled`` is how a given key is written: ``--{}`` on a command line, where every value
    is text, ``{}`` in Python. Raises :class:`SettingsError` with every complaint at once.
    """
    rivals = {"seed": "seeds", "seeds": "seed"}
    overridden = {rivals[key] for key in given if key in rivals}
    values = {**{key: value for key, value in table.items() if key not in overridden}, **given}

    def where(key: str) -> str:
        if key in table and key not in given:
            return f"{place}: {key}"
        return spelled.format(key.replace("_", "-") if "-" in spelled else key)

    text = set(given) if "-" in spelled else set()
    complaints = {key: _type_complaint(key, value, key in text) for key, value in values.items()}
    complaints = {key: f"{where(key)}: {sentence}" for key, sentence in complaints.items() if sentence}
    settings = _validated({key: value for key, value in values.items() if key not in complaints}, complaints, where)
    together = [f"{where(key)}: {sentence}" for key, sentence in settings.conflicts()]
    if complaints or together:
        raise SettingsError([*complaints.values(), *together])
    return settings


def _validated(values: Mapping[str, Any], complaints: dict[str, str], where: Callable[[str], str]) -> SolveSettings:
    """Settings from the values that are good; a complaint about every other one is added."""
    try:
        return SolveSettings.model_validate(values)
    except ValidationError as error:
        for detail in error.errors():
            key = str(detail["loc"][0])
            complaints.setdefault(key, f"{where(key)}: {_in_words(key, detail)}")
    return SolveSettings.model_validate({key: value for key, value in values.items() if key not in complaints})


def _type_complaint(key: str, value: object, is_text: bool) -> str:
    """What no conversion should forgive: true for a number, and in a file or in Python text for a number."""
    kind = plain_type(key)
    if kind not in (int, float):
        return ""
    if isinstance(value, bool) or (isinstance(value, str) and not is_text):
        return f"must be a {'whole ' if kind is int else ''}number (given: {value!r})"
    return ""


def plain_type(key: str) -> Any:
    """The type of a setting without ``| None``; None for an unknown one."""
    if key not in SolveSettings.model_fields:
        return None
    inner = SolveSettings.model_fields[key].annotation
    if typing.get_origin(inner) in (types.UnionType, typing.Union):
        inner = next(part for part in typing.get_args(inner) if part is not type(None))
    return typing.get_args(inner)[0] if typing.get_origin(inner) is Annotated else inner


def _in_words(key: str, detail: Any) -> str:
    """One of pydantic's complaints, in words for people who never heard of it."""
    if detail["type"] == "extra_forbidden":
        return f"there is no such setting{_nearest(key, list(SolveSettings.model_fields))}"
    message = detail["msg"].removeprefix("Value error, ")
    for theirs, ours in (
        ("Input should be a valid integer, unable to parse string as an integer", "must be a whole number"),
        ("Input should be a valid integer, got a number with a fractional part", "must be a whole number"),
        ("Input should be a valid integer", "must be a whole number"),
        ("Input should be a valid number, unable to parse string as a number", "must be a number"),
        ("Input should be a valid number", "must be a number"),
        ("Input should be", "must be"),
    ):
        if message.startswith(theirs):
            message = ours + message[len(theirs) :]
            break
    hint = ""
    if detail["type"] == "literal_error":
        hint = _nearest(str(detail["input"]), [str(word) for word in typing.get_args(plain_type(key))])
    given = str(detail["input"]) if plain_type(key) in (int, float) else repr(detail["input"])
    return f"{message[0].lower()}{message[1:]} (given: {given}){hint}"


def _nearest(word: str, known: list[str]) -> str:
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    return f"; did you mean {close[0]!r}?" if close else ""
