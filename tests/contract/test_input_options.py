"""What a caller says of a file beside its kind: fields, signs and colours, and of which files it cannot say so."""

from __future__ import annotations

import gzip
import json
import re

import pytest
from click.testing import CliRunner

from patchwalk.interface.solve_options import solve_command
from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import KINDS, ProblemError


def written(folder, name, text):
    """A file with this text; gzipped by name."""
    path = folder / name
    path.write_bytes(gzip.compress(text.encode()) if name.endswith(".gz") else text.encode())
    return path


FIELDS = "name,field\nb,2\na,-1.5\nb,1\n"


def test_fields_come_from_a_file_of_their_own(tmp_path):
    pairs = written(tmp_path, "pairs.csv", "a,b,1\nb,c,1\nc,c,4\n")
    problem = read_problem(pairs, "ising", field_file=written(tmp_path, "fields.csv", FIELDS))
    assert problem.fields.tolist() == [-1.5, 3, 4]
    assert "line 1 was read as a header: 'field' is not a number" in problem.notes
    assert "spins with more than one row of fields, whose values were summed: 1" in problem.notes
    edges = written(tmp_path, "G.txt", "3 2\n1 2 1\n2 3 1\n")
    numbered = read_problem(edges, "ising", field_file=written(tmp_path, "numbered.csv.gz", "3;7\n1;-2\n"))
    assert numbered.fields.tolist() == [-2, 0, 7]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("d,1\n", "fields.csv, line 1: spin 'd' is not in the problem; correct the name"),
        ("name,field\na,1\nd,1\n", "fields.csv, line 3: spin 'd' is not in the problem"),
        ("a,1\nb,heavy\n", "fields.csv, line 2: field 'heavy' is not a finite number"),
        ("a,1\nb,1,2\n", "fields.csv, line 2: expected two columns (name, field) but it has 3"),
        ("", "fields.csv: the file is empty"),
    ],
)
def test_a_faulty_file_of_fields_is_refused_with_file_and_line(tmp_path, text, message):
    pairs = written(tmp_path, "pairs.csv", "a,b,1\n")
    fields = written(tmp_path, "fields.csv", text)
    with pytest.raises(ProblemError, match=re.escape(message)):
        read_problem(pairs, "ising", field_file=fields)


def test_the_opposite_sign_convention_is_turned(tmp_path):
    path = written(tmp_path, "pairs.csv", "# offset = 3\na,b,1\nb,b,2\n")
    fields = written(tmp_path, "fields.csv", "a,5\n")
    plain = read_problem(path, "ising", field_file=fields)
    turned = read_problem(path, "ising", field_file=fields, flip_sign=True)
    for spins in ([1, 1], [1, -1], [-1, 1], [-1, -1]):
        assert turned.energy(spins) - 3 == -(plain.energy(spins) - 3)
    assert "the signs of couplings and fields were turned" in turned.notes
    graph = written(tmp_path, "graph.txt", "2 1\n1 2 1\n")
    with pytest.raises(ProblemError, match="flip_sign belongs to kind ising"):
        read_problem(graph, "maxcut", flip_sign=True)
    with pytest.raises(ProblemError, match="field_file belongs to kind ising"):
        read_problem(graph, "maxcut", field_file=fields)


def test_solve_takes_a_file_of_fields_and_turned_signs(tmp_path):
    written(tmp_path, "pairs.csv", "a,b,1\nb,c,1\n")
    written(tmp_path, "fields.csv", "a,5\nc,2\n")
    words = ["pairs.csv", "--kind", "ising", "--field-file", "fields.csv", "--flip-sign", "--json", "--quiet"]
    words += ["--subsolver", "enumeration", "--cluster-size", "3", "--calls", "3"]
    run = CliRunner().invoke(solve_command, words)
    said = json.loads(run.stdout)
    assert said["energy"] == -9  # all up: every coupling and field is satisfied once turned
    assert said["spins"] == [1, 1, 1]


COLOURABLE = {
    "edges.txt": "3 3\n1 2\n2 3\n1 3\n",
    "pairs.csv": "a,b\nb,c\na,c\n",
    "entries.mtx": "%%MatrixMarket matrix coordinate pattern symmetric\n3 3 3\n2 1\n3 2\n3 1\n",
    "graph.graphml": '<graphml><graph edgedefault="undirected"><node id="a"/><node id="b"/><node id="c"/>'
    '<edge source="a" target="b"/><edge source="b" target="c"/><edge source="a" target="c"/></graph></graphml>',
    "graph.json": '{"nodes": [{"id": 1}, {"id": 2}, {"id": 3}], "edges": [{"source": 1, "target": 2}, '
    '{"source": 2, "target": 3}, {"source": 1, "target": 3}]}',
}


@pytest.mark.parametrize("name", COLOURABLE)
def test_how_many_colours_there_are_may_be_asked_for(tmp_path, name):
    path = written(tmp_path, name, COLOURABLE[name])
    problem = read_problem(path, "colouring", colours=4)
    assert (len(problem), problem.encoding.colours) == (12, 4)
    with pytest.raises(ProblemError, match="Say --colours 3"):
        read_problem(path, "colouring")
    with pytest.raises(ProblemError, match=f"{name}: colours is 1; expected a whole number from 2 to 1000"):
        read_problem(path, "colouring", colours=1)
    with pytest.raises(ProblemError, match=r"colours belongs to kind colouring, but .* is of kind maxcut"):
        read_problem(path, "maxcut", colours=3)


def test_colours_asked_for_go_before_those_that_a_file_states(tmp_path):
    path = written(tmp_path, "edges.txt", "# kind = colouring\n# colours = 3\n2 1\n1 2\n")
    assert read_problem(path).encoding.colours == 3
    differs = "2 colours, as asked for; the file states 3"
    assert differs not in read_problem(path, colours=3).notes
    other = read_problem(path, colours=2)
    assert other.encoding.colours == 2
    assert differs in other.notes


@pytest.mark.parametrize("name", ["clauses.cnf", "numbers.txt", "choices.json"])
def test_files_that_hold_no_graph_have_no_colours(tmp_path, name):
    choices = {"a": ["x", "y"]}, [{"if": [["a", "x"]], "cost": 1}]
    texts = {
        "clauses.cnf": "p cnf 2 1\n1 2 0\n",
        "numbers.txt": "# kind = partition\n1 2 3\n",
        "choices.json": json.dumps(
            {"layout": "patchwalk choices", "version": 1, "choices": choices[0], "costs": choices[1]}
        ),
    }
    path = written(tmp_path, name, texts[name])
    with pytest.raises(ProblemError, match="colours belongs to kind colouring"):
        read_problem(path, colours=3)


def test_the_help_says_what_a_file_may_mean():
    said = CliRunner().invoke(solve_command, ["--help"]).stdout
    for kind in KINDS:
        assert kind in said
    assert max(map(len, said.splitlines())) <= 110
