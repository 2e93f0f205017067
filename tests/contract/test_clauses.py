"""Files of clauses: the three layouts, what is odd about clauses noted, and what is wrong named with its line."""

from __future__ import annotations

import gzip
from itertools import product

import numpy as np
import pytest

from patchwalk.problem import dimacs
from patchwalk.problem.encodings import encode_max2sat
from patchwalk.problem.files import read_problem, write_problem
from patchwalk.problem.ising import ProblemError


def read(folder, text, name="f.cnf", kind=None):
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return read_problem(path, kind)


def weight_satisfied(clauses, spins):
    """The weight of satisfied clauses, counted literal by literal; ``clauses`` are (weight, literals)."""
    return sum(weight for weight, literals in clauses if any((spins[abs(v) - 1] == -1) == (v > 0) for v in literals))


PLAIN = "c made by hand\np cnf 3 4\n1 2 0\n-1 -3 0\nc between\n\n2 0\n-2 3 0\n"
OLDER = "p wcnf 3 4 20\n3 1 2 0\n0.5 -1 -3 0\n2 2 0\n20 -2 3 0\n"
NEWER = "c since 2022\n3 1 2 0\n0.5 -1 -3 0\n2 2 0\nh -2 3 0\n"
CLAUSES = [(3, [1, 2]), (0.5, [-1, -3]), (2, [2]), (np.inf, [-2, 3])]


def test_the_energy_is_minus_the_weight_satisfied(tmp_path):
    problem = read(tmp_path, PLAIN)
    assert problem.kind == "max2sat"
    for spins in product((1, -1), repeat=3):
        assert problem.energy(spins) == -weight_satisfied([(1, literals) for _, literals in CLAUSES], spins)


@pytest.mark.parametrize("text", [OLDER, NEWER])
def test_both_weighted_layouts_say_the_same(tmp_path, text):
    problem = read(tmp_path, text, "f.wcnf")
    assert problem.encoding.weights.tolist() == [3, 0.5, 2, np.inf]
    assert problem.encoding.literals[:, :2].tolist() == [[1, 2], [-1, -3], [2, 0], [-2, 3]]
    soft = [clause for clause in CLAUSES if clause[0] < np.inf]
    for spins in product((1, -1), repeat=3):
        if spins[1] == 1 or spins[2] == -1:  # the clause that must be
            assert problem.energy(spins) == pytest.approx(-weight_satisfied(soft, spins), abs=1e-12)


def test_an_older_file_without_a_top_has_soft_clauses_only(tmp_path):
    problem = read(tmp_path, OLDER.replace(" 20\n", "\n", 1), "f.wcnf")
    assert problem.encoding.weights.tolist() == [3, 0.5, 2, 20]


def test_plain_clauses_may_go_over_lines_and_end_at_a_percent_sign(tmp_path):
    problem = read(tmp_path, "p cnf 3 3\n1\n2 0 -1\n-3 0 2\n0\n%\n0\n")
    assert problem.encoding.literals[:, :2].tolist() == [[1, 2], [-1, -3], [2, 0]]


def test_clauses_of_three_make_max3sat_unless_refused(tmp_path):
    text = "p cnf 3 2\n1 2 3 0\n-1 0\n"
    problem = read(tmp_path, text)
    assert problem.kind == "max3sat"
    for values in product((1, -1), repeat=3):
        lowest = min(problem.energy([*values, auxiliary]) for auxiliary in (1, -1))
        assert lowest == -weight_satisfied([(1, [1, 2, 3]), (1, [-1])], values)
    with pytest.raises(ProblemError, match=r"line 2: a clause of 3 literals; 2 is the most; kind max3sat takes three"):
        read(tmp_path, text, kind="max2sat")
    assert read(tmp_path, PLAIN, kind="max3sat").kind == "max3sat"


