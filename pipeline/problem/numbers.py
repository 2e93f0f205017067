"""Lists of whole numbers to be split into two parts: one or more a line, between spaces.

Lines that begin with ``#`` or ``%`` are comments, and so is what follows a ``#``.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import replace
from typing import IO

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import Source, quoted, write_lines

MOST_DIGITS = 15  # whole numbers up to here are exact as floating-point numbers
LARGEST_WHOLE = 2**53
MOST_NUMBERS = 5_000  # every two of them are coupled


def read_numbers(source: Source) -> Problem:
    """The problem of splitting the numbers of a file; raises :class:`ProblemError` with file and line."""
    from patchwalk.problem.encodings import encode_partition

    numbers: list[int] = []
    for line, text in source.lines:
        if text.lstrip()[:1] == "%":
            continue
        for cell in text.partition("#")[0].split():
            if not re.fullmatch(f"[+]?0*[0-9]{{1,{MOST_DIGITS}}}", cell, re.ASCII) or int(cell) == 0:
                source.fail(line, f"{quoted(cell)} is not a whole number from 1 to {10**MOST_DIGITS - 1}")
            numbers.append(int(cell))
        if len(numbers) > MOST_NUMBERS:
            source.fail(line, f"more than {MOST_NUMBERS} numbers; every two of them are coupled, so take fewer")
    if len(numbers) < 2:
        source.fail(None, "there is nothing to decide: give two numbers or more")
    if sum(numbers) ** 2 > LARGEST_WHOLE:
        source.fail(
            None,
            f"the numbers sum to {sum(numbers)}, whose square is not exact in floating point; "
            f"divide them by {-(-sum(numbers) // int(LARGEST_WHOLE**0.5))} or more",
        )
    problem = encode_partition(numbers)
    return replace(problem, details={**problem.details, **source.details()})


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write the numbers that a problem of kind ``partition`` was made from, one a line."""
    numbers = getattr(problem.encoding, "numbers", None)
    if numbers is None:
        raise ProblemError("a problem of kind partition without its numbers; make it by encode_partition")
    comments = [*(f"recipe: {line}" for line in recipe), f"kind = {problem.kind}"]
    write_lines(stream, comments, (str(int(number)) for number in numbers))
