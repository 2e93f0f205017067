"""Graphs in GraphML, read in one pass with the line of whatever is wrong.

An edge may have data of the name ``weight`` (1 without); a node ``field`` or ``weight``, which is its field, its
linear coefficient or its own weight as the kind has it. Data of the graph state the rest: ``kind``, ``offset``,
``colours``, ``planted_energy``. Directions are left out, with a note. A document type is refused, and with it every
entity that could be defined there; so are nested graphs, hyperedges and ports.
"""

from __future__ import annotations

import re
from array import array
from collections.abc import Iterable, Iterator
from typing import IO
from xml.parsers import expat
from xml.sax.saxutils import escape, quoteattr

import numpy as np

from patchwalk.problem.edges import shortest
from patchwalk.problem.forms import PathLike
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.pairs import Pairs, different_names, listing
from patchwalk.problem.sources import SETTINGS, Source, chunks, fail, quoted, shortened, stated, write_lines

NAMESPACE = "http://graphml.graphdrawing.org/xmlns"
REFUSED = ("hyperedge", "port", "endpoint")
DEEPEST = 50
LOOP_NAMES = ("field", "weight")
CONTROL = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\ud800-\udfff\ufffe\uffff]")


def read(path: PathLike, kind: str | None, colours: int | None = None) -> Problem:
    """The problem in a GraphML file; raises :class:`ProblemError` with file and line."""
    document = _Document(path)
    try:
        for chunk in chunks(path):
            document.parser.Parse(chunk, False)
        document.parser.Parse(b"", True)
    except expat.ExpatError as error:
        fail(path, error.lineno, f"not XML that can be read: {expat.ErrorString(error.code)}")
    except ProblemError:
        raise
    except (LookupError, ValueError) as error:  # an encoding that does not exist, or that expat cannot use
        fail(path, document.line, f"not XML that can be read: {str(error)[:100]}")
    return document.problem(kind, colours)


