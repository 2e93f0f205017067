"""Clauses in the DIMACS layouts: plain, weighted as they were before 2022, and weighted as since.

    p cnf N M          p wcnf N M TOP         h 1 -2 0       (must be satisfied)
    1 -2 0             WEIGHT 1 -2 0          WEIGHT 2 3 0
    ...                ...                    ...

Lines that begin with ``c`` are comments. In the older weighted layout a clause of weight TOP or more must be satisfied.
A weighted clause stands on one line; a plain one ends with its 0, wherever that is, and a line ``%`` ends the file.
"""

from __future__ import annotations

import contextlib
import json
import re
from array import array
from collections.abc import Iterable, Iterator
from dataclasses import replace
from itertools import chain, islice
from typing import IO

import numpy as np
import numpy.typing as npt

from patchwalk.problem.clause_notes import notes_on
from patchwalk.problem.edges import (
    BLOCK,
    MOST_NUMBERED,
    SPARE_VERTICES,
    VERTICES_PER_MENTION,
    counted_cells,
    shortest,
)
from patchwalk.problem.forms import PathLike, ending_of
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.pairs import are_numbers
from patchwalk.problem.sources import (
    LARGEST_NUMBER,
    Source,
    numbered_lines,
    open_source,
    quoted,
    shortened,
    write_lines,
)

I64 = npt.NDArray[np.int64]
F64 = npt.NDArray[np.float64]

HARD = "h"


def is_comment(text: str) -> bool:
    """Whether a line is a comment: a ``c`` alone or before a space."""
    return text.startswith("c") and not text[1:2].strip()


def read(path: PathLike, kind: str | None) -> Problem:
    """The problem in a file of clauses; if no kind is asked for, ``max2sat`` unless some have three literals.

    Raises :class:`ProblemError` with file and line.
    """
    with contextlib.closing(numbered_lines(path)) as lines:
        source = open_source(path, lines, is_comment, marks="c")
        if kind is not None or "kind" in source.settings:
            kind = source.kind(kind)
        clauses = _read_header(source, 2 if kind == "max2sat" else 3)
        while not clauses.ended and (block := list(islice(clauses.source.lines, BLOCK))):
            clauses.take(block)
        return clauses.problem(kind)


def _read_header(source: Source, most: int) -> _Clauses:
    line, text = next(source.lines)
    words = text.split()
    if words[0] != "p" and ending_of(source.path) == ".wcnf":
        return _Clauses(replace(source, lines=chain([(line, text)], source.lines)), most, weighted=True)
    numbers = [int(word) for word in words[2:] if re.fullmatch("[0-9]{1,110}", word, re.ASCII)]
    expected = {"cnf": (2,), "wcnf": (2, 3)}.get(words[1] if len(words) > 1 else "", ())
    if words[0] != "p" or len(numbers) not in expected or len(numbers) != len(words) - 2:
        source.fail(line, f"expected 'p cnf N M' or 'p wcnf N M TOP', but it reads {quoted(text.strip())}")
    size, count = numbers[:2]
    if not 0 < size <= MOST_NUMBERED or not count <= MOST_NUMBERED:
        promise = f"{shortened(words[2])} variables and {shortened(words[3])} clauses"
        source.fail(line, f"{promise} are promised; expected 1 to {MOST_NUMBERED}")
    top = float(numbers[2]) if len(numbers) == 3 else np.inf
    return _Clauses(source, most, words[1] == "wcnf", line, size, count, top)


