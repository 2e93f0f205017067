"""How a subsolver is spelled and found: ``NAME``, ``NAME,key=value,key=value``, ``@file.toml`` or ``module:Object``.

Values are TOML; commas inside brackets or quotes do not split; a bare word is a string. The same spelling works on
every command, in settings files and in Python. Other packages add theirs under the entry-point group
``patchwalk.subsolvers``.
"""

from __future__ import annotations

import dataclasses
import difflib
import importlib
import tomllib
from collections.abc import Callable, Mapping
from importlib.metadata import entry_points
from pathlib import Path
from typing import Any, NamedTuple, cast

from patchwalk.subsolvers.contract import Subsolver

OURS: Mapping[str, str] = {
    "walk": "patchwalk.subsolvers.walk:Walk",
    "forward": "patchwalk.subsolvers.anneal:Forward",
    "reverse": "patchwalk.subsolvers.anneal:Reverse",
    "blend": "patchwalk.subsolvers.anneal:Blend",
    "enumeration": "patchwalk.subsolvers.enumeration:Enumeration",
    "elimination": "patchwalk.subsolvers.elimination:Elimination",
    "metropolis": "patchwalk.subsolvers.metropolis:Metropolis",
    "tabu": "patchwalk.subsolvers.tabu:Tabu",
    "descent": "patchwalk.subsolvers.descent:Descent",
    "external": "patchwalk.subsolvers.external:External",
    "uniform": "patchwalk.subsolvers.uniform:Uniform",
}
ENTRY_POINT_GROUP = "patchwalk.subsolvers"


class Number(NamedTuple):
    """What a parameter annotated as a number takes."""

    types: tuple[type, ...]
    word: str


NUMBERS = {"int": Number((int,), "a whole number"), "float": Number((int, float), "a number")}


class SubsolverError(ValueError):
    """A subsolver that cannot be found or built; the message names it and the way out, a line for each mistake."""


class NotReadyError(SubsolverError):
    """A subsolver that was spelled right but could not get ready to work."""


def subsolver_names() -> list[str]:
    """Every name that :func:`make_subsolver` knows, ours first."""
    return [*OURS, *sorted(point.name for point in entry_points(group=ENTRY_POINT_GROUP))]


def make_subsolver(name: str, **parameters: Any) -> Subsolver:
    """The subsolver of this name with these parameters.

    Raises :class:`SubsolverError` for an unknown name or parameter (with the nearest one) or a value out of range.

    >>> make_subsolver("uniform", shots=2).name
    'uniform'
    """
    factory = _factory(name)
    complaints = _complaints(name, factory, parameters)
    if complaints:
        raise SubsolverError("\n".join(complaints))
    try:
        made = factory(**parameters)
    except (TypeError, ValueError) as error:
        message = str(error)
        raise SubsolverError(message if message.startswith(f"{name}: ") else f"{name}: {message}") from error
    if not isinstance(made, Subsolver):
        raise SubsolverError(
            f"{name} made a {type(made).__name__}, which is no subsolver; it needs name, max_spins, deterministic, "
            "balance, prepare, forecast and propose"
        )
    return made


def subsolver_from(spelling: str | Mapping[str, Any] | Subsolver, folder: Path | None = None) -> Subsolver:
    """The subsolver written as text, as a table with a ``name``, or made; ``@file.toml`` lies in ``folder``."""
    if isinstance(spelling, str):
        spelling = parse_spelling(spelling, folder)
    if isinstance(spelling, Mapping):
        table = dict(spelling)
        name = table.pop("name", None)
        if not isinstance(name, str):
            raise SubsolverError(f"a subsolver table needs a name, one of: {', '.join(subsolver_names())}")
        return make_subsolver(name, **table)
    return spelling


