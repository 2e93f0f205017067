"""Rows of a CSV with the lines they end on: what all our tables are read by."""

from __future__ import annotations

import csv
from collections.abc import Iterator

from patchwalk.problem.sources import Lines, Source, plain, quoted

SEPARATORS = {";": "semicolon", "\t": "tab", ",": "comma"}
LINES_LOOKED_AT = 50

Rows = Iterator[tuple[int, list[str]]]


def is_comment(text: str) -> bool:
    """Whether a line of a CSV is a comment: a ``#`` alone or before a space, as names may begin with ``#``."""
    return text.startswith("#") and not text[1:2].strip()


def separator_of(sample: list[tuple[int, str]], notes: list[str]) -> str:
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


def is_title(cell: str) -> bool:
    """Whether a cell begins with a letter and is no number, as the title of a column of numbers does."""
    try:
        float(cell)
    except ValueError:
        return bool(cell[:1].isalpha())
    return False


def number_in(source: Source, line: int, cell: str, what: str = "weight") -> float:
    """The number in a cell; raises :class:`~patchwalk.problem.ising.ProblemError` with file and line."""
    if "," in cell and plain(cell):
        source.fail(line, f"{what} {quoted(cell)} is not a number; write decimals with a point")
    return source.number(cell, line, what)
