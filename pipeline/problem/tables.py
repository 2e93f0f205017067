"""CSV files of pairs: ``name, name`` or ``name, name, weight``, with or without a header line."""

from __future__ import annotations

import csv
from collections import Counter
from collections.abc import Iterator
from itertools import chain, islice

from patchwalk.problem.ising import Problem
from patchwalk.problem.sources import Lines, Pairs, Source, plain, quoted

SEPARATORS = {";": "semicolon", "\t": "tab", ",": "comma"}
LINES_LOOKED_AT = 50
# A first row of two names is taken for a header only if both are such words and neither comes again.
HEADER_WORDS = frozenset(
    ("first", "second", "from", "to", "source", "target", "one", "other", "node", "neighbour", "vertex")
)

Rows = Iterator[tuple[int, list[str]]]


def is_comment(text: str) -> bool:
    """Whether a line of a CSV is a comment: a ``#`` alone or before a space, as names may begin with ``#``."""
    return text.startswith("#") and not text[1:2].strip()


def read_table(source: Source, kind: str) -> Problem:
    """The problem in a CSV of pairs; names become ``Problem.names`` in order of first appearance.

    A first row of three cells is a header if the third begins with a letter and is no number; of two cells, if
    both are usual words for a header and neither name occurs again. A note says what was decided. ``a, a, w`` is a
    field. Raises :class:`ProblemError` with file and line.
    """
    pairs = Pairs(source, kind)
    sample = list(islice(source.lines, LINES_LOOKED_AT))
    separator = _separator(sample, pairs.notes)
    rows = table_rows(source, chain(sample, source.lines), separator)
    first, cells = next(rows, (0, []))
    if first == 0:
        source.fail(None, "the file is empty; expected rows of pairs")
    width = len(cells)
    if width not in (2, 3):
        source.fail(first, f"expected two or three columns (name, name, weight) but it has {width}")
    if width == 3 and _is_title(cells[2]):
        pairs.notes.append(f"line {first} was read as a header: {quoted(cells[2])} is not a number")
    else:
        rows = chain([(first, cells)], rows)
    places = _read_rows(pairs, rows, width)
    if width == 2:
        places = _settle_header(pairs, places, first, cells)
        pairs.notes.append("no third column: every weight is 1")
    return pairs.problem(max(len(places), 1), places or None)


def _separator(sample: list[tuple[int, str]], notes: list[str]) -> str:
    """The separator that gives every line looked at two or three cells; else the first that occurs at all."""
    texts = [text for _, text in sample if text.strip() and not is_comment(text)]
    widths = {mark: _widths(texts, mark) for mark in SEPARATORS}
    # three cells say more than two: 'a;b;1,5' is no pair of 'a;b;1' and '5'
    fitting = sorted((mark for mark in SEPARATORS if widths[mark] <= {0, 2, 3}), key=lambda mark: -max(widths[mark]))
    if len(fitting) > 1:
        notes.append(f"read with {SEPARATORS[fitting[0]]} as separator; {SEPARATORS[fitting[1]]} would fit too")
    occurring = [mark for mark in SEPARATORS if any(mark in text for text in texts)]
    return (fitting + occurring + [","])[0]


def _widths(texts: list[str], mark: str) -> set[int]:
    try:
        return {len(row) for row in csv.reader(texts, delimiter=mark, skipinitialspace=True)}
    except csv.Error:  # a cell beyond the limit, most likely a quotation mark without its partner
        return {1}


def table_rows(source: Source, lines: Lines, separator: str) -> Rows:
    """The rows of a CSV that hold anything, cells stripped, each with the line it ends on."""
    number = 0

    def texts() -> Iterator[str]:
        nonlocal number
        for line, text in lines:
            number = line
            yield "\n" if is_comment(text) else text

    reader = csv.reader(texts(), delimiter=separator, skipinitialspace=True, strict=True)
    try:
        for row in reader:
            cells = [cell.strip() for cell in row]
            if any(cells):
                yield number, cells
    except csv.Error as error:
        source.fail(number, f"not a row of a CSV ({error}); look for a quotation mark without its partner")


def _is_title(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return bool(cell[:1].isalpha())
    return False


def _read_rows(pairs: Pairs, rows: Rows, width: int) -> dict[str, int]:
    source = pairs.source
    places: dict[str, int] = {}
    for line, cells in rows:
        if len(cells) != width:
            source.fail(line, f"expected {width} columns as on the lines before, but it has {len(cells)}")
        head, tail = cells[0], cells[1]
        if not head or not tail:
            source.fail(line, "a name is missing; expected two names and perhaps a weight")
        if width == 3:
            pairs.weights.append(_weight(source, line, cells[2]))
        if head == tail and pairs.kind == "maxcut":
            pairs.refuse_loop(line, quoted(head))
        pairs.heads.append(places.setdefault(head, len(places)))
        pairs.tails.append(places.setdefault(tail, len(places)))
    return places


def _weight(source: Source, line: int, cell: str) -> float:
    if "," in cell and plain(cell):
        source.fail(line, f"weight {quoted(cell)} is not a number; write decimals with a point")
    return source.number(cell, line, "weight")


def _settle_header(pairs: Pairs, places: dict[str, int], first: int, cells: list[str]) -> dict[str, int]:
    """Drop the first row of a two-column table where it was a header, and note what was decided."""
    uses = Counter(pairs.heads) + Counter(pairs.tails)
    words = {cell.casefold() for cell in cells}
    if not (words <= HEADER_WORDS and len(words) == 2 and uses[0] == uses[1] == 1 and len(pairs.heads) > 1):
        pairs.notes.append(f"line {first} was read as a pair, not as a header: {quoted(', '.join(cells))}")
        return places
    pairs.notes.append(f"line {first} was read as a header: {quoted(', '.join(cells))}")
    for ends in (pairs.heads, pairs.tails):
        del ends[0]
        ends[:] = type(ends)("q", (place - 2 for place in ends))
    return {name: place - 2 for name, place in places.items() if place >= 2}
