"""Answers: audited wherever they come from, written and read back, and never called good when they are not."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import patchwalk
from patchwalk.commands.answers import answered, settled
from patchwalk.interface.solution_text import in_words
from patchwalk.problem import encodings
from patchwalk.problem.decoding import audit_answer, encoding_of, read_answer, verdict, write_answer
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.subsolvers.contract import I8

PATH = [(0, 1), (1, 2), (2, 3)]
NAMES = ["ash", "bay, the", "cob", "Dünë"]

PROBLEMS = {
    "ising": Problem.from_arrays([0, 1], [1, 2], [1, -2], fields=[0.5, 0, 0], names=["a", "b", "c"]),
    "maxcut": Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 2, 3], kind="maxcut", names=["a", "b", "c"]),
    "maxcut without names": Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 2, 3], kind="maxcut"),
    "beacons": make("beacons", 12, seed=3),
    "qubo": encodings.encode_qubo([0], [1], [2], [-1, -1, 3], 4, ["x", "y", "z"]),
    "max2sat": encodings.encode_max2sat([[1, 2], [-1], [-2]], [1, 2, math.inf]),
    "max3sat": encodings.encode_max3sat([[1, 2, 3], [-1, -2, -3], [1]]),
    "partition": encodings.encode_partition([5, 5, 6, 0.25]),
    "independent_set": encodings.encode_independent_set(PATH, [1, 2, 3, 4], names=NAMES),
    "vertex_cover": encodings.encode_vertex_cover(PATH, names=NAMES),
    "colouring": encodings.encode_colouring(PATH, 3, names=NAMES),
    "balanced_partition": encodings.encode_balanced_partition(PATH, names=NAMES),
}


def random_spins(problem: Problem, seed: int) -> np.ndarray:
    return np.random.default_rng(seed).choice([1, -1], len(problem)).astype(np.int8)


@pytest.mark.parametrize("name", PROBLEMS)
@pytest.mark.parametrize("ending", ["answer.json", "answer.json.gz", "answer.csv", "answer.CSV.gz"])
def test_what_is_written_is_read_and_audited_the_same(name: str, ending: str, tmp_path: Path) -> None:
    problem = PROBLEMS[name]
    for seed in range(8):
        answer = encoding_of(problem).decode(random_spins(problem, seed))
        write_answer(tmp_path / ending, problem, answer)
        found = audit_answer(problem, read_answer(tmp_path / ending, problem))
        assert found == (answer.objective, answer.feasible, answer.broken)
    assert [path.name for path in tmp_path.iterdir()] == [ending], "nothing unfinished stays behind"


@pytest.mark.parametrize("name", PROBLEMS)
def test_spins_alone_are_audited_without_any_repair(name: str, tmp_path: Path) -> None:
    problem = PROBLEMS[name]
    for seed in range(8):
        spins = random_spins(problem, seed)
        (tmp_path / "spins.txt").write_text(" ".join(map(str, spins)))
        objective, feasible, broken = audit_answer(problem, read_answer(tmp_path / "spins.txt", problem))
        answer = encoding_of(problem).decode(spins)
        assert broken == (answer.broken or answer.mended)
        assert feasible == (not broken)
        if feasible and name != "max3sat":  # its auxiliary spins need not fit
            assert problem.objective(problem.energy(spins)) == pytest.approx(objective, abs=1e-12)


def told(problem: Problem, spins: I8) -> tuple[bool, dict[str, Any]]:
    """Whether the answer is feasible, and what it says."""
    fields = answered(problem, spins)
    return fields["feasible"], fields["answer"]


@pytest.mark.parametrize("name", PROBLEMS)
def test_what_solve_prints_can_be_audited(name: str) -> None:
    problem = PROBLEMS[name]
    for seed in range(8):
        spins = settled(problem, random_spins(problem, seed))
        feasible, said = told(problem, spins)
        printed = json.loads(json.dumps({"spins": spins.tolist(), "answer": said}))
        objective, audited, broken = audit_answer(problem, printed)
        assert audited == feasible
        assert list(broken) == said.get("broken", list(broken))
        assert problem.energy(spins) == pytest.approx(problem.energy_of(objective), abs=1e-9) or not feasible


@pytest.mark.parametrize("name", PROBLEMS)
def test_words_for_people_begin_with_the_verdict(name: str, tmp_path: Path) -> None:
    problem = PROBLEMS[name]
    for seed in range(8):
        answer = encoding_of(problem).decode(random_spins(problem, seed))
        write_answer(tmp_path / "answer.txt", problem, answer)
        lines = (tmp_path / "answer.txt").read_text().splitlines()
        spoken = answered(problem, random_spins(problem, seed))["spoken"]
        assert spoken == (() if problem.encoding is None else tuple(lines))
        assert lines[0] == verdict(len(answer.broken), len(answer.mended))
        assert lines[0].startswith("NOT VALID") == bool(answer.broken) == (not answer.feasible)
        assert f"{problem.objective_name} {answer.objective:.12g}" in lines


def test_verdicts() -> None:
    assert verdict(0) == "valid"
    assert verdict(1) == "NOT VALID: 1 constraint broken"
    assert verdict(2) == "NOT VALID: 2 constraints broken"
    assert verdict(0, 2) == "valid after a repair: 2 constraints had been broken"


def test_a_repair_is_reported_and_the_spins_are_those_of_the_answer() -> None:
    problem = PROBLEMS["independent_set"]
    feasible, said = told(problem, np.array([-1, -1, 1, -1], np.int8))
    assert feasible
    assert said["repaired"] is True
    assert said["verdict"] == "valid after a repair: 1 constraint had been broken"
    assert said["mended"] == ["ash and bay, the are joined, and both are members"]
    assert said["changed"] == ["ash was taken out"]
    assert said["members"] == ["bay, the", "Dünë"]  # the lighter end went
    assert said["weight"] == 6
    assert settled(problem, np.array([-1, -1, 1, -1], np.int8)).tolist() == [1, -1, 1, -1]


@pytest.mark.parametrize(
    ("name", "spins", "mended", "changed"),
    [
        (
            "vertex_cover", [1, 1, -1, 1],
            "ash and bay, the are joined, and neither is in the cover", "ash was put in",
        ),
        ("colouring", [-1, 1, 1, 1, -1, 1, 1, 1, 1, 1, -1, 1], "cob has no colours", "cob was nothing, now 1"),
        (
            "balanced_partition", [1, 1, 1, -1],
            "the parts have 3 and 1 vertices, not halves", "cob went from part 1 to part 2",
        ),
    ],
)  # fmt: skip
@pytest.mark.parametrize("ending", ["answer.txt", "answer.csv", "answer.json"])
def test_a_written_answer_tells_what_a_repair_changed(
    name: str, spins: list[int], mended: str, changed: str, ending: str, tmp_path: Path
) -> None:
    problem = PROBLEMS[name]
    write_answer(tmp_path / ending, problem, encoding_of(problem).decode(spins))
    text = (tmp_path / ending).read_text()
    assert verdict(0, 1) in text
    if ending == "answer.json":
        table = json.loads(text)
        assert (table["repaired"], table["mended"], table["changed"]) == (True, [mended], [changed])
    else:
        mark = "#" if ending == "answer.csv" else " "
        assert f"{mark} mended: {mended}\n{mark} changed: {changed}\n" in text


def test_names_of_several_lines_stay_inside_the_comments_of_a_csv(tmp_path: Path) -> None:
    problem = encodings.encode_independent_set([(0, 1)], names=["a\nb", "c"])
    answer = encoding_of(problem).decode([-1, -1])
    write_answer(tmp_path / "a.csv", problem, answer)
    assert audit_answer(problem, read_answer(tmp_path / "a.csv", problem)) == (1.0, True, ())


def test_solve_and_resume_tell_of_a_repair_in_the_answer_they_write(tmp_path: Path) -> None:
    """The start has two joined members, and a run that calls nobody lower than it leaves it to the repair."""
    problem = encodings.encode_independent_set(PATH, [1, 2, 3, 4], names=NAMES)
    (tmp_path / "start.txt").write_text("-1 -1 1 -1")
    run = tmp_path / "run.sqlite"
    settings = {"start": tmp_path / "start.txt", "run": run, "answer": tmp_path / "answer.json"}
    result = patchwalk.solve(problem, calls=1, sweeps=0, cluster_size=1, subsolver="uniform,shots=1", **settings)
    written = json.loads((tmp_path / "answer.json").read_text())
    assert written["mended"] == result.answer["mended"]
    assert written["changed"] == result.answer["changed"]
    assert written["verdict"] == result.answer["verdict"] == result.spoken[0]
    assert result.answer["repaired"], result.answer
    again = patchwalk.resume(run, problem)
    assert again.answer == result.answer
    assert again.spoken == result.spoken


def test_what_no_repair_mends_is_not_valid() -> None:
    problem = encodings.encode_max2sat([[1, 2], [-2], [2]], [1, math.inf, math.inf])
    feasible, said = told(problem, np.array([1, -1], np.int8))
    assert not feasible
    assert said["verdict"] == "NOT VALID: 1 constraint broken"
    assert said["broken"] == ["clause 2 (not 2) is not satisfied"]
    assert said["repaired"] is False
    triangle = encodings.encode_colouring([(0, 1), (1, 2), (2, 0)], 2)
    feasible, said = told(triangle, np.ones(6, np.int8))
    assert not feasible
    assert said["verdict"] == "NOT VALID: 3 constraints broken"
    assert said["broken"][0] == "1 has no colours"


def test_spins_and_words_that_disagree_are_noticed() -> None:
    problem = PROBLEMS["vertex_cover"]
    objective, feasible, broken = audit_answer(problem, {"answer": {"cover": NAMES[:3]}, "spins": [1, -1, -1, 1]})
    assert (objective, feasible) == (3, False)
    assert broken == ("the spins beside it mean something else, of weight 2",)


@pytest.mark.parametrize(
    ("name", "answer", "message"),
    [
        ("ising", {"spins_by_name": {"a": 1, "b": 2, "c": 1}}, "spin 1 of the configuration is 2"),
        ("ising", {"energy": 3}, 'no entry "spins_by_name" and no "spins"; it has: energy'),
        ("ising", {"spins": [1, 1]}, "2 spins|shape"),
        ("ising", {"spins": [[1], [1, -1]]}, "something but"),
        ("ising", {"spins": "+++"}, "shape"),
        ("maxcut", {"parts": [["a"], ["b"]]}, "says nothing of 'c'"),
        ("maxcut", {"parts": [["a", "b"], ["b", "c"]]}, "a name twice"),
        ("maxcut", {"parts": [["a", "b", "c"], ["d"]]}, "speaks of 'd'"),
        ("maxcut", {"parts": ["abc"]}, "not two lists"),
        ("maxcut", {"parts": [[["a"]], []]}, "should hold a list of names"),
        ("beacons", {"channels": {}}, "says nothing of"),
        ("qubo", {"bits": {"x": 1, "y": 0, "z": 2}}, "has 2 for 'z'; expected true or false"),
        ("qubo", {"bits": [1, 0, 1]}, "no table of names"),
        ("max2sat", {"assignment": {"1": True, "2": "yes"}}, "has 'yes' for '2'"),
        ("partition", {"parts": [[5, 5], [6]]}, "0.25 0 times, the problem 1 times"),
        ("independent_set", {"members": ["ash", "elm"]}, "holds 'elm', which is no vertex"),
        ("independent_set", {"members": [["ash"]]}, "should hold a list of names"),
        ("colouring", {"colours": dict.fromkeys(NAMES, 4)}, "colour 4 of ash does not exist; they are 1 to 3"),
        ("colouring", {"colours": dict.fromkeys(NAMES, "red")}, "colour 'red' of ash does not exist"),
    ],
)
def test_what_is_no_answer_at_all_is_refused(name: str, answer: Any, message: str) -> None:
    with pytest.raises(ProblemError, match=message):
        audit_answer(PROBLEMS[name], answer)


@pytest.mark.parametrize(
    ("file", "text", "message"),
    [
        ("a.json", '{"spins": [1,', "line 1: not JSON"),
        ("a.json", "{" * 100_000, "not JSON"),
        ("a.csv", "name,colour\nash,1\n", "expected the header name,colours of an answer to kind colouring"),
        ("a.csv", "", "expected the header"),
        ("a.csv", "name,colours\nash,1,2\n", "line 2: expected two columns"),
        ("a.csv", "name,colours\nash,1\n", "says nothing of 'bay, the'"),
        ("a.txt", "1 1 0", "line 1: '0' is no spin"),
    ],
)
def test_files_that_hold_no_answer_are_refused(file: str, text: str, message: str, tmp_path: Path) -> None:
    problem = PROBLEMS["colouring"]
    (tmp_path / file).write_text(text)
    with pytest.raises(ProblemError, match=message):
        audit_answer(problem, read_answer(tmp_path / file, problem))


def test_an_answer_that_cannot_be_written_says_so(tmp_path: Path) -> None:
    problem = PROBLEMS["qubo"]
    with pytest.raises(ProblemError, match="cannot be written"):
        write_answer(tmp_path / "nowhere" / "a.json", problem, problem.encoding.decode([1, 1, 1]))


JSON = st.recursive(
    st.none() | st.booleans() | st.integers(-3, 3) | st.floats() | st.text(max_size=2) | st.sampled_from(NAMES),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=2), inner, max_size=3),
    max_leaves=6,
)
ENTRIES = ["spins", "answer", "cover", "members", "colours", "parts", "bits", "assignment", "channels", "spins_by_name"]


@given(st.sampled_from(sorted(PROBLEMS)), st.dictionaries(st.sampled_from(ENTRIES), JSON, max_size=3))
def test_any_json_is_judged_or_refused(name: str, answer: dict[str, Any]) -> None:
    try:
        _, feasible, broken = audit_answer(PROBLEMS[name], answer)
    except ProblemError:
        return
    assert feasible == (not broken)


def test_solve_says_first_that_an_answer_is_not_valid(tmp_path: Path) -> None:
    """Three vertices that are all joined have no two colours; whatever is found, it is not called good."""
    triangle = encodings.encode_colouring([(0, 1), (1, 2), (2, 0)], 2)
    result = patchwalk.solve(triangle, subsolver="uniform", cluster_size=3, calls=20, run=tmp_path / "run.sqlite")
    assert not result.feasible
    assert in_words(result).splitlines()[0] == result.answer["verdict"]
    assert result.answer["verdict"].startswith("NOT VALID: ")
    assert result.objective == result.answer["conflicts"]
    assert audit_answer(triangle, result.as_json())[1:] == (False, tuple(result.answer["broken"]))
