"""Problems and start configurations read from files, and problems written to them.

Three forms, told apart by name and kind, each plain or gzipped (``.gz``):

* a weighted edge list: a first line ``n m``, then m lines ``i j w`` with vertices counted from 1. A third column
  is there on every line or on none (weight 1). ``i i w`` is a field where the kind has fields. Lines that begin
  with ``#`` or ``%`` are comments, and so is what follows a ``#``;
* ``.csv``: a table of pairs of names, see :mod:`patchwalk.problem.tables`;
* ``.csv`` of kind ``beacons``, see :mod:`patchwalk.problem.beacons`.

Leading comments may state ``# kind = ising``, ``# offset = 1.5`` (the constant of the energy) and
``# names = ["a", "b"]`` (JSON); :func:`write_problem` writes whatever a file needs to be read back as the same
problem.
"""

from __future__ import annotations

import contextlib
import gzip
import io
import json
import os
import re
from collections.abc import Iterable, Iterator
from typing import IO, Any, NoReturn

import numpy as np
import numpy.typing as npt
from scipy import sparse

from patchwalk.problem import tables
from patchwalk.problem.ising import KINDS, Problem, ProblemError, known_kind
from patchwalk.problem.sources import (
    LARGEST_NUMBER,
    Pairs,
    PathLike,
    Source,
    fail,
    numbered_lines,
    open_source,
    quoted,
    shortened,
)

SPARE_VERTICES = 1_000_000  # vertices that no line mentions are legal, but ten for each that is are a slip
VERTICES_PER_MENTION = 10
MOST_NUMBERED = 2**31 - 1
SPIN_WORDS = {"+1": 1, "1": 1, "-1": -1}


def read_problem(path: PathLike, kind: str | None = None) -> Problem:
    """The problem that a file holds; ``kind`` says what its numbers mean, unless a leading comment does.

    The forms are those of this module. Pairs that occur more than once are summed, with a note. Raises
    :class:`ProblemError` with file and line for whatever cannot be read, or does not make a problem.
    """
    is_table = _is_table(path)
    with contextlib.closing(numbered_lines(path)) as lines:
        source = open_source(path, lines, tables.is_comment if is_table else _is_comment)
        kind = _settle_kind(source, kind)
        if kind != "beacons":
            return tables.read_table(source, kind) if is_table else _read_edges(source, kind)
        if not is_table:
            source.fail(None, "kind beacons is read from .csv (or .csv.gz); rename the file if it is one")
        from patchwalk.problem.beacons import read_beacons

        return read_beacons(source)


def _is_table(path: PathLike) -> bool:
    return os.fspath(path).removesuffix(".gz").lower().endswith(".csv")


def _is_comment(text: str) -> bool:
    return text.lstrip()[:1] in ("#", "%")


def _settle_kind(source: Source, given: str | None) -> str:
    """The one kind that caller and file agree on."""
    if given is not None:
        known_kind(given)
    if "kind" not in source.settings:
        if given is None:
            listed = ", ".join(KINDS)
            source.fail(None, f'what do its numbers mean? Say --kind maxcut or kind="maxcut"; one of: {listed}')
        return given
    stated, line = source.settings["kind"]
    if given not in (None, stated):
        source.fail(line, f"the file states kind = {shortened(stated)}, but {given} was asked for; drop one")
    if stated not in KINDS:
        source.fail(line, f"kind {quoted(stated)} is not known; it is one of: {', '.join(KINDS)}")
    return stated


def _cells(source: Source) -> Iterator[tuple[int, list[str]]]:
    for number, text in source.lines:
        if "#" in text:
            text = text[: text.index("#")]
        cells = text.split()
        if cells and cells[0][0] != "%":
            if "_" in text or not text.isascii():  # which int() and float() would take
                source.fail(number, f"expected numbers in plain digits, but it reads {quoted(text.strip())}")
            yield number, cells


def _read_header(source: Source, line: int, cells: list[str]) -> tuple[int, int]:
    try:
        size, count = int(cells[0]), int(cells[1])
        any(map(float, cells[2:]))  # further numbers are tolerated, words are not
    except (ValueError, IndexError):
        seen = quoted(" ".join(cells))
        source.fail(line, f"expected 'n m', the numbers of vertices and of edge lines, but it reads {seen}")
    if not 0 < size <= MOST_NUMBERED:
        source.fail(line, f"{shortened(cells[0])} vertices are promised; expected 1 to {MOST_NUMBERED}")
    if not 0 <= count <= MOST_NUMBERED:
        source.fail(line, f"{shortened(cells[1])} edge lines are promised; expected 0 to {MOST_NUMBERED}")
    return size, count