def test_what_is_odd_about_clauses_is_noted(tmp_path):
    text = "2 1 2 0\n2 2 1 0\n3 1 -1 0\n4 0\n0 1 3 0\n1 3 3 3 0\n"
    problem = read(tmp_path, text, "f.wcnf")
    assert problem.notes == (
        "1 clause is like an earlier one; each counts",
        "1 clause is empty and never satisfied",
        "1 clause is satisfied always, by a variable and its negation",
        "1 clause is of weight 0 and left out",
    )
    clauses = [(4, [1, 2]), (3, [1, -1]), (1, [3])]
    for spins in product((1, -1), repeat=3):
        assert problem.energy(spins) == -weight_satisfied(clauses, spins)
    assert read(tmp_path, "p cnf 2 3\n1 2 0\n1 2 0\n2 1 0\n").notes == (
        "2 clauses are like an earlier one; each counts",
    )


def test_variables_that_no_clause_names_are_there(tmp_path):
    assert len(read(tmp_path, "p cnf 7 1\n1 2 0\n")) == 7
    assert len(read(tmp_path, "1 1 5 0\n", "f.wcnf")) == 5


FAULTS = [
    ("f.cnf", "1 2 0\n", "line 1: expected 'p cnf N M' or 'p wcnf N M TOP', but it reads '1 2 0'"),
    ("f.cnf", "c\np cnf 3\n1 2 0\n", "line 2: expected 'p cnf N M'"),
    ("f.cnf", "p dnf 3 1\n1 2 0\n", "line 1: expected 'p cnf N M'"),
    ("f.cnf", "p cnf 3 x\n1 2 0\n", "line 1: expected 'p cnf N M'"),
    ("f.cnf", "p cnf 1000000000000000000 1\n1 2 0\n", "line 1: 1000000000000000000 variables and 1 clauses are prom"),
    ("f.cnf", f"p cnf {'1' * 10_000} 1\n1 2 0\n", "line 1: expected 'p cnf N M'"),
    ("f.cnf", "p cnf 0 1\n0\n", "line 1: 0 variables"),
    ("f.cnf", "p cnf 100000000 1\n1 2 0\n", "line 1: 100000000 variables, of which 1 clauses name but few"),
    ("f.cnf", "p cnf 3 2\n1 2 0\n4 0\n", "line 3: variable 4 does not exist; line 1 promises 3 variables"),
    ("f.cnf", f"p cnf 3 1\n1 -{'9' * 10_000} 0\n", "line 2: variable 9999999999999999999999999999999999999... does"),
    ("f.cnf", "p cnf 3 1\n1 two 0\n", "line 2: literal 'two' is not a whole number"),
    ("f.cnf", "p cnf 3 1\n1 2.0 0\n", "line 2: literal '2.0' is not a whole number"),
    ("f.cnf", "p cnf 3 1\n1 \u0662 0\n", "line 2: literal '\u0662' is not a whole number"),
    ("f.cnf", "p cnf 3 1\n1 2\n", "line 2: the last clause does not end with 0"),
    ("f.cnf", "p cnf 3 2\n1 2 0\n", "line 2: the file ends after 1 clauses, line 1 promises 2"),
    ("f.cnf", "p cnf 3 1\n1 2 0\n\n2 3 0\n", "line 4: line 1 promises 1 clauses, here is one more; correct M"),
    ("f.cnf", "p cnf 4 1\n1 2 3 4 0\n", "line 2: a clause of 4 literals; 3 is the most"),
    ("f.cnf", "p cnf 4 0\n", "there is nothing to decide"),
    ("f.cnf", "p cnf 4 1\n0\n", "there is nothing to decide"),
    ("f.cnf", "c only words\n", "the file is empty"),
    ("f.cnf", b"p cnf 2 1\n1 \xff 0\n", "line 2: not UTF-8 text"),
    ("f.wcnf", "p wcnf 3 1 5\nh 1 2 0\n", "line 2: weight 'h' is not a finite number"),
    ("f.wcnf", "p wcnf 3 1 5\n1 1 2\n", "line 2: the clause does not end with 0; put each clause on one line"),
    ("f.wcnf", "1 1 2 0\nh\n", "line 2: the clause does not end with 0"),
    ("f.wcnf", "1 1 2 0 3 0\n", "line 1: something follows the 0 that ends the clause"),
    ("f.wcnf", "-1 1 2 0\n", "line 1: weight '-1' is negative"),
    ("f.wcnf", "nan 1 2 0\n", "line 1: weight 'nan' is not a finite number"),
    ("f.wcnf", f"{'9' * 10_000} 1 2 0\n", "line 1: weight '9999999999999999999999999999999999999...' is not a finite"),
    ("f.wcnf", "1 1 2 0\nh 0\n", "line 2: an empty clause can never be satisfied, and this one must be"),
    ("f.wcnf", "1 1 3000000000 0\n", "line 1: variable 3000000000 does not exist; the most is 2147483647 variables"),
    ("f.wcnf", "1 1 2000000000 0\n", "2000000000 variables, of which 1 clauses name but few; correct N"),
    ("f.wcnf", "p wcnf 3 2 5\n1 1 2 0\n5 0\n", "line 3: an empty clause can never be satisfied"),
]


