"""Problems and start configurations read from files, and problems written to them.

:mod:`patchwalk.problem.forms` is the table of what a file may hold. Leading comments may state ``# kind = ising``,
``# offset = 1.5`` (the constant of the energy), ``# colours = 3``, ``# names = ["a", "b"]`` (JSON) and
``# planted_energy = -12``; graphs and arrays state the same in their own way. :func:`write_problem` writes whatever a
file needs to be read back as the same problem.

**Memory** while reading stays below 200 MB and 60 times the size of the unpacked file, and a packed file may not
unpack to more than 16 MB and 100 times its size.
"""

from __future__ import annotations

import contextlib
import importlib
import json
from collections.abc import Iterable
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.forms import PathLike, forms_of, homes_of
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import fail, numbered_lines, quoted, replacing

OPTIONS_OF_KINDS = {"flip_sign": "ising", "field_file": "ising", "colours": "colouring"}
SPIN_WORDS = {"+1": 1, "1": 1, "-1": -1}


def read_problem(
    path: PathLike,
    kind: str | None = None,
    *,
    field_file: PathLike | None = None,
    flip_sign: bool = False,
    colours: int | None = None,
) -> Problem:
    """The problem that a file holds; ``kind`` says what its numbers mean, unless the file itself does.

    Pairs that occur more than once are summed, with a note. ``field_file`` is a CSV of names and fields, which are
    added; ``flip_sign`` is for numbers of the opposite convention, E = -sum J s s - sum h s, and turns the signs of
    couplings and fields (of both files). Both belong to kind ``ising``. ``colours`` is how many there are, for kind
    ``colouring``. Raises :class:`ProblemError` with file and
    line for whatever cannot be read, or does not make a problem.
    """
    forms = forms_of(path)
    coloured = {"colours": colours} if any("colouring" in form.kinds for form in forms) else {}
    problem: Problem = _module(forms[0].module).read(path, kind, **coloured)
    given = {"flip_sign": flip_sign, "field_file": field_file is not None, "colours": colours is not None}
    for option, own in OPTIONS_OF_KINDS.items():
        if given[option] and problem.kind != own:
            raise ProblemError(f"{option} belongs to kind {own}, but {path} is of kind {problem.kind}; leave it out")
    if field_file is not None:
        from patchwalk.problem.field_tables import read_fields

        fields, notes = read_fields(field_file, problem)
        problem = replace(problem, fields=problem.fields + fields, notes=(*problem.notes, *notes))
    return _flipped(problem) if flip_sign else problem


def _flipped(problem: Problem) -> Problem:
    return replace(
        problem,
        couplings=-problem.couplings,
        fields=-problem.fields,
        notes=(*problem.notes, "the signs of couplings and fields were turned"),
    )


def write_problem(problem: Problem, path: PathLike, recipe: Iterable[str] = ()) -> None:
    """Write a problem so that :func:`read_problem` gives it back bit for bit; gzipped if named ``.gz``.

    ``recipe`` lines (by default ``problem.details["recipe"]``) become leading comments. A ``maxcut`` problem is
    written with its edge weights 2J, kind ``ising`` with couplings and fields, all others with the numbers that they
    were made from. An existing file is replaced in one step, and only by a whole one. Raises :class:`ProblemError`
    for what a file cannot hold and for a path that cannot be written.
    """
    forms = [form for form in forms_of(path) if problem.kind in form.kinds]
    if not forms:
        fail(path, None, f"kind {problem.kind} is written to a {homes_of(problem.kind)} file; rename it")
    entries = tuple(recipe) or tuple(problem.details.get("recipe", ()))
    lines = [line for entry in entries for line in entry.splitlines()]
    with replacing(path) as stream:
        _module(forms[0].module).write(problem, stream, lines)


def _module(name: str) -> Any:
    """The module that reads and writes a form, imported only where it is needed."""
    return importlib.import_module(f"patchwalk.problem.{name}")


def read_start(path: PathLike, problem: Problem) -> npt.NDArray[np.int8]:
    """A start configuration, i8 (n,), from a file of +1 and -1 or the JSON that ``patchwalk solve --json`` prints.

    Values stand in the input's order, separated by spaces, commas or new lines. Raises :class:`ProblemError` for
    a wrong number of values, and for a value other than +1 or -1.
    """
    with contextlib.closing(numbered_lines(path)) as lines:
        texts = list(lines)
    if "".join(text for _, text in texts[:1]).lstrip().startswith("{"):
        spins = _spins_of_json(path, "".join(text for _, text in texts))
    else:
        spins = [
            SPIN_WORDS.get(word) or fail(path, number, f"{quoted(word)} is no spin; expected +1 or -1")
            for number, text in texts
            for word in text.replace(",", " ").split()
        ]
    if len(spins) != len(problem):
        fail(path, None, f"{len(spins)} values for {len(problem)} spins; give one value each")
    return np.array(spins, np.int8)


def _spins_of_json(path: PathLike, text: str) -> list[int]:
    try:
        spins = json.loads(text)["spins"]
    except json.JSONDecodeError as error:
        fail(path, error.lineno, f"not JSON: {error.msg}")
    except KeyError:
        fail(path, None, 'the JSON object has no entry "spins"')
    except (ValueError, RecursionError) as error:
        fail(path, None, f"not JSON that can be read: {error}")
    if not isinstance(spins, list):
        fail(path, None, '"spins" is not a list; expected a list of +1 and -1')
    for place, value in enumerate(spins):
        if type(value) is not int or value not in (1, -1):
            fail(path, None, f'entry {place} of "spins" is {quoted(str(value))}; expected +1 or -1')
    return [int(value) for value in spins]
