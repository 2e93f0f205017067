"""Graphs as node-link data in JSON, and the way to our own layout for constrained problems.

    {"graph": {"kind": "ising", "offset": 1.5}, "nodes": [{"id": "a", "field": 2}, ...],
     "edges": [{"source": "a", "target": "b", "weight": -1}, ...]}

as networkx writes them (``edges`` or, in its older versions, ``links``). Weights, fields and settings mean what they
mean in :mod:`patchwalk.problem.graphml`. Errors name the line on which an entry begins.
"""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterable, Mapping
from typing import IO, Any, NoReturn

import numpy as np

from patchwalk.problem.forms import PAIR_KINDS, PathLike
from patchwalk.problem.ising import Problem
from patchwalk.problem.pairs import Pairs, different_names, listing
from patchwalk.problem.sources import LARGEST_NUMBER, SETTINGS, chunks, fail, quoted, stated

LOOP_NAMES = ("field", "weight")


def read(path: PathLike, kind: str | None, colours: int | None = None) -> Problem:
    """The problem in a JSON file; raises :class:`ProblemError` with file and line."""
    try:
        text = b"".join(chunks(path)).decode("utf-8-sig")
    except UnicodeDecodeError as error:
        fail(path, error.object.count(b"\n", 0, error.start) + 1, "not UTF-8 text; save the file as UTF-8")
    ours = _constrained(path, kind, text)
    if ours is not None:
        return ours
    try:
        data = json.loads(text)
    except json.JSONDecodeError as error:
        fail(path, error.lineno, f"not JSON: {error.msg}")
    except (ValueError, RecursionError) as error:
        fail(path, None, f"not JSON that can be read: {str(error)[:100]}")
    return _Graph(path, text, data).problem(kind, colours)


def _constrained(path: PathLike, kind: str | None, text: str) -> Problem | None:
    """The problem of choices under constraints, where the text is one in our own layout."""
    from patchwalk.problem.layout_json import is_ours, problem_from_json

    if not is_ours(text):
        return None
    if kind not in (None, "constrained"):
        fail(path, None, f"the file states choices under constraints, but kind {kind} was asked for; drop it")
    return problem_from_json(text, os.fspath(path))


class _Graph:
    """Node-link data, with the text that they came from to find lines in."""

    def __init__(self, path: PathLike, text: str, data: object) -> None:
        self.path, self.text = path, text
        if not isinstance(data, dict) or not isinstance(data.get("nodes"), list):
            fail(path, 1, 'expected an object with lists "nodes" and "edges", as networkx writes them')
        self.word = "links" if "links" in data and "edges" not in data else "edges"
        if not isinstance(data.get(self.word), list):
            fail(path, 1, 'there is no list "edges" (or "links") beside "nodes"')
        settings = data.get("graph", {})
        self.settings = settings if isinstance(settings, dict) else {}
        self.nodes: list[Any] = data["nodes"]
        self.edges: list[Any] = data[self.word]
        self.directed = bool(data.get("directed", False))

    def problem(self, kind: str | None, colours: int | None) -> Problem:
        settings = {name: (self.settings[name], 0) for name in SETTINGS if name in self.settings and name != "names"}
        source = stated(self.path, settings, colours)
        kind = source.kind(kind)
        if kind not in PAIR_KINDS:
            source.fail(None, f"this is node-link data of a graph, which kind {kind} cannot be read from")
        pairs = Pairs(source, kind)
        if self.directed:
            pairs.notes.append("the directions of edges are left out")
        places: dict[str, int] = {}
        for number, node in enumerate(self.nodes):
            name = self._name("nodes", number, node, "id")
            if name in places:
                self._fail("nodes", number, f"node {quoted(name)} is there already; names must differ")
            places[name] = len(places)
        for number, edge in enumerate(self.edges):
            ends = [self._name(self.word, number, edge, end) for end in ("source", "target")]
            for end in ends:
                if end not in places:
                    self._fail(self.word, number, f"node {quoted(end)} does not exist; add it, or correct the name")
            if ends[0] == ends[1] and not pairs.takes_loops:
                self._refuse(self.word, number, ends[0], kind)
            pairs.heads.append(places[ends[0]])
            pairs.tails.append(places[ends[1]])
            pairs.weights.append(self._number(self.word, number, edge, "weight", 1.0))
        self._take_fields(pairs, kind)
        if not places:
            source.fail(None, "there are no nodes; a problem needs two or more")
        return pairs.problem(len(places), tuple(places))

    def _take_fields(self, pairs: Pairs, kind: str) -> None:
        for number, node in enumerate(self.nodes):
            given = [name for name in LOOP_NAMES if name in node]
            if len(given) == 2:
                self._fail("nodes", number, "the node has both a field and a weight; keep one")
            if not given:
                continue
            value = self._number("nodes", number, node, given[0], 0.0)
            if pairs.takes_loops:
                pairs.heads.append(number)
                pairs.tails.append(number)
                pairs.weights.append(value)
            elif value != 0:
                self._refuse("nodes", number, str(node["id"]), kind)

    def _refuse(self, where: str, number: int, name: str, kind: str) -> NoReturn:
        what = "has a field or a weight" if where == "nodes" else "is joined to itself"
        self._fail(where, number, f"node {quoted(name)} {what}, but kind {kind} has no fields; remove it")

    def _name(self, where: str, number: int, entry: object, key: str) -> str:
        if not isinstance(entry, Mapping) or key not in entry:
            self._fail(where, number, f'expected an object with an entry "{key}"')
        value = entry[key]
        if isinstance(value, bool) or not isinstance(value, str | int | float) or not str(value).strip():
            self._fail(where, number, f'"{key}" is {quoted(json.dumps(value))}; expected a name or a number')
        return str(value)

    def _number(self, where: str, number: int, entry: Mapping[str, Any], key: str, default: float) -> float:
        value = entry.get(key, default)
        if isinstance(value, bool) or not isinstance(value, int | float) or not abs(value) <= LARGEST_NUMBER:
            self._fail(where, number, f"{key} {quoted(json.dumps(value))} is not a finite number up to 1e100")
        return float(value)

    def _fail(self, where: str, number: int, message: str) -> NoReturn:
        fail(self.path, line_of(self.text, where, number), f"{where}, entry {number + 1}: {message}")


