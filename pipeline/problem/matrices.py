"""Matrices in the Matrix Market layout: real, integer or pattern; coordinate or array; symmetric or general.

A matrix holds every pair of a graph twice, which the symmetric layout writes once: an entry is the coupling or the
weight of the pair. Kind ``qubo`` is the form x'Qx, to which both entries of a pair add. A general matrix of another
kind must equal its transpose. Comments may state settings as in edge lists: ``% kind = ising``.
"""

from __future__ import annotations

import contextlib
import json
from collections.abc import Iterable
from itertools import chain, islice
from typing import IO

import numpy as np
import numpy.typing as npt

from patchwalk.problem.edges import BLOCK, MOST_NUMBERED, EdgeLines, is_comment, plain_cells, shortest
from patchwalk.problem.forms import PathLike
from patchwalk.problem.ising import Problem
from patchwalk.problem.pairs import Pairs, listing
from patchwalk.problem.sources import (
    LARGEST_NUMBER,
    Source,
    numbered_lines,
    open_source,
    quoted,
    shortened,
    write_lines,
)

F64 = npt.NDArray[np.float64]

BANNER = "%%matrixmarket"
WORDS = (("matrix",), ("coordinate", "array"), ("real", "integer", "pattern"), ("symmetric", "general"))


def read(path: PathLike, kind: str | None, colours: int | None = None) -> Problem:
    """The problem in a Matrix Market file; raises :class:`ProblemError` with file and line."""
    with contextlib.closing(numbered_lines(path)) as lines:
        layout, values, symmetry = _read_banner(Source(path, {}, lines))
        source = open_source(path, lines, is_comment, colours=colours)
        kind = source.kind(kind)
        if layout == "array":
            pairs, size = _read_array(source, kind, symmetry)
        else:
            line, numbers = _read_sizes(source, 3)
            entries = EdgeLines(source, kind, line, numbers[0], numbers[2], 2 if values == "pattern" else 3)
            entries.take_all()
            pairs, size = entries.pairs, entries.size
        _settle_halves(pairs, symmetry)
        return pairs.problem(size, source.names(size))


def _read_banner(source: Source) -> list[str]:
    """Layout, values and symmetry that the first line states."""
    line, text = next(source.lines, (1, ""))
    words = text.lower().split()
    if not words or words[0] != BANNER:
        source.fail(
            line, f"expected '%%MatrixMarket matrix coordinate real symmetric', but it reads {quoted(text.strip())}"
        )
    for word, known in zip(words[1:] + [""] * 4, WORDS, strict=False):
        if word not in known:
            source.fail(line, f"{quoted(word)} cannot be read here; expected {' or '.join(known)}")
    return words[2:5]


def _read_sizes(source: Source, count: int) -> tuple[int, list[int]]:
    """The line of sizes and its numbers: rows, columns and, in the coordinate layout, entries."""
    line, text = next(source.lines)
    words = text.split()
    numbers = [int(word) for word in words if word.isascii() and word.isdigit() and len(word) < 4000]
    if len(words) != count or len(numbers) != count:
        expected = "rows, columns and entries" if count == 3 else "rows and columns"
        source.fail(line, f"expected the numbers of {expected}, but it reads {quoted(text.strip())}")
    if not 0 < numbers[0] <= MOST_NUMBERED or numbers[0] != numbers[1] or numbers[-1] > MOST_NUMBERED:
        sizes = " x ".join(map(shortened, words))
        source.fail(line, f"{sizes} is promised; expected a square matrix of size and entries up to {MOST_NUMBERED}")
    return line, numbers


