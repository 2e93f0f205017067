"""Lists of numbers to be split into two parts: one or more a line, between spaces.

Lines that begin with ``#`` or ``%`` are comments, and so is what follows a ``#``.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import replace
from typing import IO

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import Source, write_lines

MOST_NUMBERS = 5_000  # every two of them are coupled


def read_numbers(source: Source) -> Problem:
    """The problem of splitting the numbers of a file; raises :class:`ProblemError` with file and line."""
    from patchwalk.problem.encodings import encode_partition

    numbers: list[int | float] = []
    for line, text in source.lines:
        if text.lstrip()[:1] == "%":
            continue
        for cell in text.partition("#")[0].split():
            source.number(cell, line, "number")
            numbers.append(int(cell) if re.fullmatch("[+-]?[0-9]+", cell) else float(cell))
        if len(numbers) > MOST_NUMBERS:
            source.fail(line, f"more than {MOST_NUMBERS} numbers; every two of them are coupled, so take fewer")
    if len(numbers) < 2:
        source.fail(None, "there is nothing to decide: give two numbers or more")
    with source.naming():
        problem = encode_partition(numbers)
    return replace(problem, details={**problem.details, **source.details()})


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write the numbers that a problem of kind ``partition`` was made from, one a line."""
    numbers = getattr(problem.encoding, "numbers", None)
    if numbers is None:
        raise ProblemError("a problem of kind partition without its numbers; make it by encode_partition")
    comments = [*(f"recipe: {line}" for line in recipe), f"kind = {problem.kind}"]
    write_lines(stream, comments, (str(number) for number in numbers))
