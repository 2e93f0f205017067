"""Reading settings and checking them all at once.

What is given on the command line or as a keyword overrides the file. All mistakes are reported together, each with the
place it stands in and, for an unknown name, the nearest known one.
"""

from __future__ import annotations

import difflib
import tomllib
import types
import typing
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Annotated, Any, TypeVar

from pydantic import ValidationError

from patchwalk.settings import ProblemSettings

Model = TypeVar("Model", bound=ProblemSettings)


class SettingsError(ValueError):
    """One or more settings that cannot be used, a line each."""

    def __init__(self, complaints: list[str]) -> None:
        self.complaints = complaints
        super().__init__("\n".join(complaints))


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
    for key in ("start", "run", "answer", "field_file"):
        if isinstance(table.get(key), str):
            table[key] = path.parent / table[key]
    return path.parent / problem, table


def checked_settings(
    model: type[Model],
    table: Mapping[str, Any],
    given: Mapping[str, Any],
    place: str,
    spelled: str = "{}",
    checks: Mapping[str, Callable[[Any], object]] | None = None,
) -> Model:
    """Settings from a file's ``table`` overridden by those ``given``.

    ``place`` names the file; ``spelled`` is how a given key is written: ``--{}`` on a command line, where every value
    is text, ``{}`` in Python. ``checks`` are functions that raise ``ValueError`` for a value only they understand.
    Raises :class:`SettingsError` with every complaint at once.
    """
    rivals = {"seed": "seeds", "seeds": "seed"}
    overridden = {rivals[key] for key in given if key in rivals}
    values = {**{key: value for key, value in table.items() if key not in overridden}, **given}

    def where(key: str) -> str:
        if key in table and key not in given:
            return f"{place}: {key}"
        return spelled.format(key.replace("_", "-") if "-" in spelled else key)

    text = set(given) if "-" in spelled else set()
    complaints = {key: _type_complaint(model, key, value, key in text) for key, value in values.items()}
    for key, check in (checks or {}).items():
        if values.get(key) is not None and not complaints[key]:
            complaints[key] = _complaint_of(check, values[key])
    complaints = {key: f"{where(key)}: {sentence}" for key, sentence in complaints.items() if sentence}
    settings = _validated(
        model, {key: value for key, value in values.items() if key not in complaints}, complaints, where
    )
    together = [f"{where(key)}: {sentence}" for key, sentence in settings.conflicts()]
    if complaints or together:
        raise SettingsError([*complaints.values(), *together])
    return settings


def _complaint_of(check: Callable[[Any], object], value: Any) -> str:
    try:
        check(value)
    except ValueError as error:
        return str(error)
    return ""


def _validated(
    model: type[Model], values: Mapping[str, Any], complaints: dict[str, str], where: Callable[[str], str]
) -> Model:
    """Settings from the values that are good; a complaint about every other one is added."""
    try:
        return model.model_validate(values)
    except ValidationError as error:
        for detail in error.errors():
            key = str(detail["loc"][0])
            complaints.setdefault(key, f"{where(key)}: {_in_words(model, key, detail)}")
    return model.model_validate({key: value for key, value in values.items() if key not in complaints})


def _type_complaint(model: type[ProblemSettings], key: str, value: object, is_text: bool) -> str:
    """What no conversion should forgive: true for a number, and in a file or in Python text for a number."""
    kind = plain_type(model, key)
    if kind not in (int, float):
        return ""
    if isinstance(value, bool) or (isinstance(value, str) and not is_text):
        return f"must be a {'whole ' if kind is int else ''}number (given: {value!r})"
    return ""


def plain_type(model: type[ProblemSettings], key: str) -> Any:
    """The type of a setting without ``| None``; None for an unknown one."""
    if key not in model.model_fields:
        return None
    inner = model.model_fields[key].annotation
    if typing.get_origin(inner) in (types.UnionType, typing.Union):
        inner = next(part for part in typing.get_args(inner) if part is not type(None))
    return typing.get_args(inner)[0] if typing.get_origin(inner) is Annotated else inner


def _in_words(model: type[ProblemSettings], key: str, detail: Any) -> str:
    """One of pydantic's complaints, in words for people who never heard of it."""
    if detail["type"] == "extra_forbidden":
        return f"there is no such setting{_nearest(key, list(model.model_fields))}"
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
        hint = _nearest(str(detail["input"]), [str(word) for word in typing.get_args(plain_type(model, key))])
    given = str(detail["input"]) if plain_type(model, key) in (int, float) else repr(detail["input"])
    return f"{message[0].lower()}{message[1:]} (given: {given}){hint}"


def _nearest(word: str, known: list[str]) -> str:
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    return f"; did you mean {close[0]!r}?" if close else ""
