"""Problem files that we write: read back as the same problem, whole or not there at all."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from patchwalk.problem.files import read_problem, write_problem
from patchwalk.problem.ising import Problem, ProblemError

NUMBERS = st.integers(-9, 9).map(float) | st.floats(-1e50, 1e50, allow_subnormal=False)


@st.composite
def problems(draw):
    size = draw(st.integers(2, 6))
    ends = st.tuples(st.integers(0, size - 1), st.integers(0, size - 1)).filter(lambda pair: pair[0] != pair[1])
    pairs = draw(st.lists(st.tuples(ends, NUMBERS), max_size=8))
    heads, tails = [pair[0] for pair, _ in pairs], [pair[1] for pair, _ in pairs]
    kind = draw(st.sampled_from(["ising", "maxcut"]))
    fields = draw(st.lists(NUMBERS, min_size=size, max_size=size)) if kind == "ising" else None
    names = draw(st.none() | st.lists(st.text(max_size=4), min_size=size, max_size=size))
    weights = [weight for _, weight in pairs]
    offset = draw(NUMBERS)
    return Problem.from_arrays(
        heads, tails, weights, size=size, fields=fields, offset=offset, kind=kind, names=names
    )  # fmt: skip


@given(problems(), st.sampled_from(["p.txt", "p.txt.gz", "p.csv"]))
def test_what_is_written_is_read_back_as_the_same_problem(tmp_path_factory, problem, name):
    path = tmp_path_factory.mktemp("round") / name
    if name == "p.csv":  # whose names are words that differ
        problem = replace(problem, names=tuple(f'{place}, "{place}"' for place in range(len(problem))))
    if not problem.coupling_count and not problem.fields.any():
        with pytest.raises(ProblemError, match="no coupling and no field"):
            write_problem(problem, path)
        return
    write_problem(problem, path, recipe=["kind = maxcut", "offset = 1\nnames = []"])
    again = read_problem(path)
    assert again.fingerprint == problem.fingerprint
    assert again.names == problem.names
    assert again.offset == problem.offset


def test_writing_leaves_one_whole_file_and_the_same_bytes(tmp_path):
    problem = Problem.from_arrays([0, 1], [1, 2], [1, 0.1], kind="maxcut", details={"recipe": ("made by hand",)})
    target = tmp_path / "p.txt"
    target.write_text("what was here before")
    write_problem(problem, target)
    assert target.read_text() == "# recipe: made by hand\n# kind = maxcut\n3 2\n1 2 1\n2 3 0.1\n"
    write_problem(problem, tmp_path / "a.gz")
    write_problem(problem, tmp_path / "b.gz")
    assert (tmp_path / "a.gz").read_bytes() == (tmp_path / "b.gz").read_bytes()
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.gz", "b.gz", "p.txt"]


@pytest.mark.parametrize(
    ("problem", "name", "message"),
    [
        (Problem.from_arrays([0], [1], [1]), "missing/p.txt", "cannot be written"),
        (Problem.from_arrays([0], [1], [1]), "p.cnf", "kind ising is written to a .txt or .csv or"),
        (Problem.from_arrays([0], [1], [1], names=["a", "a"]), "p.csv", "name 'a' occurs twice"),
        (Problem.from_arrays([0], [1], [1], names=["a", " b"]), "p.csv", "has spaces around it"),
        (Problem.from_arrays([0], [1], [1], fields=[0, 1], kind="maxcut"), "p.txt", "spin 1 has a field"),
        (Problem.from_arrays([0], [1], [1e200]), "p.txt", "rescale"),
    ],
)
def test_what_cannot_be_written_is_refused_and_leaves_nothing(tmp_path, problem, name, message):
    with pytest.raises(ProblemError, match=message):
        write_problem(problem, tmp_path / name)
    assert list(tmp_path.iterdir()) == []
