"""Matrices, graphs and arrays: what others write is read, what we write others read, and nothing is lost between."""

from __future__ import annotations

import gzip
import io
import json
import pickle
import zipfile
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
import scipy.io
from hypothesis import given, settings
from hypothesis import strategies as st

from patchwalk.problem import sources
from patchwalk.problem.families import make
from patchwalk.problem.files import read_problem, write_problem
from patchwalk.problem.ising import Problem, ProblemError

ENDINGS = [".mtx", ".mtx.gz", ".graphml", ".graphml.gz", ".json", ".json.gz", ".npz"]
GRAPH_KINDS = {
    "ising": "# offset = 2\n4 4\n1 2 1.5\n2 3 -1e-7\n3 3 .3\n1 3 7\n",
    "maxcut": "4 3\n1 2 1.5\n2 3 -1\n1 3 2\n",
    "qubo": "# offset = -2\n4 3\n1 2 1.5\n2 3 -1\n3 3 .3\n",
    "independent_set": "4 4\n1 2 1\n2 3 1\n3 3 2\n1 1 0\n",
    "vertex_cover": "4 3\n1 2 1\n2 3 1\n3 3 2\n",
    "colouring": "# colours = 3\n4 3\n1 2\n2 3\n1 3\n",
    "balanced_partition": "4 3\n1 2 2\n2 3 3\n3 4 2\n",
}


def saved(folder, name, content):
    path = folder / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("kind", GRAPH_KINDS)
@pytest.mark.parametrize("names", [None, ["Zürich", "<b>&'\"", "東 京", "-- 4"]])
def test_every_kind_is_written_and_read_back(tmp_path, ending, kind, names):
    head = "" if names is None else f"# names = {json.dumps(names)}\n"
    problem = read_problem(saved(tmp_path, "first.txt", head + GRAPH_KINDS[kind]), kind)
    path = tmp_path / f"again{ending}"
    if ending == ".npz" and kind not in ("ising", "maxcut"):
        with pytest.raises(ProblemError, match=r"is written to a \.txt or"):
            write_problem(problem, path)
        return
    write_problem(problem, path, recipe=["made -- by hand & foot"])
    again = read_problem(path)
    assert again.fingerprint == problem.fingerprint
    if names is not None:
        assert again.names == problem.names
    write_problem(problem, tmp_path / f"same{ending}", recipe=["made -- by hand & foot"])
    assert path.read_bytes() == (tmp_path / f"same{ending}").read_bytes()


@pytest.mark.parametrize("ending", [".txt", ".csv", *ENDINGS])
def test_planted_energies_go_along(tmp_path, ending):
    problem = make("tiles", 4)
    write_problem(problem, tmp_path / f"p{ending}")
    again = read_problem(tmp_path / f"p{ending}")
    assert again.details["planted_energy"] == problem.details["planted_energy"]
    assert again.fingerprint == problem.fingerprint


def weighted_graph(seed, nodes=7):
    draws = np.random.default_rng(seed)
    graph = nx.gnp_random_graph(nodes, 0.5, seed=seed)
    for one, other in graph.edges:
        graph.edges[one, other]["weight"] = float(draws.normal())
    for node in graph.nodes:
        graph.nodes[node]["field"] = float(draws.normal())
    return nx.relabel_nodes(graph, {node: f"ü{node}" for node in graph})


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("ending", [".graphml", ".json"])
def test_graphs_that_networkx_writes_are_read_and_the_other_way_round(tmp_path, seed, ending):
    graph = weighted_graph(seed)
    expected = Problem.from_networkx(graph, kind="ising")
    path = tmp_path / f"theirs{ending}"
    if ending == ".json":
        path.write_text(json.dumps(nx.node_link_data(graph, edges="edges" if seed > 1 else "links")))
    else:
        nx.write_graphml(graph, path)
    problem = read_problem(path, "ising")
    assert problem.fingerprint == expected.fingerprint
    assert problem.names == expected.names
    write_problem(problem, tmp_path / f"ours{ending}")
    if ending == ".json":
        back = nx.node_link_graph(json.loads((tmp_path / f"ours{ending}").read_text()), edges="edges")
    else:
        back = nx.read_graphml(tmp_path / f"ours{ending}")
    assert Problem.from_networkx(back, kind="ising").fingerprint == expected.fingerprint