def _read_edges(source: Source, kind: str) -> Problem:
    rows = _cells(source)
    line, cells = next(rows)
    header, (size, promised) = line, _read_header(source, line, cells)
    pairs = Pairs(source, kind)
    heads, tails, weights = pairs.heads, pairs.tails, pairs.weights
    width, weight = 0, 1.0
    for line, cells in rows:
        if len(heads) == promised:
            source.fail(line, f"line {header} promises {promised} edge lines, here is one more; correct m")
        if len(cells) != width:
            width = _settle_width(source, line, cells, width)
        try:
            head, tail = int(cells[0]), int(cells[1])
            if width == 3:
                weight = float(cells[2])
        except ValueError:
            _explain(source, line, cells, size, header)
        if not (0 < head <= size and 0 < tail <= size and -LARGEST_NUMBER <= weight <= LARGEST_NUMBER):
            _explain(source, line, cells, size, header)
        if head == tail and kind == "maxcut":
            pairs.refuse_loop(line, cells[0])
        heads.append(head - 1)
        tails.append(tail - 1)
        if width == 3:
            weights.append(weight)
    if len(heads) < promised:
        source.fail(line, f"the file ends after {len(heads)} edge lines, line {header} promises {promised}")
    if size > SPARE_VERTICES + VERTICES_PER_MENTION * 2 * len(heads):
        source.fail(header, f"{size} vertices, of which {len(heads)} edge lines touch but few; correct n")
    if width == 2:
        pairs.notes.append("no third column: every weight is 1")
    return pairs.problem(size, source.names(size))


def _settle_width(source: Source, line: int, cells: list[str], width: int) -> int:
    """The number of columns: the first edge line decides it, all others keep to it."""
    if width or len(cells) not in (2, 3):
        expected = f"{width} columns as on the lines before" if width else "'i j' or 'i j w'"
        source.fail(line, f"expected {expected}, but it has {len(cells)}: {quoted(' '.join(cells))}")
    return len(cells)


def _explain(source: Source, line: int, cells: list[str], size: int, header: int) -> NoReturn:
    """The error for an edge line that cannot be taken."""
    for cell in cells[:2]:
        if not re.fullmatch("[+-]?[0-9]+", cell):
            source.fail(line, f"vertex {quoted(cell)} is not a whole number from 1 to {size}")
        if len(cell.lstrip("+-0")) > 20 or not 0 < int(cell) <= size:
            promise = "the first line" if header == 1 else f"line {header}"
            source.fail(
                line,
                f"vertex {shortened(cell)} does not exist; {promise} promises {size} vertices, numbered 1 to {size}",
            )
    source.number(cells[2], line, "weight")
    raise AssertionError(f"line {line} was refused without a reason")


def write_problem(problem: Problem, path: PathLike, recipe: Iterable[str] = ()) -> None:
    """Write a problem so that :func:`read_problem` gives it back bit for bit; gzipped if named ``.gz``.

    ``recipe`` lines (by default ``problem.details["recipe"]``) become leading comments. A ``maxcut`` problem is
    written with its edge weights 2J, kind ``beacons`` as its CSV, all others with couplings and fields. An existing
    file is replaced in one step, and only by a whole one. Raises :class:`ProblemError` for what a file cannot hold
    and for a path that cannot be written.
    """
    recipe = tuple(recipe) or tuple(problem.details.get("recipe", ()))
    is_beacons = problem.kind == "beacons"
    if is_beacons != _is_table(path):
        fail(
            path,
            None,
            f"kind {problem.kind} is written to a {'.csv' if is_beacons else '.txt'} file; rename it",
        )
    if is_beacons:
        from patchwalk.problem.beacons import beacon_lines

        lines = beacon_lines(problem)
    else:
        lines = _edge_lines(problem)
    comments = [f"# recipe: {line}" for entry in recipe for line in entry.splitlines()]
    with _replacing(path) as stream:
        stream.writelines(line + "\n" for line in (*comments, f"# kind = {problem.kind}"))
        stream.writelines(line + "\n" for line in lines)


