"""Weighted edge lists: a first line ``n m``, then m lines ``i j w``.

Vertices are counted from 1. A third column is there on every line or on none (weight 1). ``i i w`` is a field where
the kind has fields. Lines that begin with ``#`` or ``%`` are comments, and so is what follows a ``#``.

Blocks of plain lines are taken as a whole; a block with anything else in it is read line by line, which also finds
the line that an error names.
"""

from __future__ import annotations

import contextlib
import json
import re
from collections.abc import Iterable, Iterator
from itertools import chain, islice
from typing import IO, NoReturn

import numpy as np
import numpy.typing as npt

from patchwalk.problem.forms import PathLike
from patchwalk.problem.ising import Problem
from patchwalk.problem.pairs import Pairs, listing
from patchwalk.problem.sources import (
    LARGEST_NUMBER,
    Lines,
    Source,
    numbered_lines,
    open_source,
    quoted,
    shortened,
    write_lines,
)

SPARE_VERTICES = 1_000_000  # vertices that no line mentions are legal, but ten for each that is are a slip
VERTICES_PER_MENTION = 10
MOST_NUMBERED = 2**31 - 1
BLOCK = 1 << 16  # lines taken at once

I64 = npt.NDArray[np.int64]
Rows = Iterator[tuple[int, list[str]]]


def is_comment(text: str) -> bool:
    """Whether a whole line is a comment."""
    return text.lstrip()[:1] in ("#", "%")