def test_graphs_without_weights_and_with_directions(tmp_path):
    nx.write_graphml(nx.karate_club_graph().to_directed(), tmp_path / "k.graphml")
    problem = read_problem(tmp_path / "k.graphml", "ising")
    assert len(problem) == 34
    assert "the directions of edges are left out" in problem.notes
    assert "78 pairs occur more than once; their weights were summed" in problem.notes
    (tmp_path / "p.json").write_text(json.dumps(nx.node_link_data(nx.petersen_graph(), edges="edges")))
    petersen = read_problem(tmp_path / "p.json", "maxcut")
    assert petersen.names == tuple(map(str, range(10)))
    assert petersen.offset == -7.5


@pytest.mark.parametrize("kind", ["ising", "maxcut", "qubo"])
@pytest.mark.parametrize("layout", ["coordinate", "array"])
@pytest.mark.parametrize("symmetry", ["symmetric", "general"])
def test_matrices_that_scipy_writes_are_read(tmp_path, kind, layout, symmetry):
    draws = np.random.default_rng(4)
    matrix = np.where(draws.random((6, 6)) < 0.6, draws.normal(size=(6, 6)), 0.0)
    if symmetry == "symmetric" or kind != "qubo":
        matrix += matrix.T
    if kind == "maxcut":
        np.fill_diagonal(matrix, 0.0)
    content = matrix if layout == "array" else scipy.sparse.coo_array(matrix)
    scipy.io.mmwrite(tmp_path / "m.mtx", content, symmetry=symmetry, precision=17)
    problem = read_problem(tmp_path / "m.mtx", kind)
    for number in range(2**6):
        bits = (number >> np.arange(6)) & 1
        spins = 1 - 2 * bits
        if kind == "qubo":
            value = bits @ matrix @ bits
        elif kind == "ising":
            value = spins @ np.triu(matrix, 1) @ spins + np.diag(matrix) @ spins
        else:
            value = -(np.triu(matrix, 1) * (spins[:, None] != spins)).sum()
        assert problem.energy(spins) == pytest.approx(value, abs=1e-12)  # sums of 36 terms of size 1


@pytest.mark.parametrize("kind", ["ising", "qubo"])
def test_scipy_reads_the_matrices_that_we_write(tmp_path, kind):
    problem = read_problem(saved(tmp_path, "first.txt", GRAPH_KINDS[kind]), kind)
    write_problem(problem, tmp_path / "m.mtx")
    matrix = scipy.io.mmread(tmp_path / "m.mtx").toarray()
    assert np.array_equal(matrix, matrix.T)
    if kind == "ising":
        assert np.array_equal(matrix - np.diag(problem.fields), problem.matrix.toarray())
    else:
        bits = np.array([1, 1, 1, 0])
        assert bits @ matrix @ bits - 2 == pytest.approx(problem.energy(1 - 2 * bits), abs=1e-15)


PATTERN = "%%MatrixMarket matrix coordinate pattern symmetric\n% a comment\n3 3 2\n2 1\n3 2\n"


def test_a_pattern_has_weights_of_one(tmp_path):
    problem = read_problem(saved(tmp_path, "m.mtx", PATTERN), "maxcut")
    assert (2 * problem.matrix).toarray().tolist() == [[0, 1, 0], [1, 0, 1], [0, 1, 0]]