def parse_spelling(text: str, folder: Path | None = None) -> dict[str, Any]:
    """The table behind a spelling.

    >>> parse_spelling("walk,shots=4,time_in_hops=[0.5, 1],start=uniform")
    {'name': 'walk', 'shots': 4, 'time_in_hops': [0.5, 1], 'start': 'uniform'}
    """
    first, *rest = _split(text)
    table: dict[str, Any] = {"name": first}
    if first.startswith("@"):
        path = (folder or Path()) / first[1:]
        try:
            table = tomllib.loads(path.read_text(encoding="utf-8"))
        except OSError as error:
            raise SubsolverError(
                f"{path}: {error.strerror or error}; give a TOML with a name and parameters"
            ) from error
        except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
            raise SubsolverError(f"{path}: not a TOML file: {error}") from error
    seen: set[str] = set()
    for part in rest:
        key, equals, value = part.partition("=")
        key = key.strip()
        if not equals or not key.isidentifier() or key == "name":
            raise SubsolverError(f"{text!r}: {part!r} is not key=value; write NAME,key=value,key=value")
        if key in seen:
            raise SubsolverError(f"{text!r}: {key} is given twice; keep one")
        seen.add(key)
        table[key] = _value(value.strip())
    return table


def spelled(subsolver: Subsolver) -> str:
    """The shortest spelling that makes this subsolver again."""
    parts = [subsolver.name]
    if dataclasses.is_dataclass(subsolver):
        for field in dataclasses.fields(subsolver):
            value = getattr(subsolver, field.name)
            if field.init and value != field.default:
                parts.append(f"{field.name}={_written(value)}")
    return ",".join(parts)


def _factory(name: str) -> Callable[..., Any]:
    target = OURS.get(name)
    if target is None and ":" in name:
        target = name
    if target is None:
        for point in entry_points(group=ENTRY_POINT_GROUP):
            if point.name == name:
                return cast(Callable[..., Any], point.load())
        raise SubsolverError(f"there is no subsolver {name!r}{_nearest(name, subsolver_names())}")
    module, _, attribute = target.partition(":")
    try:
        return cast(Callable[..., Any], getattr(importlib.import_module(module), attribute))
    except (ImportError, AttributeError, ValueError) as error:
        raise SubsolverError(f"{name}: {error}; write module:Object, with the module on the Python path") from error


def _complaints(name: str, factory: Callable[..., Any], parameters: Mapping[str, Any]) -> list[str]:
    """Everything that can be said against the parameters before the subsolver is made, where it is a dataclass."""
    if not dataclasses.is_dataclass(factory):
        return []
    known = {field.name: field for field in dataclasses.fields(factory) if field.init}
    found = []
    for key, value in parameters.items():
        wanted = NUMBERS.get(str(known[key].type)) if key in known else None
        if key not in known:
            found.append(f"{name}: there is no parameter {key!r}{_nearest(key, list(known))}")
        elif wanted and (isinstance(value, bool) or not isinstance(value, wanted.types)):
            found.append(f"{name}: {key} is {value!r}; give {wanted.word}")
    found.extend(
        f"{name}: needs {key}=..."
        for key, field in known.items()
        if key not in parameters and field.default is field.default_factory is dataclasses.MISSING
    )
    return found


def _nearest(word: str, known: list[str]) -> str:
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    hint = f"; did you mean {close[0]!r}?" if close else ";"
    return f"{hint} There are: {', '.join(known) or 'none'}"


def _split(text: str) -> list[str]:
    """The text cut at commas that stand outside brackets and quotes."""
    parts, depth, quote = [""], 0, ""
    for letter in text:
        if quote:
            quote = "" if letter == quote else quote
        elif letter in "'\"":
            quote = letter
        elif letter in "[{":
            depth += 1
        elif letter in "]}":
            depth -= 1
        elif letter == "," and depth == 0:
            parts.append("")
            continue
        parts[-1] += letter
    if quote or depth:
        raise SubsolverError(f"{text!r}: a bracket or quote is not closed")
    return [part.strip() for part in parts]


def _value(text: str) -> Any:
    try:
        return tomllib.loads(f"value = {text}")["value"]
    except tomllib.TOMLDecodeError:
        if text and all(letter.isalnum() or letter in "_-.:/" for letter in text):
            return text
        raise SubsolverError(f"{text!r} is neither a TOML value nor a bare word; put text into quotes") from None


def _written(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(_written(item) for item in value)}]"
    if isinstance(value, str) and not value.replace("_", "").isalnum():
        return '"' + value.replace("\\", "\\\\").replace('"', '\\"') + '"'
    return str(value)