def read(path: PathLike, kind: str | None, colours: int | None = None) -> Problem:
    """The problem in a weighted edge list, or in a list of numbers where that is the kind.

    Raises :class:`ProblemError` with file and line.
    """
    with contextlib.closing(numbered_lines(path)) as lines:
        source = open_source(path, lines, is_comment, colours=colours)
        kind = source.kind(kind)
        if kind == "partition":
            from patchwalk.problem.numbers import read_numbers

            return read_numbers(source)
        return _read_edges(source, kind)


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write a weighted edge list."""
    content = listing(problem)
    comments = [*(f"recipe: {line}" for line in recipe), *content.settings]
    if content.names is not None:
        comments.append(f"names = {json.dumps(content.names)}")
    ends = (content.heads + 1).tolist(), (content.tails + 1).tolist()
    rows = zip(*ends, map(shortest, content.weights.tolist()), strict=True)
    first = f"{content.size} {len(content.weights)}"
    write_lines(stream, comments, chain([first], (f"{i} {j} {w}" for i, j, w in rows)))


def _read_edges(source: Source, kind: str) -> Problem:
    line, cells = next(_cells(source, source.lines))
    header = line, *_read_header(source, line, cells)
    edges = EdgeLines(source, kind, *header)
    edges.take_all()
    return edges.pairs.problem(edges.size, source.names(edges.size))


class EdgeLines:
    """The edge lines as they are read, held against the first line: on line ``header`` ``size`` and ``promised``."""

    def __init__(self, source: Source, kind: str, header: int, size: int, promised: int, width: int = 0) -> None:
        self.source, self.header, self.size, self.promised = source, header, size, promised
        self.pairs = Pairs(source, kind)
        self.width = width
        self.last = header

    def take_all(self) -> None:
        """Read to the end of the file; raises :class:`ProblemError`."""
        while block := list(islice(self.source.lines, BLOCK)):
            self.take(block)
        self._close()

    def take(self, block: list[tuple[int, str]]) -> None:
        """Add lines: all at once where nothing speaks against it, otherwise one by one."""
        if not self.width or not self._take_at_once([text for _, text in block]):
            for line, cells in _cells(self.source, iter(block)):
                self._take_row(line, cells)
        self.last = block[-1][0]

    def _take_at_once(self, texts: list[str]) -> bool:
        cells = plain_cells(texts, self.width)
        if cells is None:
            return False
        count = len(cells) // self.width
        try:
            heads = np.fromiter(map(int, cells[:: self.width]), np.int64, count)
            tails = np.fromiter(map(int, cells[1 :: self.width]), np.int64, count)
            weights = np.fromiter(map(float, cells[2::3]), np.float64, count) if self.width == 3 else None
        except (ValueError, OverflowError):
            return False
        ends = np.concatenate([heads, tails])
        if len(self.pairs) + count > self.promised or np.any(ends < 1) or np.any(ends > self.size):
            return False
        if weights is not None and not np.all(np.abs(weights) <= LARGEST_NUMBER):
            return False
        if not self.pairs.takes_loops and np.any(heads == tails):
            return False
        self.pairs.extend(heads - 1, tails - 1, weights)
        return True

    def _take_row(self, line: int, cells: list[str]) -> None:
        pairs, weight = self.pairs, 1.0
        if len(pairs) == self.promised:
            self.source.fail(
                line, f"line {self.header} promises {self.promised} edge lines, here is one more; correct m"
            )
        if len(cells) != self.width:
            self.width = _settle_width(self.source, line, cells, self.width)
        try:
            head, tail = int(cells[0]), int(cells[1])
            if self.width == 3:
                weight = float(cells[2])
        except ValueError:
            self._explain(line, cells)
        size = self.size
        if not (0 < head <= size and 0 < tail <= size and -LARGEST_NUMBER <= weight <= LARGEST_NUMBER):
            self._explain(line, cells)
        if head == tail and not pairs.takes_loops:
            pairs.refuse_loop(line, cells[0])
        pairs.heads.append(head - 1)
        pairs.tails.append(tail - 1)
        if self.width == 3:
            pairs.weights.append(weight)

    def _explain(self, line: int, cells: list[str]) -> NoReturn:
        """The error for an edge line that cannot be taken."""
        for cell in cells[:2]:
            if not re.fullmatch("[+-]?[0-9]+", cell):
                self.source.fail(line, f"vertex {quoted(cell)} is not a whole number from 1 to {self.size}")
            if len(cell.lstrip("+-0")) > 20 or not 0 < int(cell) <= self.size:
                promise = "the first line" if self.header == 1 else f"line {self.header}"
                self.source.fail(
                    line,
                    f"vertex {shortened(cell)} does not exist; {promise} promises {self.size} vertices, "
                    f"numbered 1 to {self.size}",
                )
        self.source.number(cells[2], line, "weight")
        raise AssertionError(f"line {line} was refused without a reason")

    def _close(self) -> None:
        """Check what can be checked once all lines are read."""
        count, source = len(self.pairs), self.source
        if count < self.promised:
            source.fail(
                self.last, f"the file ends after {count} edge lines, line {self.header} promises {self.promised}"
            )
        if self.size > SPARE_VERTICES + VERTICES_PER_MENTION * 2 * count:
            source.fail(self.header, f"{self.size} vertices, of which {count} edge lines touch but few; correct n")
        if self.width == 2:
            self.pairs.notes.append("no third column: every weight is 1")


def plain_cells(texts: list[str], width: int) -> list[str] | None:
    """The cells of lines that hold ``width`` plain cells or none, one after the other; None if any line is different.

    >>> plain_cells(["1 2 .5", "", "2 3 -1"], 3), plain_cells(["1 2", "3 4 5 6"], 3), plain_cells(["1 2 3 # c"], 3)
    (['1', '2', '.5', '2', '3', '-1'], None, None)
    """
    counted = counted_cells(texts)
    if counted is None or np.any((counted[1] != width) & (counted[1] != 0)):
        return None
    return counted[0]


def counted_cells(texts: list[str]) -> tuple[list[str], I64] | None:
    """The cells between spaces of all lines, and how many each line has, i64; None where a line is not plain.

    Plain lines are ASCII and have no comments, and no underscores, which ``int`` and ``float`` would take.
    """
    text = " ".join(texts)
    if not text.isascii() or any(mark in text for mark in "#%_"):
        return None
    letters = np.frombuffer(text.encode(), np.uint8) > ord(" ")
    begins = letters.copy()
    begins[1:] &= ~letters[:-1]
    ends = np.cumsum(np.fromiter(map(len, texts), np.int64, len(texts)) + 1)
    counts = np.diff(np.searchsorted(np.flatnonzero(begins), ends), prepend=0)
    cells = text.split()
    return (cells, counts) if len(cells) == counts.sum() else None


def _cells(source: Source, lines: Lines) -> Rows:
    for number, text in lines:
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


def _settle_width(source: Source, line: int, cells: list[str], width: int) -> int:
    """The number of columns: the first edge line decides it, all others keep to it."""
    if width or len(cells) not in (2, 3):
        expected = f"{width} columns as on the lines before" if width else "'i j' or 'i j w'"
        source.fail(line, f"expected {expected}, but it has {len(cells)}: {quoted(' '.join(cells))}")
    return len(cells)


def shortest(value: float) -> str:
    """The shortest text that is read back as the same number."""
    return str(int(value)) if value.is_integer() and abs(value) < 1e15 else repr(value)