BANNER = "%%MatrixMarket matrix coordinate real symmetric\n"
ARRAY = "%%MatrixMarket matrix array real symmetric\n"
XML = '<graphml><key id="w" for="edge" attr.name="weight"/>\n<graph>\n<node id="a"/><node id="b"/>\n'
BOMB = '<!DOCTYPE g [<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;&a;&a;">]>\n<graphml>&b;&b;&b;</graphml>'
FAULTS = [
    ("m.mtx", "3 3 1\n2 1 1\n", "line 1: expected '%%MatrixMarket matrix coordinate real symmetric'"),
    ("m.mtx", "", "line 1: expected '%%MatrixMarket"),
    ("m.mtx", BANNER.replace("real", "complex"), "line 1: 'complex' cannot be read here; expected real or integer"),
    ("m.mtx", BANNER.replace("symmetric", "hermitian"), "line 1: 'hermitian' cannot be read here"),
    ("m.mtx", "%%MatrixMarket matrix\n", "line 1: '' cannot be read here; expected coordinate or array"),
    ("m.mtx", BANNER, "the file is empty"),
    ("m.mtx", BANNER + "% c\n3 3\n", "line 3: expected the numbers of rows, columns and entries, but it reads '3 3'"),
    ("m.mtx", BANNER + "3 4 1\n2 1 1\n", "line 2: 3 x 4 x 1 is promised; expected a square matrix"),
    ("m.mtx", BANNER + f"{10**18} {10**18} 1\n2 1 1\n", "line 2: 1000000000000000000 x 1000000000000000000 x 1 is"),
    ("m.mtx", BANNER + f"{'1' * 10_000} 3 1\n", "line 2: expected the numbers"),
    ("m.mtx", BANNER + "3 3 1\n2 1 heavy\n", "line 3: weight 'heavy' is not a finite number"),
    ("m.mtx", BANNER + "3 3 1\n4 1 1\n", "line 3: vertex 4 does not exist"),
    ("m.mtx", BANNER + "3 3 2\n2 1 1\n", "line 3: the file ends after 1 edge lines"),
    ("m.mtx", BANNER + "3 3 1\n2 1\n", "line 3: expected 3 columns"),
    ("m.mtx", BANNER + "3 3 1\n1 2 1\n", "entry 1 2 stands above the diagonal"),
    ("m.mtx", BANNER + "3 3 1\n2 2 1\n", "line 3: vertex 2 is joined to itself"),
    ("m.mtx", BANNER.replace("symmetric", "general") + "3 3 2\n1 2 1\n2 1 2\n", "entry 1 2 is not equal to entry 2 1"),
    ("m.mtx", BANNER.replace("symmetric", "general") + "3 3 1\n1 2 1\n", "entry 1 2 is not equal to entry 2 1"),
    ("m.mtx", ARRAY + "2 2\n0\n1\n", "line 4: 2 values are there, but line 2 promises 3"),
    ("m.mtx", ARRAY + "2 2\n0\n1\n0\n0\n", "line 6: 4 values are there, but line 2 promises 3"),
    ("m.mtx", ARRAY + "2 2\n0\none\n0\n", "line 4: value 'one' is not a finite number"),
    ("m.mtx", ARRAY + "2 2\n0\n1\n5\n", "entry 2 of the diagonal is not 0, but kind maxcut has no fields"),
    ("m.mtx", ARRAY + "2000000000 2000000000\n0\n", "line 3: 1 values are there, but line 2 promises"),
    ("g.graphml", "<graphml>\n<graph>\n</graphml>", "line 3: not XML that can be read: mismatched tag"),
    ("g.graphml", "", "line 1: not XML that can be read: no element found"),
    ("g.graphml", "<html/>", "line 1: the document is 'html'; expected graphml"),
    ("g.graphml", BOMB, "line 1: a document type is not read, for what it may define; remove the DOCTYPE"),
    ("g.graphml", '<?xml version="1.0" encoding="klingon"?><graphml/>', "line 1: not XML that can be read"),
    ("g.graphml", f'<?xml version="1.0" encoding="{"9" * 5000}"?><graphml/>', "line 1: not XML that can be read"),
    ("g.graphml", "<graphml/>", "there are no nodes"),
    ("g.graphml", XML + "\n<node/></graph></graphml>", "line 5: node without id"),
    ("g.graphml", XML + '\n<node id="a"/></graph></graphml>', "line 5: node 'a' is there already"),
    ("g.graphml", XML + '\n<edge source="a"/></graph></graphml>', "line 5: edge without target"),
    ("g.graphml", XML + '\n<edge source="a" target="c"/></graph></graphml>', "line 5: node 'c' does not exist"),
    ("g.graphml", XML + '\n<edge source="a" target="a"/></graph></graphml>', "line 5: vertex 'a' is joined to itself"),
    (
        "g.graphml",
        XML + '<edge source="a" target="b">\n<data key="w">nan</data></edge></graph></graphml>',
        "line 5: weight 'nan' is not a finite number",
    ),
    ("g.graphml", XML + "\n<hyperedge/></graph></graphml>", "line 5: hyperedge: only a plain graph"),
    ("g.graphml", XML + '<node id="c">\n<graph/></node></graph></graphml>', "line 5: graph: only a plain graph"),
    ("g.graphml", XML + "</graph>\n<graph/></graphml>", "line 5: a second graph"),
    ("g.graphml", "<graphml>" + "<x>" * 100_000, "line 1: x: only a plain graph"),
    ("g.graphml", XML + '<node id="c"><data key="field">2</data></node></graph></graphml>', "node 'c' has a field"),
    (
        "g.graphml",
        '<graphml><key id="w" attr.name="weight">\n<default>2</default></key></graphml>',
        "line 2: a default",
    ),
    ("g.json", "", "line 1: not JSON: Expecting value"),
    ("g.json", '{"nodes": [],\n"edges": [}', "line 2: not JSON"),
    ("g.json", "[" * 100_000, "not JSON that can be read"),
    ("g.json", '{"nodes": [' + "1" * 10_000 + "]}", "not JSON that can be read"),
    ("g.json", b'{"nodes":\n"\xff"}', "line 2: not UTF-8 text"),
    ("g.json", "[1, 2]", 'line 1: expected an object with lists "nodes" and "edges"'),
    ("g.json", '{"nodes": []}', 'line 1: there is no list "edges"'),
    ("g.json", '{"nodes": [], "edges": []}', "there are no nodes"),
    (
        "g.json",
        '{"nodes": [{"id": 1},\n{"id": "1"}], "edges": []}',
        "line 2: nodes, entry 2: node '1' is there already",
    ),
    (
        "g.json",
        '{"nodes": [{"id": 1},\n[]], "edges": []}',
        'line 2: nodes, entry 2: expected an object with an entry "id"',
    ),
    ("g.json", '{"nodes": [\n{"id": [1]}], "edges": []}', "line 2: nodes, entry 1: \"id\" is '[1]'; expected a name"),
    (
        "g.json",
        '{"nodes": [{"id": "a"}],\n"edges": [\n{"source": "a", "target": "b"}]}',
        "line 3: edges, entry 1: node 'b' does not exist",
    ),
    (
        "g.json",
        '{"nodes": [{"id": "a"}, {"id": "b"}],\n"links": [\n{"source": "a", "target": "b", "weight": NaN}]}',
        "line 3: links, entry 1: weight 'NaN' is not a finite number",
    ),
    (
        "g.json",
        '{"nodes": [{"id": "a"}], "edges": [\n{"source": "a", "target": "a"}]}',
        "line 2: edges, entry 1: node 'a' is joined to itself",
    ),
    ("g.json", '{"nodes": [\n{"id": "a", "field": 2}], "edges": []}', "line 2: nodes, entry 1: node 'a' has a field"),
    ("p.npz", b"", "not a .npz file"),
    ("p.npz", b"PK\x03\x04 nothing more", "not a .npz file"),
]


