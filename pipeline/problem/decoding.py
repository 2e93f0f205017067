"""Answers: read from files, audited against the original problem, written as text, CSV or JSON.

A CSV of an answer has the header ``name,ENTRY`` with the entry that decides the kind's answer (``colours``,
``members``, ``parts``, ...), and a row for every name with its value, for every member of a set, or for every name
with its part, 1 or 2. Comments before it say whether the answer is valid, what it breaks, and what a repair changed.
"""

from __future__ import annotations

import contextlib
import csv
import gzip
import io
import json
import math
import os
import textwrap
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.files import read_start
from patchwalk.problem.forms import PathLike
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.kinds.plain import encoding_of
from patchwalk.problem.meanings import Answer, Encoding, in_words
from patchwalk.problem.sources import fail, numbered_lines

__all__ = [
    "Answer",
    "Encoding",
    "answer_lines",
    "audit_answer",
    "encoding_of",
    "read_answer",
    "verdict",
    "write_answer",
]

WIDTH = 110
PART_NAMES = ("1", "2")


def verdict(broken: int, mended: int = 0) -> str:
    """The first words of any account of an answer, from how many constraints it breaks, or broke before a repair.

    >>> verdict(2)
    'NOT VALID: 2 constraints broken'
    """
    if broken:
        return f"NOT VALID: {_counted(broken)} broken"
    return f"valid after a repair: {_counted(mended)} had been broken" if mended else "valid"


def _counted(count: int) -> str:
    return f"{count} constraint{'s' * (count != 1)}"


def audit_answer(
    problem: Problem, answer: Answer | Mapping[str, Any] | npt.ArrayLike
) -> tuple[float, bool, tuple[str, ...]]:
    """The objective of an answer made anywhere, whether it is feasible, and a sentence for every broken constraint.

    ``answer`` is a configuration (n,) of +1 and -1, a value in the user's words, or the object that ``solve --json``
    prints; everything is recomputed from the original problem, and nothing is mended. Where an object has both spins
    and words and they disagree, that is a sentence too. Raises :class:`ProblemError` for what is no answer to this
    problem at all.
    """
    encoding = encoding_of(problem)
    if isinstance(answer, Answer):
        answer = answer.value
    if not isinstance(answer, Mapping):
        objective, broken = encoding.judge_spins(problem.spins_from(answer))
        return objective, not broken, broken
    said = answer["answer"] if isinstance(answer.get("answer"), Mapping) else answer
    in_words = said.get(encoding.main) is not None
    if not in_words and "spins" not in answer:
        raise ProblemError(f'the answer has no entry "{encoding.main}" and no "spins"; it has: {", ".join(said)}')
    verdicts = [encoding.judge(said)] if in_words else []
    if "spins" in answer:
        verdicts.append(encoding.judge_spins(_spins_in(answer["spins"], problem)))
    objective, broken = verdicts[0]
    if len(verdicts) == 2 and (verdicts[1][1] != broken or not math.isclose(verdicts[1][0], objective, abs_tol=1e-9)):
        broken += (f"the spins beside it mean something else, of {problem.objective_name} {verdicts[1][0]:g}",)
    return objective, not broken, broken


def _spins_in(given: Any, problem: Problem) -> npt.NDArray[np.int8]:
    """The list of spins in an object of JSON, as a configuration."""
    if isinstance(given, list) and not all(isinstance(spin, int) for spin in given):
        raise ProblemError('"spins" of the answer hold something but +1 and -1')
    return problem.spins_from(given if isinstance(given, list | np.ndarray) else [])


def read_answer(path: PathLike, problem: Problem) -> dict[str, Any] | npt.NDArray[np.int8]:
    """An answer from a file, as :func:`audit_answer` takes it: JSON, CSV or spins (+1 and -1), plain or ``.gz``.

    Raises :class:`ProblemError` with file and line for what cannot be read.
    """
    if _suffix(path) == ".csv":
        return _read_table(path, encoding_of(problem), problem.kind)
    with contextlib.closing(numbered_lines(path)) as lines:
        text = "".join(text for _, text in lines)
    if not text.lstrip().startswith("{"):
        return read_start(path, problem)
    try:
        table = json.loads(text)
    except json.JSONDecodeError as error:
        fail(path, error.lineno, f"not JSON: {error.msg}")
    except (ValueError, RecursionError) as error:
        fail(path, None, f"not JSON that can be read: {error}")
    return dict(table)


def _suffix(path: PathLike) -> str:
    return os.path.splitext(os.fspath(path).removesuffix(".gz"))[1].lower()


