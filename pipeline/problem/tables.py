"""CSV files of pairs: ``name, name`` or ``name, name, weight``.

With or without a header line. Blocks of plain lines are taken as a whole; from the first line with a quotation
mark or anything else that is not plain, rows are read one by one, which also finds the line that an error names.
"""

from __future__ import annotations

import contextlib
import csv
import io
import json
from array import array
from collections.abc import Iterable
from itertools import chain, islice
from typing import IO

import numpy as np
import numpy.typing as npt

from patchwalk.problem.edges import BLOCK, shortest
from patchwalk.problem.forms import PathLike
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.pairs import Pairs, different_names, listing
from patchwalk.problem.sources import (
    LARGEST_NUMBER,
    Lines,
    Source,
    numbered_lines,
    open_source,
    plain,
    quoted,
    write_lines,
)
from patchwalk.problem.table_rows import LINES_LOOKED_AT, is_comment, is_title, number_in, separator_of, table_rows

# A first row of two names is taken for a header only if both are such words and neither comes again.
HEADER_WORDS = frozenset(
    ("first", "second", "from", "to", "source", "target", "one", "other", "node", "neighbour", "vertex")
)


def read(path: PathLike, kind: str | None, colours: int | None = None) -> Problem:
    """The problem in a CSV of pairs, or of beacons; raises :class:`ProblemError` with file and line."""
    with contextlib.closing(numbered_lines(path)) as lines:
        source = open_source(path, lines, is_comment, colours=colours)
        kind = source.kind(kind)
        if kind == "beacons":
            from patchwalk.problem.beacons import read_beacons

            return read_beacons(source)
        return _read_pairs(source, kind)


def _read_pairs(source: Source, kind: str) -> Problem:
    """The problem in a CSV of pairs; names become ``Problem.names`` in order of first appearance, or as stated.

    A first row of three cells is a header if the third begins with a letter and is no number; of two cells, if
    both are usual words for a header and neither name occurs again. A note says what was decided. ``a, a, w`` is a
    field.
    """
    table = _Table(source, kind)
    sample = list(islice(source.lines, LINES_LOOKED_AT))
    separator = separator_of(sample, table.notes)
    lines = chain(sample, source.lines)
    first, cells = next(table_rows(source, lines, separator), (0, []))
    if first == 0:
        source.fail(None, "the file is empty; expected rows of pairs")
    table.width = len(cells)
    if table.width not in (2, 3):
        source.fail(first, f"expected two or three columns (name, name, weight) but it has {table.width}")
    if table.width == 3 and is_title(cells[2]):
        table.notes.append(f"line {first} was read as a header: {quoted(cells[2])} is not a number")
    else:
        table.take_row(first, cells)
    table.take(lines, separator)
    if table.width == 2:
        _settle_header(table, first, cells)
        table.notes.append("no third column: every weight is 1")
    return table.problem()


class _Numbered(dict[str, int]):
    """Names numbered from 0 in the order in which they are first looked up."""

    def __missing__(self, name: str) -> int:
        place = self[name] = len(self)
        return place


