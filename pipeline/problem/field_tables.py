"""CSV files of names and fields, with or without a header line, which are added to the couplings of another file."""

from __future__ import annotations

import contextlib
from itertools import chain, islice

import numpy as np
import numpy.typing as npt

from patchwalk.problem.forms import PathLike
from patchwalk.problem.ising import Problem
from patchwalk.problem.sources import numbered_lines, open_source, quoted
from patchwalk.problem.table_rows import LINES_LOOKED_AT, is_comment, is_title, number_in, separator_of, table_rows


def read_fields(path: PathLike, problem: Problem) -> tuple[npt.NDArray[np.float64], list[str]]:
    """Fields f64 (n,) for the spins of a problem from a CSV of names and fields, and notes.

    Spins without names are numbered from 1. Raises :class:`ProblemError` with file and line.
    """
    names = problem.names or map(str, range(1, len(problem) + 1))
    places = {name: place for place, name in enumerate(names)}
    fields, seen, notes = np.zeros(len(problem)), np.zeros(len(problem), np.int64), list[str]()
    with contextlib.closing(numbered_lines(path)) as lines:
        source = open_source(path, lines, is_comment)
        sample = list(islice(source.lines, LINES_LOOKED_AT))
        separator = separator_of(sample, notes)
        for number, (line, cells) in enumerate(table_rows(source, chain(sample, source.lines), separator)):
            if len(cells) != 2:
                source.fail(line, f"expected two columns (name, field) but it has {len(cells)}")
            name, value = cells
            if number == 0 and name not in places and is_title(value):
                notes.append(f"line {line} was read as a header: {quoted(value)} is not a number")
                continue
            if name not in places:
                source.fail(line, f"spin {quoted(name)} is not in the problem; correct the name")
            fields[places[name]] += number_in(source, line, value, "field")
            seen[places[name]] += 1
    repeated = int(np.count_nonzero(seen > 1))
    if repeated:
        notes.append(f"spins with more than one row of fields, whose values were summed: {repeated}")
    return fields, notes
