"""Which file may hold what: the table behind reading, writing and the help.

What a file is, is told by its name; every one may also be packed (``.gz``).
"""

from __future__ import annotations

import os
from typing import NamedTuple

PathLike = str | os.PathLike[str]

PAIR_KINDS = ("ising", "maxcut", "qubo", "independent_set", "vertex_cover", "colouring", "balanced_partition")


class Form(NamedTuple):
    """A way to hold a problem in a file: endings of its name, the module that reads and writes it, its kinds.

    A module has ``read(path, kind) -> Problem`` and ``write(problem, stream, recipe)``.
    """

    what: str
    endings: tuple[str, ...]
    module: str
    kinds: tuple[str, ...]


EDGES = Form("a weighted edge list: 'n m', then lines 'i j w'", (".txt", "any other"), "edges", PAIR_KINDS)
FORMS = (
    EDGES,
    Form("numbers to be split", (".txt", "any other"), "numbers", ("partition",)),
    Form("a table of pairs of names with weights", (".csv",), "tables", PAIR_KINDS),
    Form("a table of sites and relations", (".csv",), "tables", ("beacons",)),
    Form("a matrix (Matrix Market)", (".mtx",), "matrices", PAIR_KINDS),
    Form("a graph (GraphML)", (".graphml",), "graphml", PAIR_KINDS),
    Form("a graph (node-link JSON)", (".json",), "nodelink", PAIR_KINDS),
    Form("choices under constraints, in our own layout", (".json",), "layout_json", ("constrained",)),
    Form("clauses (DIMACS)", (".cnf", ".wcnf"), "dimacs", ("max2sat", "max3sat")),
    Form("arrays, compressed", (".npz",), "packed", ("ising", "maxcut")),
)
ENDINGS = frozenset(ending for form in FORMS for ending in form.endings)


def ending_of(path: PathLike) -> str:
    """The ending that tells what a file is: ``.csv`` for ``a.CSV.gz``; "any other" where it is none of ours."""
    ending = os.path.splitext(os.fspath(path).removesuffix(".gz").lower())[1]
    return ending if ending in ENDINGS else "any other"


def forms_of(path: PathLike) -> tuple[Form, ...]:
    """What a file of this name may hold."""
    ending = ending_of(path)
    return tuple(form for form in FORMS if ending in form.endings)


def homes_of(kind: str) -> str:
    """The endings of the files that can hold a kind, for a sentence.

    >>> homes_of("max2sat")
    '.cnf or .wcnf'
    """
    endings = [ending for form in FORMS if kind in form.kinds for ending in form.endings if ending != "any other"]
    return " or ".join(endings)


def table_of_kinds() -> str:
    """The table for the help: endings, what such a file holds, and which kinds it can be of."""
    rows = []
    for form in FORMS:
        endings = "others" if "any other" in form.endings else " ".join(form.endings)
        kinds = "kinds of pairs" if form.kinds == PAIR_KINDS else ", ".join(form.kinds)
        rows.append(f"{endings:10} {form.what}: {kinds}")
    pairs = [", ".join(PAIR_KINDS[:4]) + ",", ", ".join(PAIR_KINDS[4:])]
    return "\n".join([*rows, f"kinds of pairs: {pairs[0]}", f"{'':16}{pairs[1]}"])