@pytest.mark.parametrize(("name", "content", "message"), FAULTS)
@pytest.mark.parametrize("packed", [False, True])
def test_a_faulty_file_is_refused_with_its_line(tmp_path, name, content, message, packed):
    if packed:
        content, name = gzip.compress(content if isinstance(content, bytes) else content.encode()), f"{name}.gz"
    with pytest.raises(ProblemError) as caught:
        read_problem(saved(tmp_path, name, content), "maxcut")
    said = str(caught.value).replace(f"{tmp_path}/", "")
    assert said.startswith(f"{name}, {message}" if message.startswith("line") else f"{name}: {message}")
    assert len(said) < 300


def test_an_entity_bomb_is_stopped_before_it_goes_off(tmp_path):
    with pytest.raises(ProblemError, match="document type"):
        read_problem(saved(tmp_path, "bomb.graphml", BOMB), "maxcut")


def arrays_file(folder, **changed):
    """A .npz of two spins with some entries replaced: by an array, by the bytes of the entry, or left out (None)."""
    header = json.dumps({"patchwalk": 1, "kind": "ising", "offset": 0.5}).encode()
    entries = {
        "header": np.frombuffer(header, np.uint8),
        "heads": np.array([0], "<i4"),
        "tails": np.array([1], "<i4"),
        "couplings": np.array([1.5]),
        "fields": np.array([0.0, 2.0]),
    } | changed
    with zipfile.ZipFile(folder / "p.npz", "w", zipfile.ZIP_DEFLATED) as archive:
        for name, entry in entries.items():
            if isinstance(entry, np.ndarray):
                stream = io.BytesIO()
                np.lib.format.write_array(stream, entry, version=(1, 0))
                entry = stream.getvalue()
            if entry is not None:
                archive.writestr(f"{name}.npy", entry)
    return folder / "p.npz"


