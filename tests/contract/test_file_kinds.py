"""Files of pairs and of numbers for every kind: what a line means, and that what is written is read back."""

from __future__ import annotations

import re
from itertools import product

import pytest

from patchwalk.problem.files import read_problem, write_problem
from patchwalk.problem.forms import FORMS, homes_of
from patchwalk.problem.ising import KINDS, ProblemError

SAMPLES = {
    "ising": ("# offset = 2\n3 3\n1 2 1.5\n2 3 -1\n3 3 .3\n", "energy"),
    "maxcut": ("3 3\n1 2 1.5\n2 3 -1\n1 3 2\n", "cut"),
    "qubo": ("# offset = 2\n3 3\n1 2 1.5\n2 3 -1\n3 3 .3\n", "value"),
    "independent_set": ('# names = ["a", "b", "c"]\n3 3\n1 2 1\n2 3 1\n3 3 2\n', "weight"),
    "vertex_cover": ("3 3\n1 2 1\n2 3 1\n3 3 2\n", "weight"),
    "colouring": ("# colours = 3\n3 3\n1 2\n2 3\n1 3\n", "conflicts"),
    "balanced_partition": ("4 3\n1 2 2\n2 3 3\n3 4 2\n", "cut"),
    "partition": ("4 5 6 # three\n7\n% none\n8 1.5 123456789012345678901234567890\n", "squared_difference"),
}


@pytest.mark.parametrize("kind", SAMPLES)
@pytest.mark.parametrize("name", ["a.txt", "a.txt.gz", "a.csv"])
def test_every_kind_is_written_and_read_back(tmp_path, kind, name):
    if kind == "partition" and name == "a.csv":
        return
    (tmp_path / "first.txt").write_text(SAMPLES[kind][0])
    problem = read_problem(tmp_path / "first.txt", kind)
    write_problem(problem, tmp_path / name, recipe=["made by hand"])
    again = read_problem(tmp_path / name)
    assert again.fingerprint == problem.fingerprint
    assert again.kind == kind
    assert again.objective_name == SAMPLES[kind][1]


def test_the_energy_of_a_qubo_file_is_the_form_of_its_lines(tmp_path):
    (tmp_path / "q.txt").write_text(SAMPLES["qubo"][0])
    problem = read_problem(tmp_path / "q.txt", "qubo")
    for bits in product((0, 1), repeat=3):
        a, b, c = bits
        value = 2 + 1.5 * a * b - b * c + 0.3 * c
        assert problem.energy([1 - 2 * bit for bit in bits]) == pytest.approx(value, abs=1e-12)  # sums of a few terms


@pytest.mark.parametrize("kind", ["independent_set", "vertex_cover"])
def test_a_pair_of_a_vertex_with_itself_is_its_weight(tmp_path, kind):
    (tmp_path / "g.txt").write_text("3 3\n1 2 7\n2 3 1\n3 3 2.5\n")
    problem = read_problem(tmp_path / "g.txt", kind)
    assert problem.encoding.weights.tolist() == [1, 1, 2.5]
    assert any("the weights of edges mean nothing" in note for note in problem.notes)


@pytest.mark.parametrize(
    ("kind", "name", "text", "message"),
    [
        (
            "colouring",
            "g.txt",
            "2 1\n1 2\n",
            "how many colours are there? Say --colours 3 or colours=3, or # colours = 3 in",
        ),
        ("colouring", "g.txt", "# colours = 1\n2 1\n1 2\n", "line 1: colours '1' is not a whole number from 2 to"),
        ("colouring", "g.txt", f"# colours = {'9' * 5000}\n2 1\n1 2\n", "line 1: colours '9999"),
        ("colouring", "g.csv", "# colours = 3\na,a\n", "line 2: vertex 'a' is joined to itself"),
        ("balanced_partition", "g.txt", "1 0\n", "g.txt: "),
        ("partition", "g.txt", "1\n", "there is nothing to decide: give two numbers or more"),
        ("partition", "g.txt", "1 2\n3 four\n", "line 2: number 'four' is not a finite number"),
        ("partition", "g.txt", f"1 {'9' * 10_000}\n", "line 1: number '9999"),
        ("partition", "g.txt", "1 " * 6000, "line 1: more than 5000 numbers"),
        ("partition", "g.csv", "1,2\n", "kind partition is not read from such a file but from .txt"),
    ],
)
def test_what_a_kind_cannot_take_is_refused(tmp_path, kind, name, text, message):
    (tmp_path / name).write_text(text)
    with pytest.raises(ProblemError, match=re.escape(message)) as caught:
        read_problem(tmp_path / name, kind)
    assert len(str(caught.value)) < 300


def test_every_kind_has_a_file_that_can_hold_it():
    assert {kind for form in FORMS for kind in form.kinds} == set(KINDS)
    assert homes_of("partition") == ".txt"