def line_of(text: str, key: str, entry: int) -> int:
    """The line, from 1, on which an entry (from 0) of a list under a key of the outermost object begins.

    ``text`` is known to be JSON.

    >>> line_of('{"nodes": [1,\\n 2, [3,\\n 4], 5]}', "nodes", 3)
    3
    """
    depth, last, counting, count = 0, "", False, 0
    for token in re.finditer(r'"(?:[^"\\]|\\.)*"|[][{},:]|[^][{},:"\s]+', text):
        word = token.group()
        if depth == 1 and word == "[" and last == key:
            counting, count = True, 0
        elif counting and depth == 2 and word == ",":
            count += 1
        elif counting and depth == 2 and count == entry:
            return text.count("\n", 0, token.start()) + 1
        if word in "[{":
            depth += 1
        elif word in "]}":
            depth -= 1
            counting = counting and depth >= 2
        elif depth == 1 and word not in ",:":
            last = json.loads(word) if word[0] == '"' else ""
    return 1


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write node-link data, an entry a line, which networkx reads too."""
    content = listing(problem)
    names = different_names(content)
    graph: dict[str, object] = {"recipe": list(recipe)}
    for setting in content.settings:
        name, _, value = setting.partition(" = ")
        graph[name] = value if name == "kind" else json.loads(value)
    loops = content.heads == content.tails
    nodes: list[dict[str, object]] = [{"id": name} for name in names]
    for place, value in zip(content.heads[loops].tolist(), content.weights[loops].tolist(), strict=True):
        nodes[place]["field"] = value
    ends = np.stack([content.heads, content.tails], axis=1)[~loops].tolist()
    edges = (
        {"source": names[one], "target": names[other], "weight": weight}
        for (one, other), weight in zip(ends, content.weights[~loops].tolist(), strict=True)
    )
    head = {"directed": False, "multigraph": False, "graph": graph}
    stream.write(json.dumps(head)[:-1].encode())
    for key, entries in (("nodes", iter(nodes)), ("edges", edges)):
        stream.write(f',\n"{key}": ['.encode())
        for number, entry in enumerate(entries):
            stream.write(f"{',' if number else ''}\n{json.dumps(entry)}".encode())
        stream.write(b"]")
    stream.write(b"}\n")
