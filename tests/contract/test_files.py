"""Problem files: every fault is named with its line, notes say what was noticed, and what is written is read back."""

from __future__ import annotations

import gzip
import json
import os
import tracemalloc

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from patchwalk.problem import edges, sources, tables
from patchwalk.problem.files import read_problem, read_start
from patchwalk.problem.ising import Problem, ProblemError


def written(folder, name, content):
    """A file with this text or these bytes; gzipped by name."""
    path = folder / name
    data = content if isinstance(content, bytes) else content.encode()
    path.write_bytes(gzip.compress(data) if name.endswith(".gz") and isinstance(content, str) else data)
    return path


def refusal(path, kind=None, reader=read_problem):
    """The message with which a file is refused, without the folder."""
    with pytest.raises(ProblemError) as caught:
        reader(path, kind)
    return str(caught.value).replace(f"{path.parent}{os.sep}", "")


EDGE_FAULTS = [
    ("3 2\n1 2 1\n1 801 1\n", "line 3: vertex 801 does not exist; the first line promises 3 vertices, numbered 1 to 3"),
    ("# c\n\n3 1\n0 2 1\n", "line 4: vertex 0 does not exist; line 3 promises 3 vertices"),
    ("3 1\n4 2 1\n", "line 2: vertex 4 does not exist"),
    ("3 1\n-1 2 1\n", "line 2: vertex -1 does not exist"),
    ("3 1\n1.5 2 1\n", "line 2: vertex '1.5' is not a whole number from 1 to 3"),
    ("3 1\n1 two 1\n", "line 2: vertex 'two' is not a whole number"),
    ("3 1\n+-1 2 1\n", "line 2: vertex '+-1' is not a whole number"),
    (f"3 1\n1 {'9' * 5000} 1\n", "line 2: vertex 9999999999999999999999999999999999999... does not exist"),
    ("3 1\n1 2 heavy\n", "line 2: weight 'heavy' is not a finite number"),
    ("3 1\n1 2 nan\n", "line 2: weight 'nan' is not a finite number"),
    ("3 1\n1 2 inf\n", "line 2: weight 'inf' is not a finite number"),
    ("3 1\n1 2 -1e400\n", "line 2: weight '-1e400' is not a finite number"),
    ("3 1\n1 2 1e101\n", "line 2: weight '1e101' is not a finite number"),
    ("3 1\n1 2 1_0\n", "line 2: expected numbers in plain digits, but it reads '1 2 1_0'"),
    ("3 1\n1 ٢ 1\n", "line 2: expected numbers in plain digits"),
    ("3 2\n1 2 1\n", "line 2: the file ends after 1 edge lines, line 1 promises 2"),
    ("3 1\n1 2 1\n\n2 3 1\n", "line 4: line 1 promises 1 edge lines, here is one more"),
    ("3 2\n1 2 1\n2 3\n", "line 3: expected 3 columns as on the lines before, but it has 2"),
    ("3 2\n1 2\n2 3 1\n", "line 3: expected 2 columns as on the lines before, but it has 3"),
    ("3 1\n1 2 3 4\n", "line 2: expected 'i j' or 'i j w', but it has 4"),
    ("3 1\n1 # 2 3\n", "line 2: expected 'i j' or 'i j w', but it has 1"),
    ("3 1\n2 2 1\n", "line 2: vertex 2 is joined to itself, but kind maxcut has no fields"),
    ("three 1\n1 2 1\n", "line 1: expected 'n m', the numbers of vertices and of edge lines, but it reads 'three 1'"),
    ("3\n1 2 1\n", "line 1: expected 'n m'"),
    ("3 1 x\n1 2 1\n", "line 1: expected 'n m'"),
    ("3.0 1\n1 2 1\n", "line 1: expected 'n m'"),
    (f"{'1' * 5000} 1\n1 2 1\n", "line 1: expected 'n m'"),
    (
        f"{'1' * 4000} 1\n1 2 1\n",
        "line 1: 1111111111111111111111111111111111111... vertices are promised; expected 1 to",
    ),
    ("0 0\n", "line 1: 0 vertices are promised"),
    ("-5 1\n1 2 1\n", "line 1: -5 vertices are promised"),
    ("3 -1\n", "line 1: -1 edge lines are promised"),
    ("100000000 1\n1 2 1\n", "line 1: 100000000 vertices, of which 1 edge lines touch but few"),
    ("3 0\n", "there is nothing to decide"),
    ("3 2\n1 2 0\n1 3 0\n", "there is nothing to decide"),
    ("3 2\n1 2 1\n2 1 -1\n", "there is nothing to decide"),
    ("", "the file is empty"),
    ("\n# only words\n% more\n", "the file is empty"),
    ("# offset = much\n3 1\n1 2 1\n", "line 1: offset 'much' is not a finite number"),
    ("# names = [1]\n3 1\n1 2 1\n", "line 1: names '[1]' is not a list"),
    ('# names = ["a"]\n3 1\n1 2 1\n', "line 1: 1 names for 3 vertices"),
    (b"3 1\n1 2 1 # caf\xe9\n", "line 2: not UTF-8 text"),
    ("3 1\n1 2 1\n".encode("utf-16"), "line 1: not UTF-8 text"),
]


