"""Whatever bytes a file holds, reading it gives a problem or one sentence that names the file: no traceback, no hang.

Valid files are spoilt by cutting, inserting and overwriting, before or after they are packed; others are random from
the start. The suite tries 2,000 on each reader, ``-m slow`` ten times as many.
"""

from __future__ import annotations

import gzip
import io
import json
import re
import tracemalloc
import zipfile

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from patchwalk.problem.files import read_problem
from patchwalk.problem.forms import FORMS, forms_of
from patchwalk.problem.ising import ProblemError

FRAGMENTS = [
    b"nan",
    b"inf",
    b"-1",
    b"0",
    b"99",
    b"1e999",
    b'"',
    b",",
    b";",
    b"\n",
    b"\r",
    b"#",
    b"%",
    b"\t",
    b"\0",
    b"h",
]
FRAGMENTS += [b"\xff", b"_", b"9" * 5000, b"1" + b"0" * 18, b"kind", b"= ", b"# kind = maxcut\n", b"\xd9\xa3", b" 0\n"]
FRAGMENTS += [b"\xef\xbb\xbf", b"names = [", b"<", b">", b"&", b"<!DOCTYPE x [", b"[[[[[[[[", b"}", b"{", b"]", b"null"]
FRAGMENTS += [b"c ", b"p cnf 1 1\n", b"colours = 1000", b"-", b"1e99", b'"id"', b"<node/>", b"<graph>", b"symmetric"]


def arrays_file(edits: bytes = b"") -> bytes:
    """Two couplings as arrays; with edits, one of the entries spoilt before its checksum is made."""
    stream = io.BytesIO()
    header = json.dumps({"patchwalk": 1, "kind": "ising", "offset": 0.5, "names": ["a", "b", "c"]}).encode()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_STORED) as archive:  # stored, so that spoiling reaches the numbers
        for name, array in {
            "header": np.frombuffer(header, np.uint8),
            "heads": np.array([0, 1], "<i4"),
            "tails": np.array([1, 2], "<i4"),
            "couplings": np.array([1.5, -1]),
            "fields": np.array([0.0, 2.0, 0.0]),
        }.items():
            content = io.BytesIO()
            np.lib.format.write_array(content, array, version=(1, 0))
            data = content.getvalue()
            if edits and name == ("header", "heads", "couplings", "fields")[edits[0] % 4]:
                data = spoilt(data, edits[1:])
            archive.writestr(zipfile.ZipInfo(f"{name}.npy"), data)
    return stream.getvalue()


def spoilt(data, edits):
    """The data with pieces or words cut out and others put in: where, how long and what, in four bytes an edit."""
    for place, how, chosen, byte in zip(*(edits[start::4] for start in range(4)), strict=False):
        fragment = FRAGMENTS[chosen % len(FRAGMENTS)] if chosen < 200 else bytes([byte])
        if how < 100:
            at = place * len(data) // 255
            data = data[:at] + fragment + data[at + how % 7 :]
            continue
        words = re.findall(rb"\w+|\W", data) or [b""]
        at = place * (len(words) - 1) // 255
        words[at] = (fragment, b"", 2 * words[at], words[byte % len(words)])[how % 4]
        data = b"".join(words)
    return data