def _read_table(path: PathLike, encoding: Encoding, kind: str) -> dict[str, Any]:
    header = f"name,{encoding.main}"
    rows: list[tuple[int, str, str]] = []
    with contextlib.closing(numbered_lines(path)) as lines:
        texts = (text for number, text in lines if rows or not text.startswith("#"))
        reader = csv.reader(texts)
        try:
            for cells in reader:
                if len(cells) != 2:
                    fail(path, reader.line_num, f"expected two columns, {header}, but it has {len(cells)}")
                rows.append((reader.line_num, cells[0], cells[1]))
        except csv.Error as error:
            fail(path, reader.line_num, f"not a row of a CSV ({error})")
    if not rows or [*rows[0][1:]] != header.split(","):
        fail(path, None, f"expected the header {header} of an answer to kind {kind}")
    del rows[0]
    if encoding.shape == "set":
        return {encoding.main: [name for _, name, _ in rows]}
    if encoding.shape == "table":
        return {encoding.main: {name: _plain(cell) for _, name, cell in rows}}
    wrong = next((number for number, _, part in rows if part not in PART_NAMES), None)
    if wrong is not None:
        fail(path, wrong, "a part is 1 or 2")
    names = [(_plain(name) if encoding.names_are_numbers else name, part) for _, name, part in rows]
    return {encoding.main: [[name for name, own in names if own == part] for part in PART_NAMES]}


def _plain(cell: str) -> Any:
    """A number, true, false or a list where the cell is one; else the text."""
    try:
        return json.loads(cell)
    except (ValueError, RecursionError):
        return cell


def write_answer(path: PathLike, problem: Problem, answer: Answer) -> None:
    """Write an answer by the ending of the name: ``.json``, ``.csv``, or text for people; ``.gz`` packs it.

    JSON and CSV are read back by :func:`read_answer`. An existing file is replaced in one step. Raises
    :class:`ProblemError` for a path that cannot be written.
    """
    writers = {".json": _json_lines, ".csv": _table_lines}
    lines = writers.get(_suffix(path), answer_lines)(problem, answer)
    _replace(path, "".join(line + "\n" for line in lines).encode())


def _replace(path: PathLike, content: bytes) -> None:
    """Put a whole file in the place of another, in one step."""
    folder, name = os.path.split(os.fspath(path))
    unfinished = os.path.join(folder, f".{name}.{os.getpid()}.unfinished")
    packed = gzip.compress(content, mtime=0) if name.endswith(".gz") else content
    try:
        with open(unfinished, "wb") as stream:
            stream.write(packed)
        os.replace(unfinished, path)
    except OSError as error:
        fail(path, None, f"cannot be written: {error.strerror or error}")
    finally:
        with contextlib.suppress(OSError):
            os.unlink(unfinished)


def _json_lines(problem: Problem, answer: Answer) -> Iterator[str]:
    table = {
        "kind": problem.kind,
        "verdict": verdict(len(answer.broken), len(answer.mended)),
        "feasible": answer.feasible,
        problem.objective_name: answer.objective,
        "broken": answer.broken,
        "repaired": answer.repaired,
        "mended": answer.mended,
        "changed": answer.changed,
        "answer": dict(answer.value),
        "spins": answer.spins.tolist(),
    }
    yield json.dumps(table, ensure_ascii=False)


def _table_lines(problem: Problem, answer: Answer) -> Iterator[str]:
    encoding = encoding_of(problem)
    yield "# " + "; ".join([verdict(len(answer.broken), len(answer.mended)), _objective(problem, answer)])
    yield from ("# " + " ".join(line.split()) for line in _account(answer))
    rows: list[tuple[Any, Any]] = [("name", encoding.main)]
    said = answer.value[encoding.main]
    if said is None:
        raise ProblemError("these spins have no names; write the answer as .json or .txt")
    if encoding.shape == "set":
        rows += [(name, 1) for name in said]
    elif encoding.shape == "parts":
        rows += [(name, part) for names, part in zip(said, PART_NAMES, strict=True) for name in names]
    else:
        rows += [(name, one if isinstance(one, str) else json.dumps(one)) for name, one in said.items()]
    for row in rows:
        text = io.StringIO()
        csv.writer(text, lineterminator="").writerow(row)
        yield text.getvalue()


def _objective(problem: Problem, answer: Answer) -> str:
    return f"{problem.objective_name} {answer.objective:.12g}"


def _account(answer: Answer) -> Iterator[str]:
    """What is broken; what had been and was mended, and what that changed."""
    for word, sentences in (("broken", answer.broken), ("mended", answer.mended), ("changed", answer.changed)):
        yield from (f"  {word}: {sentence}" for sentence in sentences)


def answer_lines(problem: Problem, answer: Answer) -> Iterator[str]:
    """The answer for people: whether it is valid, what is broken or was mended, the objective, names and values."""
    encoding = encoding_of(problem)
    yield verdict(len(answer.broken), len(answer.mended))
    yield from _account(answer)
    yield _objective(problem, answer)
    said = answer.value[encoding.main]
    if said is None:
        yield from textwrap.wrap(" ".join(f"{spin:+d}" for spin in answer.spins), WIDTH)
    elif encoding.shape == "set":
        yield f"{encoding.main} ({len(said)}):"
        yield from _wrapped(said)
    elif encoding.shape == "parts":
        for names, part in zip(said, PART_NAMES, strict=True):
            yield f"part {part} ({len(names)}):"
            yield from _wrapped(names)
    else:
        yield from (f"  {name}: {in_words(one)}" for name, one in said.items())


def _wrapped(names: list[Any]) -> list[str]:
    return textwrap.wrap(", ".join(map(str, names)), WIDTH, initial_indent="  ", subsequent_indent="  ")