@pytest.mark.parametrize(("content", "message"), EDGE_FAULTS)
@pytest.mark.parametrize("name", ["G.txt", "G.txt.gz"])
def test_a_faulty_edge_list_is_refused_with_file_and_line(tmp_path, content, message, name):
    if name.endswith(".gz") and isinstance(content, bytes):
        content = gzip.compress(content)
    said = refusal(written(tmp_path, name, content), "maxcut")
    assert said.startswith(f"{name}, {message}" if message.startswith("line") else f"{name}: {message}")
    assert len(said) < 300


TABLE_FAULTS = [
    ("a,b,1\nb,c,heavy\n", "line 2: weight 'heavy' is not a finite number"),
    ("a,b,1\nb,c,nan\n", "line 2: weight 'nan' is not a finite number"),
    ("a,b,inf\n", "line 1: weight 'inf' is not a finite number"),
    ("a,b,12x\n", "line 1: weight '12x' is not a finite number"),
    ("a;b;1,5\n", "line 1: weight '1,5' is not a number; write decimals with a point"),
    ("a,b,1\nb,,1\n", "line 2: a name is missing"),
    ("a,b,1\n\nb,c\n", "line 3: expected 3 columns as on the lines before, but it has 2"),
    ("a,b\nb,c,1\n", "line 2: expected 2 columns as on the lines before, but it has 3"),
    ("a b 1\n", "line 1: expected two or three columns (name, name, weight) but it has 1"),
    ("a,b,c,d\n", "line 1: expected two or three columns (name, name, weight) but it has 4"),
    ('a,b,1\n"b"x,c,1\n', "line 2: not a row of a CSV"),
    ('a,b,1\nb,"c,1\n', "line 2: not a row of a CSV"),
    ("a,b,1\nc,c,1\n", "line 2: vertex 'c' is joined to itself"),
    ("one,other,weight\n", "there is nothing to decide"),
    (",,\n", "the file is empty"),
    ("# note\n", "the file is empty"),
    (b"a,b,1\nb,\xff,1\n", "line 2: not UTF-8 text"),
]


@pytest.mark.parametrize(("content", "message"), TABLE_FAULTS)
def test_a_faulty_table_is_refused_with_file_and_line(tmp_path, content, message):
    said = refusal(written(tmp_path, "pairs.csv", content), "maxcut")
    assert said.startswith(f"pairs.csv, {message}" if message.startswith("line") else f"pairs.csv: {message}")


def test_what_is_no_readable_file_is_refused(tmp_path):
    (tmp_path / "folder").mkdir()
    assert refusal(tmp_path / "folder", "ising") == "folder: this is a folder; name a file in it"
    assert refusal(tmp_path / "none.txt", "ising") == "none.txt: there is no such file"
    assert refusal(tmp_path / "folder" / "..." / "x.gz", "ising").endswith("there is no such file")
    assert "holds a zero byte" in refusal(tmp_path / "a\0b", "ising")
    assert "cannot be read" in refusal(written(tmp_path, "file", "3 1\n1 2 1\n") / "below", "ising")