def _read_array(source: Source, kind: str, symmetry: str) -> tuple[Pairs, int]:
    """The pairs of an array: a value a line, column by column, from the diagonal on where it is symmetric."""
    header, (size, _) = _read_sizes(source, 2)
    promised = size * (size + 1) // 2 if symmetry == "symmetric" else size * size
    parts: list[F64] = []
    count, last = 0, header
    while block := list(islice(source.lines, BLOCK)):
        values = _values(source, block)
        count, last = count + len(values), block[-1][0]
        parts.append(values)
        if count > promised:
            break
    if count != promised:
        source.fail(last, f"{count} values are there, but line {header} promises {promised}")
    values = np.concatenate(parts)
    places = np.flatnonzero(values)
    if symmetry == "symmetric":
        columns, rows = (ends[places] for ends in np.triu_indices(size))
    else:
        columns, rows = np.divmod(places, size)
    pairs = Pairs(source, kind)
    loops = np.flatnonzero(rows == columns)
    if len(loops) and not pairs.takes_loops:
        source.fail(None, f"entry {rows[loops[0]] + 1} of the diagonal is not 0, but kind {kind} has no fields")
    pairs.extend(rows.astype(np.int64), columns.astype(np.int64), values[places])
    return pairs, size


def _values(source: Source, block: list[tuple[int, str]]) -> F64:
    cells = plain_cells([text for _, text in block], 1)
    if cells is not None:
        with contextlib.suppress(ValueError):
            values = np.fromiter(map(float, cells), np.float64, len(cells))
            if np.all(np.abs(values) <= LARGEST_NUMBER):
                return values
    texts = ((line, text.partition("%")[0].strip()) for line, text in block)
    return np.array([source.number(text, line, "value") for line, text in texts if text])


def _settle_halves(pairs: Pairs, symmetry: str) -> None:
    """Turn entries into pairs: each pair once, or both entries of a form added up."""
    source = pairs.source
    heads, tails = np.array(pairs.heads, np.int64), np.array(pairs.tails, np.int64)
    weights = np.array(pairs.weights, np.float64) if pairs.weights else np.ones(len(heads))
    if symmetry == "symmetric":
        above = np.flatnonzero(heads < tails)
        if len(above):
            entry = f"{heads[above[0]] + 1} {tails[above[0]] + 1}"
            source.fail(None, f"entry {entry} stands above the diagonal, but a symmetric matrix has those below alone")
        if pairs.kind == "qubo":
            weights = np.where(heads == tails, weights, 2 * weights)
    elif pairs.kind != "qubo":
        _check_transpose(source, heads, tails, weights)
        kept = heads >= tails
        heads, tails, weights = heads[kept], tails[kept], weights[kept]
    pairs.clear()
    pairs.extend(heads, tails, weights)


def _check_transpose(source: Source, rows: npt.NDArray[np.int64], columns: npt.NDArray[np.int64], values: F64) -> None:
    order, mirrored = np.lexsort((values, columns, rows)), np.lexsort((values, rows, columns))
    wrong = (
        (rows[order] != columns[mirrored]) | (columns[order] != rows[mirrored]) | (values[order] != values[mirrored])
    )
    if np.any(wrong):
        place = order[np.flatnonzero(wrong)[0]]
        entry, mirror = f"{rows[place] + 1} {columns[place] + 1}", f"{columns[place] + 1} {rows[place] + 1}"
        source.fail(None, f"entry {entry} is not equal to entry {mirror}; only kind qubo takes such a matrix")


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write a symmetric matrix of real numbers in the coordinate layout."""
    content = listing(problem)
    comments = [*(f"recipe: {line}" for line in recipe), *content.settings]
    if content.names is not None:
        comments.append(f"names = {json.dumps(content.names)}")
    weights = content.weights
    if problem.kind == "qubo":
        weights = np.where(content.heads == content.tails, weights, weights / 2)
    rows, columns = np.maximum(content.heads, content.tails) + 1, np.minimum(content.heads, content.tails) + 1
    entries = zip(rows.tolist(), columns.tolist(), map(shortest, weights.tolist()), strict=True)
    top = ["%%MatrixMarket matrix coordinate real symmetric", *(f"% {comment}" for comment in comments)]
    size = f"{content.size} {content.size} {len(weights)}"
    write_lines(stream, (), chain(top, [size], (f"{i} {j} {w}" for i, j, w in entries)))