@pytest.mark.parametrize(("name", "text", "message"), FAULTS)
@pytest.mark.parametrize("before", [0, 1])
def test_a_faulty_file_is_refused_with_its_line(tmp_path, name, text, message, before, monkeypatch):
    if before:  # every line a block of its own
        monkeypatch.setattr(dimacs, "BLOCK", 1)
    with pytest.raises(ProblemError) as caught:
        read(tmp_path, text, name)
    said = str(caught.value).replace(f"{tmp_path}/", "")
    assert said.startswith(f"{name}, {message}" if message.startswith("line") else f"{name}: {message}")
    assert len(said) < 300


def test_the_line_of_an_error_is_found_in_a_long_file(tmp_path):
    lines = ["1 1 -2 0"] * 100_000
    lines[80_000] = "1 1 -2"
    with pytest.raises(ProblemError, match="line 80001: the clause does not end with 0"):
        read(tmp_path, "\n".join(lines), "f.wcnf")


@pytest.mark.parametrize("name", ["f.cnf", "f.wcnf", "f.wcnf.gz"])
@pytest.mark.parametrize("weights", [None, [1.0, 0.5, 3.0, np.inf, 2.0, 1e20]])
def test_clauses_are_written_and_read_back(tmp_path, name, weights):
    rows = [[1, 2], [-1, 3], [2], [-3, -2], [4, -4], []]
    rows[5] = [] if weights is None else [-1]
    problem = encode_max2sat(rows, weights, 5, names=["a", "b", "c", "not d", "東"])
    write_problem(problem, tmp_path / name, recipe=["made by hand"])
    again = read_problem(tmp_path / name)
    assert again.fingerprint == problem.fingerprint
    assert again.names == problem.names
    assert again.encoding.weights.tolist() == problem.encoding.weights.tolist()


def test_blocks_and_single_lines_give_the_same(tmp_path, monkeypatch):
    draws = np.random.default_rng(1)
    rows = [
        f"{w} {a} {b} 0" for w, a, b in zip(draws.integers(1, 9, 500), *draws.integers(1, 40, (2, 500)), strict=True)
    ]
    at_once = read(tmp_path, "\n".join(rows), "f.wcnf")
    packed = read(tmp_path, gzip.compress("\n".join(rows).encode()), "f.wcnf.gz")
    monkeypatch.setattr(dimacs, "BLOCK", 7)
    monkeypatch.setattr(dimacs._Clauses, "_take_at_once", lambda *_: False)
    one_by_one = read(tmp_path, "\n".join(rows), "f.wcnf")
    assert one_by_one.fingerprint == at_once.fingerprint == packed.fingerprint