class _Table:
    """Rows of pairs as they are read; ``places`` numbers the names."""

    def __init__(self, source: Source, kind: str) -> None:
        self.source, self.pairs = source, Pairs(source, kind)
        self.notes = self.pairs.notes
        self.width = 0
        self.stated = source.names(None)
        self.places: dict[str, int] = _Numbered()
        if self.stated is not None:
            self.places = {name: place for place, name in enumerate(self.stated)}

    def take(self, lines: Lines, separator: str) -> None:
        """Add all rows that follow."""
        while block := list(islice(lines, BLOCK)):
            texts = [text for _, text in block]
            if not self._take_at_once(texts, separator):
                # a quotation may reach into the next block
                rest = chain(block, lines) if any('"' in text for text in texts) else iter(block)
                for line, cells in table_rows(self.source, rest, separator):
                    self.take_row(line, cells)

    def _take_at_once(self, texts: list[str], separator: str) -> bool:
        joined = separator.join(texts)
        # counted in all, so that no line that is short can be made good by one that is long
        if '"' in joined or "#" in joined or {text.count(separator) for text in texts} != {self.width - 1}:
            return False
        cells = joined.split(separator)
        weights = _numbers(cells[2::3]) if self.width == 3 else None
        if self.width == 3 and weights is None:
            return False
        names = [""] * (2 * len(texts))  # heads and tails in turn, as they appear
        names[::2], names[1::2] = cells[:: self.width], cells[1 :: self.width]
        # most files have no spaces but the ends of lines; then three cells a line need no stripping
        if self.width == 2 or separator.isspace() or joined[0].isspace() or len(joined.split()) != len(texts):
            names = list(map(str.strip, names))
        if "" in names:
            return False
        try:
            ends = np.fromiter(map(self.places.__getitem__, names), np.int64, len(names)).reshape(-1, 2)
        except KeyError:  # a name that is not among those stated
            return False
        if not self.pairs.takes_loops and np.any(ends[:, 0] == ends[:, 1]):
            return False
        self.pairs.extend(ends[:, 0], ends[:, 1], weights)
        return True

    def take_row(self, line: int, cells: list[str]) -> None:
        """Add one row."""
        if len(cells) != self.width:
            self.source.fail(line, f"expected {self.width} columns as on the lines before, but it has {len(cells)}")
        head, tail = cells[0], cells[1]
        if not head or not tail:
            self.source.fail(line, "a name is missing; expected two names and perhaps a weight")
        if self.width == 3:
            self.pairs.weights.append(number_in(self.source, line, cells[2]))
        if head == tail and not self.pairs.takes_loops:
            self.pairs.refuse_loop(line, quoted(head))
        self.pairs.heads.append(self._place(line, head))
        self.pairs.tails.append(self._place(line, tail))

    def _place(self, line: int, name: str) -> int:
        if self.stated is not None and name not in self.places:
            self.source.fail(line, f"name {quoted(name)} is not among the names that the file states; add it there")
        return self.places.setdefault(name, len(self.places))

    def problem(self) -> Problem:
        """The problem, once all rows are read."""
        return self.pairs.problem(max(len(self.places), 1), tuple(self.places) or None)


def _numbers(cells: list[str]) -> npt.NDArray[np.float64] | None:
    """The cells as finite numbers f64 (m,), or None where one of them is none."""
    text = "".join(cells)
    try:
        values = np.fromiter(map(float, cells), np.float64, len(cells))
    except ValueError:
        return None
    return values if plain(text) and np.all(np.abs(values) <= LARGEST_NUMBER) else None


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write a CSV of pairs with the names of the spins (their numbers from 1 without), or of beacons."""
    recipes = [f"recipe: {line}" for line in recipe]
    if problem.kind == "beacons":
        from patchwalk.problem.beacons import beacon_lines

        write_lines(stream, [*recipes, f"kind = {problem.kind}"], beacon_lines(problem))
        return
    content = listing(problem)
    names = different_names(content)
    _check_names(names)
    comments = [*recipes, *content.settings, f"names = {json.dumps(names)}"]
    rows = zip(content.heads.tolist(), content.tails.tolist(), map(shortest, content.weights.tolist()), strict=True)
    write_lines(stream, comments, chain(["one,other,weight"], (_row(names[i], names[j], w) for i, j, w in rows)))


def _check_names(names: tuple[str, ...]) -> None:
    """Raise :class:`ProblemError` for names that a CSV would not give back."""
    for name in names:
        if name != name.strip() or len(name.splitlines()) > 1:
            why = "has spaces around it or goes over several lines"
            raise ProblemError(f"name {quoted(name)} {why}, which a .csv cannot hold; write a .txt file")


def _row(*cells: str) -> str:
    text = io.StringIO()
    csv.writer(text, lineterminator="", quoting=csv.QUOTE_MINIMAL).writerow(cells)
    return text.getvalue()


def _settle_header(table: _Table, first: int, cells: list[str]) -> None:
    """Drop the first row of a two-column table where it was a header, and note what was decided."""
    pairs, places = table.pairs, table.places
    words = {cell.casefold() for cell in cells}
    # the first row was the first to number its names, so a header holds numbers 0 and 1, once each
    ends = (np.frombuffer(pairs.heads, np.int64), np.frombuffer(pairs.tails, np.int64))
    uses = sum(np.bincount(end, minlength=2)[:2] for end in ends)
    lone = table.stated is None and words <= HEADER_WORDS and len(words) == 2 and len(pairs) > 1
    if not (lone and np.all(uses == 1)):
        table.notes.append(f"line {first} was read as a pair, not as a header: {quoted(', '.join(cells))}")
        return
    table.notes.append(f"line {first} was read as a header: {quoted(', '.join(cells))}")
    heads, tails = (end[1:] - 2 for end in ends)
    del ends
    pairs.heads, pairs.tails = array("q", heads.tobytes()), array("q", tails.tobytes())
    table.places = {name: place - 2 for name, place in places.items() if place >= 2}