class _Document:
    """What has been read of a document: nodes in order, ends of edges by place of first mention."""

    def __init__(self, path: PathLike) -> None:
        self.path = path
        self.parser = expat.ParserCreate()
        self.parser.StartElementHandler = self._start
        self.parser.EndElementHandler = self._end
        self.parser.CharacterDataHandler = self._text
        self.parser.StartDoctypeDeclHandler = self._doctype
        self.parser.buffer_text = True
        self.open: list[str] = []
        self.keys: dict[str, str] = {}
        self.settings: dict[str, tuple[object, int]] = {}
        self.places: dict[str, int] = {}  # of all names, in order of mention
        self.nodes: dict[str, float | None] = {}  # declared ones, with their field or weight
        self.heads, self.tails, self.lines = array("q"), array("q"), array("q")
        self.weights = array("d")
        self.data: tuple[str, int, list[str]] | None = None
        self.name = ""
        self.graphs = 0
        self.handlers = {
            "graph": self._graph,
            "key": self._key,
            "default": self._default,
            "node": self._node,
            "edge": self._edge,
            "data": self._datum,
        }
        self.notes: list[str] = []

    @property
    def line(self) -> int:
        """Where the parser is."""
        return self.parser.CurrentLineNumber

    def _doctype(self, name: str, *_: object) -> None:  # noqa: ARG002 - expat's signature
        fail(self.path, self.line, "a document type is not read, for what it may define; remove the DOCTYPE")

    def _start(self, name: str, given: dict[str, str]) -> None:
        tag = name.rpartition(":")[2]
        if not self.open and tag != "graphml":
            fail(self.path, self.line, f"the document is {quoted(tag)}; expected graphml")
        if tag in REFUSED or (tag == "graph" and "node" in self.open) or len(self.open) > DEEPEST:
            fail(self.path, self.line, f"{shortened(tag)}: only a plain graph of nodes and edges makes a problem")
        self.open.append(tag)
        if tag in self.handlers:
            self.handlers[tag](given)

    def _graph(self, given: dict[str, str]) -> None:
        self.graphs += 1
        if self.graphs > 1:
            fail(self.path, self.line, "a second graph; one file is one problem")
        if given.get("edgedefault") == "directed":
            self.notes.append("the directions of edges are left out")

    def _key(self, given: dict[str, str]) -> None:
        self.keys[given.get("id", "")] = given.get("attr.name", given.get("id", ""))

    def _node(self, given: dict[str, str]) -> None:
        name = self._asked(given, "id")
        if name in self.nodes:
            fail(self.path, self.line, f"node {quoted(name)} is there already; names must differ")
        self.nodes[name] = None
        self.places.setdefault(name, len(self.places))
        self.name = name

    def _edge(self, given: dict[str, str]) -> None:
        for name, ends in (("source", self.heads), ("target", self.tails)):
            ends.append(self.places.setdefault(self._asked(given, name), len(self.places)))
        self.lines.append(self.line)
        self.weights.append(1.0)

    def _asked(self, given: dict[str, str], name: str) -> str:
        if not given.get(name, "").strip():
            fail(self.path, self.line, f"{self.open[-1]} without {name}")
        return given[name]

    def _datum(self, given: dict[str, str]) -> None:
        self.data = self.keys.get(given.get("key", ""), given.get("key", "")), self.line, []

    def _default(self, _: dict[str, str]) -> None:
        name = next(reversed(self.keys.values()), "")
        if name in LOOP_NAMES:
            fail(self.path, self.line, f"a default {name} is not read; write the {name} of every node or edge")

    def _text(self, text: str) -> None:
        if self.data is not None:
            self.data[2].append(text)

    def _end(self, name: str) -> None:
        if self.open.pop() != "data" or self.data is None:
            return
        name, line, parts = self.data
        self.data, text, owner = None, "".join(parts).strip(), self.open[-1]
        number = Source(self.path, {}, iter(())).number
        if owner == "edge" and name == "weight":
            self.weights[-1] = number(text, line, "weight")
        elif owner == "node" and name in LOOP_NAMES:
            if self.nodes[self.name] is not None:
                fail(self.path, line, f"node {quoted(self.name)} has both a field and a weight; keep one")
            self.nodes[self.name] = number(text, line, name)
        elif owner in ("graph", "graphml") and name in SETTINGS:
            self.settings[name] = text, line

    def problem(self, kind: str | None, colours: int | None) -> Problem:
        """The problem, once all is read."""
        source = stated(self.path, self.settings, colours)
        kind = source.kind(kind)
        if not self.nodes:
            source.fail(None, "there are no nodes; a problem needs two or more")
        undeclared = [name for name in self.places if name not in self.nodes]
        heads, tails = np.array(self.heads, np.int64), np.array(self.tails, np.int64)
        if undeclared:
            place = self.places[undeclared[0]]
            edge = int(np.flatnonzero((heads == place) | (tails == place))[0])
            source.fail(self.lines[edge], f"node {quoted(undeclared[0])} does not exist; add it, or correct the name")
        order = np.empty(len(self.nodes), np.int64)
        order[[self.places[name] for name in self.nodes]] = np.arange(len(self.nodes))
        pairs = Pairs(source, kind)
        pairs.notes += self.notes
        loops = np.flatnonzero(heads == tails)
        alone = [(place, value) for place, value in enumerate(self.nodes.values()) if value is not None]
        if not pairs.takes_loops:
            if len(loops):
                pairs.refuse_loop(self.lines[loops[0]], quoted(list(self.places)[heads[loops[0]]]))
            alone = self._without_fields(source, kind, alone)
        pairs.extend(order[heads], order[tails], np.array(self.weights, np.float64))
        ends = np.array([place for place, _ in alone], np.int64)
        pairs.extend(ends, ends, np.array([value for _, value in alone], np.float64))
        return pairs.problem(len(self.nodes), tuple(self.nodes))

    def _without_fields(self, source: Source, kind: str, alone: list[tuple[int, float]]) -> list[tuple[int, float]]:
        named = [place for place, value in alone if value != 0]
        if named:
            name = list(self.nodes)[named[0]]
            source.fail(None, f"node {quoted(name)} has a field or a weight, but kind {kind} has none; remove it")
        return []


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write GraphML, nodes and edges in the problem's order."""
    write_lines(stream, (), _lines(problem, list(recipe)))


def _lines(problem: Problem, recipe: list[str]) -> Iterator[str]:
    content = listing(problem)
    names = [quoteattr(name) for name in different_names(content)]
    unfit = next((name for name in names if CONTROL.search(name)), None)
    if unfit is not None:
        raise ProblemError(f"name {quoted(unfit)} has a control character, which XML cannot hold; write a .json file")
    settings = [tuple(setting.split(" = ", 1)) for setting in content.settings]
    yield '<?xml version="1.0" encoding="utf-8"?>'
    yield f'<graphml xmlns="{NAMESPACE}">'
    for line in recipe:
        yield f"<!-- recipe: {escape(line).replace('--', '- -')} -->"
    for name, _ in settings:
        yield f'<key id="{name}" for="graph" attr.name="{name}" attr.type="string"/>'
    yield '<key id="field" for="node" attr.name="field" attr.type="double"/>'
    yield '<key id="weight" for="edge" attr.name="weight" attr.type="double"/>'
    yield '<graph edgedefault="undirected">'
    for name, value in settings:
        yield f'<data key="{name}">{escape(value)}</data>'
    loops = content.heads == content.tails
    fields = dict(zip(content.heads[loops].tolist(), content.weights[loops].tolist(), strict=True))
    for place, name in enumerate(names):
        if place in fields:
            yield f'<node id={name}><data key="field">{shortest(fields[place])}</data></node>'
        else:
            yield f"<node id={name}/>"
    ends = (end[~loops].tolist() for end in (content.heads, content.tails))
    for one, other, weight in zip(*ends, content.weights[~loops].tolist(), strict=True):
        datum = f'<data key="weight">{shortest(weight)}</data>'
        yield f"<edge source={names[one]} target={names[other]}>{datum}</edge>"
    yield "</graph>"
    yield "</graphml>"