@pytest.mark.parametrize(
    ("name", "head", "filler"),
    [
        ("bomb.txt.gz", "9 9999999\n", "1 2 1\n"),
        ("bomb.txt.gz", "9 9\n", "\n"),
        ("bomb.txt.gz", "9 9\n", "1"),
        ("bomb.csv.gz", "", "a,b,1\n"),
        ("bomb.csv.gz", "a,b,1\n", "\n"),
        ("bomb.csv.gz", "a,b,", "1"),
    ],
)
def test_a_file_that_unpacks_without_end_is_refused(tmp_path, name, head, filler, monkeypatch):
    monkeypatch.setattr(sources, "UNPACKED_ALWAYS", 100_000)
    path = written(tmp_path, name, gzip.compress((head + filler * (2_000_000 // len(filler))).encode(), 9))
    limit = 100_000 + sources.UNPACKED_PER_BYTE * path.stat().st_size
    assert limit < 800_000
    tracemalloc.start()
    said = refusal(path, "ising")
    assert tracemalloc.get_traced_memory()[1] < 60 * limit
    tracemalloc.stop()
    assert "unpacks to more than 100 times its size" in said


def test_numbers_of_ten_thousand_digits_and_endless_lines_are_refused(tmp_path):
    digits = "9" * 10_000
    endless = "2 1\n1 2 " + "1" * 2_000_000
    for text in (f"2 1\n1 2 {digits}\n", f"2 1\n1 {digits} 1\n", f"2 {digits}\n1 2 1\n", endless):
        said = refusal(written(tmp_path, "G.txt", text), "ising")
        assert ", line " in said
        assert len(said) < 300
    huge = written(tmp_path, "G.txt", "1" + "0" * 18 + " 1\n")
    assert "line 1: 1000000000000000000 vertices are promised; expected 1 to" in refusal(huge, "ising")


@pytest.mark.parametrize("name", ["G.txt", "G.csv"])
def test_blocks_of_lines_and_single_lines_give_the_same(tmp_path, name, monkeypatch):
    mark = "," if name == "G.csv" else " "
    draws = np.random.default_rng(1)
    rows = [mark.join([*(str(1 + v) for v in draws.choice(50, 2, False)), repr(draws.normal())]) for _ in range(300)]
    head = "" if name == "G.csv" else "50 300\n"
    at_once = read_problem(written(tmp_path, name, head + "\n".join(rows)), "ising")
    monkeypatch.setattr(edges, "BLOCK", 7)
    monkeypatch.setattr(tables, "BLOCK", 7)
    assert read_problem(tmp_path / name, "ising").fingerprint == at_once.fingerprint
    slowly = [f'"{row.replace(mark, chr(34) + mark, 1)}' if name == "G.csv" else f"{row} # c" for row in rows]
    again = read_problem(written(tmp_path, name, head + "\n\n".join(slowly)), "ising")
    assert again.fingerprint == at_once.fingerprint
    assert again.names == at_once.names


@pytest.mark.parametrize("place", [0, 1, 70_000, 99_999])
def test_the_line_of_an_error_is_found_in_a_long_file(tmp_path, place):
    rows = ["1 2 1"] * 100_000
    rows[place] = "1 2 x"
    said = refusal(written(tmp_path, "G.txt", "2 100000\n" + "\n".join(rows)), "ising")
    assert said.startswith(f"G.txt, line {place + 2}: weight 'x' is not a finite number")


def test_broken_gzip_is_refused_with_the_line_reached(tmp_path):
    assert "not.gz, line 1: the gzip data are damaged" in refusal(written(tmp_path, "not.gz", b"3 1\n1 2 1\n"), "ising")
    whole = gzip.compress(b"3 1\n1 2 1\n")
    assert ": the gzip data are damaged or cut short" in refusal(written(tmp_path, "cut.gz", whole[:-9]), "ising")
    spoilt = whole[:-6] + b"\0\0" + whole[-4:]
    assert ": the gzip data are damaged or cut short" in refusal(written(tmp_path, "crc.gz", spoilt), "ising")


def test_the_kind_comes_from_the_caller_or_the_file_and_never_from_both_in_conflict(tmp_path):
    silent = written(tmp_path, "silent.txt", "2 1\n1 2 1\n")
    stated = written(tmp_path, "stated.txt", "# made by hand\n# kind = ising\n2 1\n1 2 1\n")
    odd = written(tmp_path, "odd.txt", "# kind = isng\n2 1\n1 2 1\n")
    assert read_problem(silent, "maxcut").kind == "maxcut"
    assert read_problem(stated).kind == read_problem(stated, kind="ising").kind == "ising"
    said = refusal(silent)
    assert "--kind maxcut" in said
    assert "one of: ising, maxcut, qubo" in said
    assert refusal(stated, "maxcut").startswith(
        "stated.txt, line 2: the file states kind = ising, but maxcut was asked"
    )
    assert refusal(odd).startswith("odd.txt, line 1: kind 'isng' is not known; it is one of: ising, maxcut")
    assert refusal(silent, "colours").startswith("kind 'colours' is not known")
    assert ".csv" in refusal(silent, "beacons")


def test_an_edge_list_is_read_in_all_its_liberties(tmp_path):
    text = "\ufeff% old comment\r\n\r\n# c\r\n4 5 0 2.5\r\n1 2 1.5 # d\r\n\r\n  # e\n2\t3 -2\n2 1 .5\n3 3 4\n3 3 1"
    problem = read_problem(written(tmp_path, "G.dat", text), "ising")
    assert len(problem) == 4
    assert problem.matrix.toarray().tolist() == [[0, 2, 0, 0], [2, 0, -2, 0], [0, -2, 0, 0], [0, 0, 0, 0]]
    assert problem.fields.tolist() == [0, 0, 5, 0]
    assert problem.offset == 0
    assert problem.notes == (
        "1 pair occurs more than once; its weights were summed",
        "1 field occurs more than once; its values were summed",
    )


def test_repeated_pairs_and_missing_weights_are_noted(tmp_path):
    text = "4 7\n1 2\n2 1\n2 1\n2 3\n3 2\n4 3\n3 4\n"
    problem = read_problem(written(tmp_path, "G.txt.gz", text), "maxcut")
    assert problem.notes == (
        "no third column: every weight is 1",
        "3 pairs occur more than once; their weights were summed",
    )
    assert (2 * problem.matrix).toarray().tolist() == [[0, 3, 0, 0], [3, 0, 2, 0], [0, 2, 0, 2], [0, 0, 2, 0]]
    assert problem.offset == -3.5


@pytest.mark.parametrize("separator", [",", ";", "\t"])
@pytest.mark.parametrize("name", ["pairs.csv", "pairs.csv.gz", "PAIRS.CSV"])
def test_a_table_of_pairs_is_read_with_its_names(tmp_path, separator, name):
    rows = [["Zürich", '"Aa, b; c"', "2"], ["#1", "Zürich", "-1.5"], ["#1", " 東京 ", "3"]]
    text = "# kind = maxcut\n" + "".join(separator.join(row) + "\n" for row in rows) + separator * 2 + "\n"
    problem = read_problem(written(tmp_path, name, text))
    assert problem.names == ("Zürich", "Aa, b; c", "#1", "東京")
    assert (2 * problem.matrix).toarray()[0].tolist() == [0, 2, -1.5, 0]
    assert problem.notes == ()


def test_fields_and_offset_of_a_table(tmp_path):
    problem = read_problem(written(tmp_path, "p.csv", "# offset = 2.5\na,b,1\nb,b,-3\n"), "ising")
    assert problem.fields.tolist() == [0, -3]
    assert problem.offset == 2.5


@pytest.mark.parametrize(
    ("text", "names", "note"),
    [
        ("from,to,weight\na,b,2\n", ("a", "b"), "line 1 was read as a header: 'weight' is not a number"),
        ("From;To\na;b\nb;c\n", ("a", "b", "c"), "line 1 was read as a header: 'From, To'"),
        ("from,to\nfrom,b\n", ("from", "to", "b"), "line 1 was read as a pair, not as a header: 'from, to'"),
        ("Ann,Bob\nBob,Cid\n", ("Ann", "Bob", "Cid"), "line 1 was read as a pair, not as a header: 'Ann, Bob'"),
        ("from,to\n", ("from", "to"), "line 1 was read as a pair, not as a header: 'from, to'"),
        ("a,b;c,2\n", ("a", "b;c"), None),
        ("a;b,2\n", ("a", "b,2"), "read with semicolon as separator; comma would fit too"),
    ],
)
def test_what_was_decided_about_header_and_separator_is_noted(tmp_path, text, names, note):
    problem = read_problem(written(tmp_path, "p.csv", text), "maxcut")
    assert problem.names == names
    assert note is None or note in problem.notes
    assert problem.coupling_count == len(names) - 1


SAMPLES = {
    "edges.txt": b"# kind = ising\n# offset = 1.5\n4 4\n1 2 1\n2 3 -2.5 # c\n3 4 1e2\n4 4 7\n",
    "pairs.csv": '# kind = ising\nfrom;to;weight\nZürich;"a;b";2\n"a;b";c;-1\nc;c;3\n'.encode(),
    "beacons.csv": b"# kind = beacons\nrelation,beacon,other,value\nsite,A x,0,1\nsite,B y,1,2.5\nsite,C z,2,2\n"
    b"interferes,A x,B y,2.5\nrepeater,B y,C z,\nprefers,C z,B,1\n",
}
FRAGMENTS = [b"nan", b"inf", b"-1", b"0", b"99", b"1e999", b'"', b",", b";", b"\n", b"\r", b"#", b"%", b"\t", b"\0"]
FRAGMENTS += [
    b"\xff",
    b"_",
    b"9" * 5000,
    b"kind",
    b"= ",
    b"# kind = maxcut\n",
    b"\xd9\xa3",
    b"\xef\xbb\xbf",
    b"names = [",
]


@settings(max_examples=300, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(
    name=st.sampled_from(sorted(SAMPLES)),
    packed=st.booleans(),
    edits=st.lists(st.tuples(st.floats(0, 1), st.integers(0, 6), st.sampled_from(FRAGMENTS) | st.binary(max_size=3))),
    kind=st.sampled_from([None, "ising", "maxcut", "beacons"]),
)
def test_a_spoilt_file_is_a_problem_or_a_problem_error(tmp_path, name, packed, edits, kind):
    data = SAMPLES[name]
    if packed and not len(edits) % 2:  # sometimes the text is spoilt, sometimes the gzip data
        data = gzip.compress(data, mtime=0)
    for place, cut, fragment in edits:
        at = int(place * len(data))
        data = data[:at] + fragment + data[at + cut :]
    if packed and len(edits) % 2:
        data = gzip.compress(data, mtime=0)
    path = tmp_path / (name + ".gz" * packed)
    path.unlink(missing_ok=True)  # to write over a file again and again makes the disk wait
    path.write_bytes(data)
    try:
        problem, message = read_problem(path, kind), None
    except ProblemError as error:
        problem, message = None, str(error)
    if problem is None:
        assert name in message
    else:
        assert np.isfinite(problem.energy(np.ones(len(problem))))


@pytest.mark.parametrize("name", sorted(SAMPLES))
def test_the_samples_are_valid_before_they_are_spoilt(tmp_path, name):
    assert len(read_problem(written(tmp_path, name, SAMPLES[name]))) in (3, 4)


@pytest.mark.parametrize(
    "text",
    ["+1 -1 1\n", "1,-1,+1", "1\n-1\n1\n", json.dumps({"energy": -1.0, "spins": [1, -1, 1]}), ' {"spins": [1, -1, 1]}'],
)
def test_a_start_is_read_from_values_or_from_json(tmp_path, text):
    problem = Problem.from_arrays([0, 1], [1, 2], [1, 1])
    start = read_start(written(tmp_path, "start", text), problem)
    assert start.dtype == np.int8
    assert start.tolist() == [1, -1, 1]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("1 -1\n0\n", "start, line 2: '0' is no spin; expected +1 or -1"),
        ("1 up 1", "start, line 1: 'up' is no spin"),
        ("1 -1", "start: 2 values for 3 spins"),
        ("", "start: 0 values for 3 spins"),
        ("1 -1 1 1", "start: 4 values for 3 spins"),
        ('{"spins": [1, -1]}', "start: 2 values for 3 spins"),
        ('{"spins": [1, -1, 0]}', "start: entry 2 of \"spins\" is '0'"),
        ('{"spins": [1, -1, true]}', "start: entry 2 of \"spins\" is 'True'"),
        ('{"spins": "+-+"}', 'start: "spins" is not a list'),
        ('{"energy": 1}', 'start: the JSON object has no entry "spins"'),
        ('{\n"spins": [1, -1', "start, line 2: not JSON"),
        ('{"spins": ' + "[" * 100_000, "start: not JSON that can be read"),
        ('{"spins": [' + "1" * 5000 + "]}", "start: not JSON that can be read"),
    ],
)
def test_a_faulty_start_is_refused(tmp_path, text, message):
    problem = Problem.from_arrays([0, 1], [1, 2], [1, 1])
    path = written(tmp_path, "start", text)
    assert refusal(path, problem, read_start).startswith(message)
    with pytest.raises(ProblemError, match="no such file"):
        read_start(tmp_path / "none", problem)