SAMPLES = {
    "edges.txt": b"# kind = ising\n# offset = 1.5\n4 4\n1 2 1\n2 3 -2.5 # c\n3 4 1e2\n4 4 7\n",
    "colours.txt": b'# kind = colouring\n# colours = 3\n# names = ["a", "b", "c"]\n3 3\n1 2\n2 3\n1 3\n',
    "qubo.txt": b"% kind = qubo\n3 3\n1 2 1\n2 3 -2.5\n3 3 1e2\n",
    "vertices.csv": b"# kind = vertex_cover\na,b\nb,c\nc,d\n",
    "balance.csv": b"# kind = balanced_partition\na,b,1\nb,c,2\nc,d,3\n",
    "numbers.txt": b"# kind = partition\n4 5 6 # three\n7\n8 1.5\n",
    "pairs.csv": '# kind = ising\nfrom;to;weight\nZürich;"a;b";2\n"a;b";c;-1\nc;c;3\n'.encode(),
    "beacons.csv": b"# kind = beacons\nrelation,beacon,other,value\nsite,A x,0,1\nsite,B y,1,2.5\nsite,C z,2,2\n"
    b"interferes,A x,B y,2.5\nrepeater,B y,C z,\nprefers,C z,B,1\n",
    "plain.cnf": b"c kind = max3sat\np cnf 3 4\n1 2 0\n-1 -3 2 0\nc\n2 0\n-2 3 0\n",
    "older.wcnf": b"p wcnf 3 4 20\n3 1 2 0\n0.5 -1 -3 0\n2 2 0\n20 -2 3 0\n",
    "newer.wcnf": b"c since 2022\n3 1 2 0\n0.5 -1 -3 0\n2 2 0\nh -2 3 0\n",
    "entries.mtx": b"%%MatrixMarket matrix coordinate real symmetric\n% kind = ising\n3 3 3\n2 1 1\n3 2 -2\n3 3 1.5\n",
    "array.mtx": b"%%MatrixMarket matrix array real general\n% kind = qubo\n2 2\n1\n2\n2\n0\n",
    "graph.graphml": '<?xml version="1.0" encoding="utf-8"?>\n<graphml xmlns="http://graphml.graphdrawing.org/xmlns">\n'
    '<key id="k" for="graph" attr.name="kind"/><key id="w" for="edge" attr.name="weight"/>\n'
    '<graph edgedefault="undirected"><data key="k">ising</data>\n<node id="ü"><data key="field">2</data></node>\n'
    '<node id="b"/>\n<edge source="ü" target="b"><data key="w">1.5</data></edge>\n</graph></graphml>\n'.encode(),
    "graph.json": '{"directed": false, "graph": {"kind": "ising", "offset": 1.5},\n"nodes": [{"id": "ü", "field": 2},\n'
    '{"id": 1}],\n"edges": [{"source": "ü", "target": 1, "weight": -1.5}]}\n'.encode(),
    "arrays.npz": arrays_file(),
}
READERS = {
    "edges": ("edges.txt", "colours.txt", "qubo.txt"),
    "numbers": ("numbers.txt",),
    "tables": ("pairs.csv", "vertices.csv", "balance.csv"),
    "beacons": ("beacons.csv",),
    "dimacs": ("plain.cnf", "older.wcnf", "newer.wcnf"),
    "matrices": ("entries.mtx", "array.mtx"),
    "graphml": ("graph.graphml",),
    "nodelink": ("graph.json",),
    "packed": ("arrays.npz",),
}
# One draw of bytes, read as what to do: many draws for each case would take longer than reading the file.
CASES = st.binary(min_size=5, max_size=13)
PACKINGS = ("plain", "plain", "plain", "plain", "spoilt", "packed", "packed", "packed")


def tried(folder, reader, case):
    """The problem that a spoilt file gives, or None where it gives a sentence."""
    what, edits = case[0], case[1:]
    packing, says_kind, is_noise = PACKINGS[what % 8], what > 240, 200 < what <= 240
    name = READERS[reader][what // 8 % len(READERS[reader])]
    data = SAMPLES[name]
    if is_noise:
        data = edits
    elif reader == "packed" and packing == "plain":
        data = arrays_file(edits)
    elif packing == "spoilt":
        data = spoilt(gzip.compress(data, mtime=0), edits)
    else:
        data = spoilt(data, edits)
    if packing == "packed":
        data = gzip.compress(data, 1, mtime=0)
    path = folder / (name + ".gz" * (packing != "plain"))
    path.unlink(missing_ok=True)  # to write over a file again and again makes the disk wait
    path.write_bytes(data)
    try:
        return read_problem(path, forms_of(name)[0].kinds[0] if says_kind else None)
    except ProblemError as error:
        said = str(error)
    assert name in said
    assert len(said) < 500
    return None


def check(folder, reader, case):
    problem = tried(folder, reader, case)
    if problem is not None:
        assert np.isfinite(problem.energy(np.ones(len(problem))))


FUZZING = {"suppress_health_check": [HealthCheck.function_scoped_fixture], "deadline": None, "database": None}


@pytest.mark.parametrize("reader", READERS)
@settings(max_examples=2_000, **FUZZING)
@given(case=CASES)
def test_a_spoilt_file_is_a_problem_or_a_sentence(tmp_path, reader, case):
    check(tmp_path, reader, case)


@pytest.mark.slow
@pytest.mark.parametrize("reader", READERS)
def test_ten_times_as_many_spoilt_files_are_problems_or_sentences(tmp_path, reader):
    """Drawn without hypothesis, which would take far longer than reading the files."""
    draws = np.random.default_rng(1 + list(READERS).index(reader))
    for _ in range(20_000):
        case = draws.bytes(int(draws.integers(5, 14)))
        try:
            check(tmp_path, reader, case)
        except Exception as error:
            raise AssertionError(f"{reader}: {case!r}") from error


@pytest.mark.parametrize("reader", READERS)
@settings(max_examples=30, **FUZZING)
@given(case=CASES)
def test_a_spoilt_file_takes_the_memory_that_is_promised(tmp_path, reader, case):
    # the promise is 200 MB and 60 times the unpacked size, which for files of this size is 200 MB
    tracemalloc.start()
    try:
        tried(tmp_path, reader, case)
        assert tracemalloc.get_traced_memory()[1] < 200e6
    finally:
        tracemalloc.stop()


@pytest.mark.parametrize("name", SAMPLES)
def test_the_samples_are_valid_before_they_are_spoilt(tmp_path, name):
    (tmp_path / name).write_bytes(SAMPLES[name])
    assert len(read_problem(tmp_path / name)) >= 2


def test_every_reader_is_tried():
    assert {name for names in READERS.values() for name in names} == set(SAMPLES)
    assert set(READERS) - {"beacons"} == {form.module for form in FORMS} - {"layout_json"}
