"""Text files line by line, with errors that name the line: what every reader of a problem stands on."""

from __future__ import annotations

import gzip
import json
import os
import zlib
from array import array
from collections.abc import Callable, Generator, Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from itertools import chain
from typing import IO, NoReturn

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem, ProblemError

Lines = Iterator[tuple[int, str]]
PathLike = str | os.PathLike[str]

LARGEST_NUMBER = 1e100  # squares and sums of millions of such numbers are still finite
SETTINGS = ("kind", "offset", "names")


def fail(path: PathLike, line: int | None, message: str) -> NoReturn:
    """Raise the :class:`ProblemError` that names file and line."""
    place = f", line {line}" if line else ""
    raise ProblemError(f"{os.fspath(path)}{place}: {message}")


def shortened(text: str) -> str:
    """What stood in a file, cut to a length that a message can bear."""
    return text if len(text) <= 40 else text[:37] + "..."


def quoted(text: str) -> str:
    """The same, in quotes."""
    return repr(shortened(text))


def plain(text: str) -> bool:
    """Whether a number is written as elsewhere: only Python reads ``1_000`` and the like."""
    return text.isascii() and "_" not in text


def numbered_lines(path: PathLike) -> Generator[tuple[int, str], None, None]:
    """The lines of a text file, ``.gz`` or plain, with their numbers from 1; raises :class:`ProblemError`."""
    number = 0
    try:
        with _opened(path) as stream:
            for number, text in enumerate(stream, 1):
                if not text.isascii() and any("\udc80" <= letter <= "\udcff" for letter in text):
                    fail(path, number, "not UTF-8 text; save the file as UTF-8")
                yield number, text
    except FileNotFoundError:
        fail(path, None, "there is no such file")
    except IsADirectoryError:
        fail(path, None, "this is a folder; name a file in it")
    except (gzip.BadGzipFile, EOFError, zlib.error) as error:
        fail(path, number + 1, f"the gzip data are damaged or cut short ({error}); compress them again")
    except OSError as error:
        fail(path, None, f"cannot be read: {error.strerror or error}")


def _opened(path: PathLike) -> IO[str]:
    name = os.fspath(path)
    if "\0" in name:
        raise ProblemError(f"{name!r} cannot be the name of a file: it holds a zero byte")
    # bytes that are not UTF-8 become lone surrogates, so that the error can name their line
    if name.endswith(".gz"):
        return gzip.open(name, "rt", encoding="utf-8-sig", errors="surrogateescape")
    return open(name, encoding="utf-8-sig", errors="surrogateescape")


@dataclass(frozen=True)
class Source:
    """A file with its leading comments read: ``settings`` in them (text, line), ``lines`` still to come."""

    path: PathLike
    settings: Mapping[str, tuple[str, int]]
    lines: Lines

    def fail(self, line: int | None, message: str) -> NoReturn:
        """Raise the :class:`ProblemError` that names file and line."""
        fail(self.path, line, message)

    def number(self, text: str, line: int, what: str) -> float:
        """A finite number from a cell; raises :class:`ProblemError`."""
        try:
            value = float(text)
        except ValueError:
            value = np.nan
        if not (-LARGEST_NUMBER <= value <= LARGEST_NUMBER and plain(text)):
            self.fail(line, f"{what} {quoted(text)} is not a finite number such as 1, -0.5 or 2e-3, up to 1e100")
        return value

    def offset(self, default: float) -> float:
        """The constant of the energy that a comment states, or the default."""
        if "offset" not in self.settings:
            return default
        text, line = self.settings["offset"]
        return self.number(text, line, "offset")

    def names(self, size: int) -> tuple[str, ...] | None:
        """The names of the spins that a comment states, or None."""
        if "names" not in self.settings:
            return None
        text, line = self.settings["names"]
        try:
            names = json.loads(text)
        except (ValueError, RecursionError):
            names = None
        if not isinstance(names, list) or not all(isinstance(name, str) for name in names):
            self.fail(line, f'names {quoted(text)} is not a list such as ["a", "b"] (JSON)')
        if len(names) != size:
            self.fail(line, f"{len(names)} names for {size} vertices; give one each")
        return tuple(names)


def open_source(path: PathLike, lines: Lines, is_comment: Callable[[str], bool]) -> Source:
    """The file with its leading comments read; raises :class:`ProblemError` where nothing follows them."""
    settings: dict[str, tuple[str, int]] = {}
    for number, text in lines:
        if text.strip() and not is_comment(text):
            return Source(path, settings, chain([(number, text)], lines))
        key, _, value = text.strip().lstrip("#% \t").partition("=")
        if key.strip() in SETTINGS:
            settings[key.strip()] = value.strip(), number
    fail(path, None, "the file is empty; expected a first line 'n m' or, in a .csv, rows of pairs")


class Pairs:
    """Pairs as they are read, in flat arrays: ``heads`` and ``tails`` from 0, ``weights`` empty if all are 1."""

    def __init__(self, source: Source, kind: str) -> None:
        self.source, self.kind = source, kind
        self.heads, self.tails, self.weights = array("q"), array("q"), array("d")
        self.notes: list[str] = []

    def refuse_loop(self, line: int, name: str) -> NoReturn:
        """The error for a pair of a vertex with itself, where the kind has no fields."""
        self.source.fail(
            line, f"vertex {name} is joined to itself, but kind {self.kind} has no fields; remove the line"
        )

    def problem(self, size: int, names: Iterable[str] | None = None) -> Problem:
        """The problem: pairs of a spin with itself are its fields, repeated pairs are summed with a note."""
        heads, tails = np.array(self.heads, np.int64), np.array(self.tails, np.int64)
        weights = np.array(self.weights, np.float64) if self.weights else np.ones(len(heads))
        loops = heads == tails
        fields = np.bincount(heads[loops], weights[loops], minlength=size)
        keys = np.minimum(heads, tails) * size + np.maximum(heads, tails)
        self._note_repeats(keys[~loops], "pair", "weights")
        self._note_repeats(keys[loops], "field", "values")
        problem = Problem.from_arrays(
            heads[~loops],
            tails[~loops],
            weights[~loops],
            size=size,
            fields=fields,
            kind=self.kind,
            names=names,
            notes=self.notes,
        )
        if not problem.coupling_count and not np.any(problem.fields):
            self.source.fail(None, "there is nothing to decide: no coupling and no field differs from 0")
        return replace(problem, offset=self.source.offset(problem.offset))

    def _note_repeats(self, keys: npt.NDArray[np.int64], what: str, numbers: str) -> None:
        keys = np.sort(keys)
        repeats = len(np.unique(keys[1:][keys[1:] == keys[:-1]]))
        if repeats == 1:
            self.notes.append(f"1 {what} occurs more than once; its {numbers} were summed")
        elif repeats:
            self.notes.append(f"{repeats} {what}s occur more than once; their {numbers} were summed")