def _edge_lines(problem: Problem) -> Iterator[str]:
    upper = sparse.triu(problem.matrix, 1).tocoo()
    is_maxcut = problem.kind == "maxcut"
    weights = 2 * upper.data if is_maxcut else upper.data
    sites = np.flatnonzero(problem.fields)
    if is_maxcut and len(sites):
        raise ProblemError(f"spin {sites[0]} has a field, which kind maxcut cannot hold; make it kind ising")
    if not len(weights) and not len(sites):
        raise ProblemError("the problem has no coupling and no field: a file of it would not be read")
    if max(np.abs(weights).max(initial=0), np.abs(problem.fields).max()) > LARGEST_NUMBER:
        raise ProblemError(f"a number beyond {LARGEST_NUMBER} would not be read back; rescale the problem")
    if problem.offset != (-float(upper.data.sum()) if is_maxcut else 0.0):
        yield f"# offset = {problem.offset!r}"
    if problem.names is not None:
        yield f"# names = {json.dumps(problem.names)}"
    yield f"{len(problem)} {len(weights) + len(sites)}"
    for i, j, weight in zip(upper.row.tolist(), upper.col.tolist(), weights.tolist(), strict=True):
        yield f"{i + 1} {j + 1} {_shortest(weight)}"
    for i in sites.tolist():
        yield f"{i + 1} {i + 1} {_shortest(float(problem.fields[i]))}"


def _shortest(value: float) -> str:
    """The shortest text that is read back as the same number."""
    return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(value)


@contextlib.contextmanager
def _replacing(path: PathLike) -> Iterator[IO[str]]:
    """A text stream into a file beside the target, which takes its place once it is whole."""
    folder, name = os.path.split(os.fspath(path))
    unfinished = os.path.join(folder, f".{name}.{os.getpid()}.unfinished")
    try:
        with contextlib.ExitStack() as stack:
            raw: Any = stack.enter_context(open(unfinished, "wb"))
            if name.endswith(".gz"):  # without name and time, so that equal problems give equal files
                raw = stack.enter_context(gzip.GzipFile("", "wb", fileobj=raw, mtime=0))
            yield stack.enter_context(io.TextIOWrapper(raw, encoding="utf-8", newline="\n"))
        os.replace(unfinished, path)
    except OSError as error:
        fail(path, None, f"cannot be written: {error.strerror or error}")
    finally:
        with contextlib.suppress(OSError):
            os.unlink(unfinished)


def read_start(path: PathLike, problem: Problem) -> npt.NDArray[np.int8]:
    """A start configuration, i8 (n,), from a file of +1 and -1 or the JSON that ``patchwalk solve --json`` prints.

    Values stand in the input's order, separated by spaces, commas or new lines. Raises :class:`ProblemError` for
    a wrong number of values, and for a value other than +1 or -1.
    """
    with contextlib.closing(numbered_lines(path)) as lines:
        texts = list(lines)
    if "".join(text for _, text in texts[:1]).lstrip().startswith("{"):
        spins = _spins_of_json(path, "".join(text for _, text in texts))
    else:
        spins = [
            SPIN_WORDS.get(word) or fail(path, number, f"{quoted(word)} is no spin; expected +1 or -1")
            for number, text in texts
            for word in text.replace(",", " ").split()
        ]
    if len(spins) != len(problem):
        fail(path, None, f"{len(spins)} values for {len(problem)} spins; give one value each")
    return np.array(spins, np.int8)


def _spins_of_json(path: PathLike, text: str) -> list[int]:
    try:
        spins = json.loads(text)["spins"]
    except json.JSONDecodeError as error:
        fail(path, error.lineno, f"not JSON: {error.msg}")
    except KeyError:
        fail(path, None, 'the JSON object has no entry "spins"')
    except (ValueError, RecursionError) as error:
        fail(path, None, f"not JSON that can be read: {error}")
    if not isinstance(spins, list):
        fail(path, None, '"spins" is not a list; expected a list of +1 and -1')
    for place, value in enumerate(spins):
        if type(value) is not int or value not in (1, -1):
            fail(path, None, f'entry {place} of "spins" is {quoted(str(value))}; expected +1 or -1')
    return [int(value) for value in spins]