def npy(shape, descr="<f8", body=b""):
    """An entry whose own header promises what it likes."""
    stream = io.BytesIO()
    np.lib.format.write_array_header_1_0(stream, {"shape": shape, "descr": descr, "fortran_order": False})
    return stream.getvalue() + body


def test_arrays_are_read_as_numpy_writes_them(tmp_path):
    problem = read_problem(arrays_file(tmp_path))
    assert problem.energy([1, -1]) == 0.5 - 1.5 - 2
    with np.load(tmp_path / "p.npz", allow_pickle=False) as arrays:
        assert arrays["couplings"].tolist() == [1.5]


class Surprise:
    """What a pickle could do when it is read."""

    def __reduce__(self):
        return (pytest.fail, ("a pickle was read",))


@pytest.mark.parametrize(
    ("changed", "message"),
    [
        ({"fields": None}, "there is no entry fields; expected header, heads, tails, couplings, fields"),
        ({"fields": npy((10**18,))}, "entry fields is float64 of shape \\(1000000000000000000,\\) in 0 bytes"),
        ({"fields": np.zeros((1, 2))}, "entry fields is float64 of shape \\(1, 2\\)"),
        ({"heads": np.array([0.0])}, "entry heads is float64 of shape"),
        ({"fields": b"nothing"}, "entry fields has no header that can be read"),
        ({"fields": npy((1,), "|O", pickle.dumps(Surprise()))}, "entry fields is object of shape"),
        ({"couplings": np.array([np.nan])}, "only finite numbers make an energy"),
        ({"couplings": np.array([1.0, 2.0])}, "1 heads, 1 tails and 2 weights"),
        ({"tails": np.array([7], "<i4")}, "spin 7 does not exist"),
        ({"heads": np.array([-1], "<i4")}, "spin -1 does not exist"),
        ({"heads": np.array([1], "<i4")}, "each pair stands once, smaller first"),
        ({"header": np.frombuffer(b"[1]", np.uint8)}, "entry header does not say"),
        ({"header": np.frombuffer(b"{", np.uint8)}, "entry header is not JSON"),
        ({"header": np.frombuffer(b'{"patchwalk": 2}', np.uint8)}, "written in version 2 of this layout"),
        ({"header": np.frombuffer(b'{"patchwalk": 1, "kind": "qubo"}', np.uint8)}, "kind qubo is not read from such"),
        ({"header": np.frombuffer(b'{"patchwalk": 1, "kind": "maxcut"}', np.uint8)}, "kind maxcut has no fields"),
    ],
)
def test_faulty_arrays_are_refused(tmp_path, changed, message):
    with pytest.raises(ProblemError, match=message) as caught:
        read_problem(arrays_file(tmp_path, **changed))
    assert "p.npz" in str(caught.value)


def test_arrays_that_unpack_without_end_are_refused(tmp_path, monkeypatch):
    monkeypatch.setattr("patchwalk.problem.packed.UNPACKED_ALWAYS", 100_000)
    path = arrays_file(tmp_path, fields=np.zeros(1_000_000))
    assert path.stat().st_size < 20_000
    with pytest.raises(ProblemError, match="unpacks to more than 100 times its size"):
        read_problem(path)
    assert sources.UNPACKED_ALWAYS > 100_000


def test_constrained_problems_come_through_the_same_door(tmp_path):
    rota = Path(__file__).parents[2] / "configs" / "kiosk-rota.json"
    problem = read_problem(rota)
    assert problem.kind == "constrained"
    write_problem(problem, tmp_path / "again.json.gz")
    assert read_problem(tmp_path / "again.json.gz", "constrained").fingerprint == problem.fingerprint
    with pytest.raises(ProblemError, match="but kind maxcut was asked for"):
        read_problem(rota, "maxcut")
    (tmp_path / "graph.json").write_text('{"graph": {"kind": "constrained"}, "nodes": [{"id": 1}], "edges": []}')
    with pytest.raises(ProblemError, match="node-link data of a graph, which kind constrained cannot be read from"):
        read_problem(tmp_path / "graph.json")


@settings(max_examples=50)
@given(st.integers(2, 9), st.integers(0, 2**32), st.sampled_from(ENDINGS))
def test_random_problems_survive(tmp_path_factory, size, seed, ending):
    problem = make("sk", size, seed=seed, fields=True)
    path = tmp_path_factory.mktemp("round") / f"p{ending}"
    write_problem(problem, path)
    assert read_problem(path).fingerprint == problem.fingerprint