class _Clauses:
    """Clauses as they are read: ``rows`` and ``weights`` in parts; infinite weights must be satisfied."""

    def __init__(
        self,
        source: Source,
        most: int,
        weighted: bool,
        header: int = 0,
        size: int = MOST_NUMBERED,
        promised: int = MOST_NUMBERED,
        top: float = np.inf,
    ) -> None:
        self.source, self.most, self.weighted = source, most, weighted
        self.header, self.size, self.promised, self.top = header, size, promised, top
        self.rows: list[I64] = []
        self.weights: list[F64] = []
        self.single_rows, self.single_weights = array("q"), array("d")
        self.last = header
        self.unfinished: list[int] = []
        self.ended = False

    @property
    def count(self) -> int:
        """Clauses so far."""
        return sum(map(len, self.weights)) + len(self.single_weights)

    def take(self, block: list[tuple[int, str]]) -> None:
        """Add lines: all at once where nothing speaks against it, otherwise one by one."""
        if self.unfinished or not self._take_at_once([text for _, text in block]):
            self._take_each(block)
            self.rows.append(np.array(self.single_rows, np.int64).reshape(-1, self.most))
            self.weights.append(np.array(self.single_weights, np.float64))
            self.single_rows, self.single_weights = array("q"), array("d")
        self.last = block[-1][0]

    def _take_at_once(self, texts: list[str]) -> bool:
        if any(text[0] == "c" for text in texts):
            texts = [text for text in texts if not is_comment(text)]
        hard = np.zeros(len(texts), bool)
        if self.weighted and not self.header:
            hard = np.array([text.startswith(HARD) for text in texts], bool)
            texts = ["1" + text[1:] if is_hard else text for text, is_hard in zip(texts, hard.tolist(), strict=True)]
        counted = counted_cells(texts)
        if counted is None:
            return False
        cells, counts = counted
        filled, lead = counts > 0, int(self.weighted)
        ends, lengths = np.cumsum(counts)[filled], counts[filled] - 1 - lead
        begins = ends - counts[filled] + lead
        weights = np.ones(len(ends))
        try:
            if self.weighted:
                places = (begins - 1).tolist()
                weights = np.fromiter(map(float, map(cells.__getitem__, places)), np.float64, len(places))
                for place in places:
                    cells[place] = "0"
            values = np.fromiter(map(int, cells), np.int64, len(cells))
        except (ValueError, OverflowError):
            return False
        if np.any(lengths < 0) or np.any(lengths > self.most) or self.count + len(ends) > self.promised:
            return False
        literals = np.zeros((len(ends), self.most), np.int64)
        for place in range(self.most):
            there = lengths > place
            literals[there, place] = values[begins[there] + place]
        if not np.all((weights >= 0) & (weights <= LARGEST_NUMBER)) or np.any(np.abs(literals) > self.size):
            return False
        weights[(weights >= self.top) | hard[filled]] = np.inf
        if np.any(values[ends - 1] != 0) or np.any(np.count_nonzero(literals, axis=1) != lengths):
            return False
        if np.any(np.isinf(weights[lengths == 0])):
            return False
        self.rows.append(literals)
        self.weights.append(weights)
        return True

    def _take_each(self, block: list[tuple[int, str]]) -> None:
        count = self.count
        for line, text in block:
            words = [] if is_comment(text) else text.split()
            if words and words[0] == "%" and not self.weighted:
                self.ended = True
                return
            weight = 1.0
            if self.weighted and words:
                weight = self._weight(line, words.pop(0))
                if not words or self._literal(line, words[-1]) != 0:
                    self.source.fail(line, "the clause does not end with 0; put each clause on one line")
            for place, word in enumerate(words, 1):
                literal = self._literal(line, word)
                if literal != 0:
                    self.unfinished.append(literal)
                    continue
                if self.weighted and place < len(words):
                    self.source.fail(line, "something follows the 0 that ends the clause; put it on a line of its own")
                if count == self.promised:
                    promise = f"line {self.header} promises {self.promised} clauses"
                    self.source.fail(line, f"{promise}, here is one more; correct M")
                self._finish(line, weight)
                count += 1

    def _weight(self, line: int, word: str) -> float:
        if word == HARD and not self.header:
            return np.inf
        weight = self.source.number(word, line, "weight")
        if weight < 0:
            self.source.fail(line, f"weight {quoted(word)} is negative; weights are at least 0")
        return np.inf if weight >= self.top else weight

    def _literal(self, line: int, word: str) -> int:
        if not re.fullmatch("[+-]?[0-9]+", word, re.ASCII):
            self.source.fail(line, f"literal {quoted(word)} is not a whole number")
        if len(word.lstrip("+-0")) > 20 or abs(int(word)) > self.size:
            promise = f"line {self.header} promises {self.size}" if self.header else f"the most is {self.size}"
            self.source.fail(line, f"variable {shortened(word.lstrip('+-'))} does not exist; {promise} variables")
        return int(word)

    def _finish(self, line: int, weight: float) -> None:
        """Add the one clause that has been read, its literals once each."""
        literals = list(dict.fromkeys(self.unfinished))
        tautology = next((literal for literal in literals if -literal in literals), 0)
        if tautology:
            literals = [tautology, -tautology]
        if len(literals) > self.most:
            way = "; kind max3sat takes three" if self.most == 2 and len(literals) == 3 else ""
            self.source.fail(line, f"a clause of {len(literals)} literals; {self.most} is the most{way}")
        if not literals and np.isinf(weight):
            self.source.fail(line, "an empty clause can never be satisfied, and this one must be; remove it")
        self.unfinished.clear()
        self.single_rows.extend(literals + [0] * (self.most - len(literals)))
        self.single_weights.append(weight)

    def problem(self, kind: str | None) -> Problem:
        """The problem, once all lines are read."""
        from patchwalk.problem.encodings import encode_max2sat, encode_max3sat

        source = self.source
        if self.unfinished:
            source.fail(self.last, "the last clause does not end with 0; is the file cut short?")
        if self.header and self.count < self.promised:
            source.fail(
                self.last, f"the file ends after {self.count} clauses, line {self.header} promises {self.promised}"
            )
        literals = np.concatenate(self.rows) if self.rows else np.zeros((0, self.most), np.int64)
        weights = np.concatenate(self.weights) if self.weights else np.zeros(0)
        size = self.size if self.header else int(np.abs(literals).max(initial=0))
        if size > SPARE_VERTICES + VERTICES_PER_MENTION * literals.size:
            source.fail(self.header or None, f"{size} variables, of which {self.count} clauses name but few; correct N")
        notes = notes_on(literals, weights)
        literals, weights = literals[weights > 0], weights[weights > 0]
        if not np.any(literals):
            source.fail(None, "there is nothing to decide: no clause has a literal and a weight above 0")
        kind = kind or ("max3sat" if self.most == 3 and np.any(literals[:, 2]) else "max2sat")
        encode = encode_max2sat if kind == "max2sat" else encode_max3sat
        names = source.names(size)
        with source.naming():
            problem = encode(
                literals[:, :2] if kind == "max2sat" else literals, weights, size, names=names, notes=notes
            )
        return replace(problem, details={**problem.details, **source.details()})


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write clauses: plain where all weigh 1, else weighted in the layout since 2022.

    Raises :class:`ProblemError` for a problem that was not made from clauses.
    """
    from patchwalk.problem.kinds.clauses import ClauseForm

    form = problem.encoding
    if not isinstance(form, ClauseForm):
        raise ProblemError(f"a problem of kind {problem.kind} without its clauses; make it by encode_{problem.kind}")
    comments = [*(f"recipe: {line}" for line in recipe), f"kind = {problem.kind}"]
    if not are_numbers(form.labels):
        comments.append(f"names = {json.dumps(form.labels)}")
    if "planted_energy" in problem.details:
        comments.append(f"planted_energy = {problem.details['planted_energy']!r}")
    write_lines(stream, comments, _clause_lines(form.literals, form.weights, len(form.labels)), mark="c")


def _clause_lines(literals: I64, weights: F64, size: int) -> Iterator[str]:
    is_plain = bool(np.all(weights == 1))
    # the older weighted layout, as only that one says how many variables there are
    top = 0.0 if is_plain else _top(weights)
    yield f"p cnf {size} {len(weights)}" if is_plain else f"p wcnf {size} {len(weights)} {int(top)}"
    for row, weight in zip(literals.tolist(), weights.tolist(), strict=True):
        words = [str(literal) for literal in row if literal]
        if not is_plain:
            words.insert(0, str(int(top)) if weight == np.inf else shortest(weight))
        yield " ".join([*words, "0"])


def _top(weights: F64) -> float:
    """A whole number above the sum of all weights that are finite, whatever their size."""
    return float(np.floor(2 * weights[np.isfinite(weights)].sum())) + 1.0
