"""Who is called when: conditions mean what they say, the first that holds wins, and every mistake is named."""

from __future__ import annotations

import operator
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from patchwalk.clusters.conditions import ConditionError, condition_from
from patchwalk.clusters.features import cheap_features
from patchwalk.clusters.policy import QUANTITIES, PolicyError, policy_from
from patchwalk.subsolvers import make_subsolver
from patchwalk.subsolvers.contract import ClusterBatch
from patchwalk.subsolvers.registry import SubsolverError

KNOWN = tuple(QUANTITIES)


def some_batch(rows: int = 12, size: int = 5, seed: int = 1, temperature: float = 2.0) -> ClusterBatch:
    rng = np.random.default_rng(seed)
    upper = np.triu(rng.normal(size=(rows, size, size)), 1)
    spins = rng.choice(np.array([-1, 1], np.int8), (rows, size))
    return ClusterBatch(
        rng.normal(size=(rows, size)), spins, np.full(rows, temperature), np.zeros(rows),
        couplings=upper + upper.transpose(0, 2, 1),
    )  # fmt: skip


PYTHON = {
    "<": operator.lt,
    "<=": operator.le,
    ">": operator.gt,
    ">=": operator.ge,
    "==": operator.eq,
    "!=": operator.ne,
}


@given(
    st.lists(
        st.tuples(st.sampled_from(["stage", "k", "pull"]), st.sampled_from(sorted(PYTHON)), st.integers(-2, 4)),
        min_size=1,
        max_size=4,
    ),
    st.tuples(*[st.sampled_from([-1.0, 0.0, 1.5, 2.0, 3.0])] * 3),
    st.booleans(),
)
def test_a_condition_means_what_it_says(
    parts: list[tuple[str, str, int]], numbers: tuple[float, float, float], turned: bool
) -> None:
    values = dict(zip(("stage", "k", "pull"), numbers, strict=True))
    written = [f"{number} {sign} {name}" if turned else f"{name}{sign}{number}" for name, sign, number in parts]
    expected = all(
        PYTHON[sign](number, values[name]) if turned else PYTHON[sign](values[name], number)
        for name, sign, number in parts
    )
    condition = condition_from(" and ".join(written), KNOWN)
    assert condition.holds(values, 3).tolist() == [expected] * 3
    assert condition.names == tuple(dict.fromkeys(name for name, _, _ in parts))


def test_chains_names_on_both_sides_and_ways_to_write_numbers() -> None:
    condition = condition_from("  .2<stage <= 5e-1 and pull>frustration and -1. <= pull", KNOWN)
    pull, frustration = np.array([0.5, 0.1]), np.array([0.2, 0.2])
    for stage, expected in ((0.2, [False, False]), (0.5, [True, False]), (0.6, [False, False])):
        held = condition.holds({"stage": stage, "pull": pull, "frustration": frustration}, 2)
        assert held.tolist() == expected


def test_what_is_not_known_holds_in_no_comparison() -> None:
    for sign in PYTHON:
        assert not condition_from(f"pull {sign} 1", KNOWN).holds({"pull": np.array([np.nan])}, 1)[0]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "is empty"),
        ("stage", "ends where one of <"),
        ("stage >", "ends where a quantity or a number"),
        ("stage > 0.5 and", "ends where a quantity"),
        ("stage > 0.5 k < 3", "'k' stands where and is expected"),
        ("stage > 0.5 or k < 3", "'or' stands where and is expected.*another case"),
        ("not stage > 0.5", "no 'not'.*another case"),
        ("stag > 0.5", "nothing is called 'stag'; did you mean 'stage'"),
        ("distance < 3", "nothing is called 'distance'.*frustration"),
        ("k = 12", "'=' stands where.*equality is written =="),
        ("k=12", "equality is written =="),
        ("(k == 12)", "stands where a quantity or a number is expected"),
        ("stage - 0.5 > 0", "'-' stands where one of <"),
        ("0.5 > 0.2", "compares two numbers"),
        ("stage > 0.5.2", "'0.5.2' stands where"),
        ("stage > 0.5x", "'0.5x' stands where"),
        ("__import__('os').system('true')", "nothing is called '__import__'"),
        ("and and and", "'and' stands where a quantity"),
    ],
)
def test_mistakes_in_conditions_are_named(text: str, words: str) -> None:
    with pytest.raises(ConditionError, match=words) as raised:
        condition_from(text, KNOWN)
    assert repr(text) in str(raised.value)


@given(st.text(alphabet="ks tage>=<!0.5()and\n\"'[]_\\é", max_size=20))
def test_no_text_does_anything_but_parse_or_complain(text: str) -> None:
    try:
        condition = condition_from(text, KNOWN)
    except ConditionError:
        return
    assert condition.comparisons
    assert set(condition.names) <= set(KNOWN)


CASES = """
[[callers]]
when = "stage > 0.5 and frustration >= 0.5"
subsolver = "walk,shots=4"

[[callers]]
when = "pull > 0.25"
subsolver = "nothing"

[[callers]]
subsolver = { name = "metropolis", shots = 2 }
"""


def test_the_first_case_that_holds_wins() -> None:
    policy = policy_from(tomllib.loads(CASES)["callers"])
    assert [None if case.subsolver is None else case.subsolver.name for case in policy.cases] == [
        "walk", None, "metropolis",
    ]  # fmt: skip
    batch = some_batch(40)
    seen = cheap_features(batch)
    for stage in (0.2, 0.8):
        expected = [
            0 if stage > 0.5 and frustration >= 0.5 else (-1 if pull > 0.25 else 2)
            for frustration, pull in zip(seen["frustration"], seen["pull"], strict=True)
        ]
        assert policy.assign(batch, stage, 1.0).tolist() == expected
    assert set(expected) == {-1, 0, 2}, "every case occurs"


def test_rows_are_assigned_each_on_its_own() -> None:
    policy, batch = policy_from(tomllib.loads(CASES)["callers"]), some_batch(20)
    alone = [int(policy.assign(batch.rows(row, row + 1), 0.7, 1.0)[0]) for row in range(len(batch))]
    assert policy.assign(batch, 0.7, 1.0).tolist() == alone


def test_temperature_is_in_units_of_the_local_field_and_k_is_the_size() -> None:
    policy = policy_from([{"when": "temperature <= 0.5 and k == 5", "subsolver": "descent"}])
    assert policy.assign(some_batch(2, temperature=2.0), 0.0, 4.0).tolist() == [0, 0]
    assert policy.assign(some_batch(2, temperature=2.0), 0.0, 3.9).tolist() == [-1, -1]
    assert policy.assign(some_batch(2, size=6, temperature=2.0), 0.0, 4.0).tolist() == [-1, -1]
    assert policy.assign(some_batch(2, temperature=0.4), 0.0, 0.0).tolist() == [0, 0], "no field, no unit"


@pytest.mark.parametrize(
    "setting", ["uniform,shots=2", {"name": "uniform", "shots": 2}, make_subsolver("uniform", shots=2)]
)
def test_one_subsolver_is_a_policy_of_one_case(setting: Any) -> None:
    policy = policy_from(setting)
    (case,) = policy.cases
    assert case.subsolver == make_subsolver("uniform", shots=2)
    assert not policy.looks_at_spins
    assert policy.assign(some_batch(3), 0.5, 1.0).tolist() == [0, 0, 0]


@pytest.mark.parametrize("word", ["none", "nothing"])
def test_nobody_may_be_called(word: str) -> None:
    assert policy_from(word).assign(some_batch(3), 0.5, 1.0).tolist() == [-1, -1, -1]


@pytest.mark.parametrize(
    ("when", "looks"),
    [("stage > 0.5 and temperature < 1 and k > 3", False), ("pull > 1 and degree < 4", False),
     ("frustration > 0.2", True), ("stage > 0 and strain < 0.3", True)],
)  # fmt: skip
def test_conditions_on_the_clusters_own_spins_are_known(when: str, looks: bool) -> None:
    policy = policy_from([{"when": when, "subsolver": "walk"}])
    assert policy.looks_at_spins == looks
    batch = some_batch(30)
    turned = ClusterBatch(batch.fields, -batch.spins[::-1], batch.temperature, batch.seeds, couplings=batch.couplings)
    if not looks:
        assert np.array_equal(policy.assign(batch, 0.6, 4.0), policy.assign(turned, 0.6, 4.0))


def test_every_mistake_is_told_at_once() -> None:
    with pytest.raises(PolicyError) as raised:
        policy_from([
            {"when": "stag > 1", "subsolver": "walk"},
            {"wen": "stage > 1", "subsolver": "wlk"},
            {"when": 3, "subsolver": 7},
            "walk",
            {"when": "k > 3"},
        ])  # fmt: skip
    lines = str(raised.value).splitlines()
    expected = [
        ("case 1: when:", "did you mean 'stage'"), ("case 2: there is no key 'wen'", "did you mean 'when'"),
        ("case 2: there is no subsolver 'wlk'", "did you mean 'walk'"), ("case 3: when: 3 is no text", "stage > 0.5"),
        ("case 3: 7 is no subsolver", "nothing"), ("case 4: 'walk' is no table", "subsolver ="),
        ("case 5: needs subsolver", "nothing"),
    ]  # fmt: skip
    assert len(lines) == len(expected)
    for line, (beginning, hint) in zip(lines, expected, strict=True):
        assert line.startswith(beginning)
        assert hint in line


@pytest.mark.parametrize(
    ("setting", "words"),
    [
        ([], "no case is given"),
        ([{"subsolver": "walk"}, {"when": "k > 3", "subsolver": "tabu"}], "case 1 has no condition.*put it last"),
    ],
)
def test_cases_that_make_no_policy(setting: list[Any], words: str) -> None:
    with pytest.raises(PolicyError, match=words):
        policy_from(setting)


def test_a_single_subsolver_that_is_wrong_is_named() -> None:
    for setting in ("wlk", 7, None):
        with pytest.raises(SubsolverError):
            policy_from(setting)


def test_files_of_cases_lie_beside_the_settings(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text('name = "uniform"\nshots = 3\n')
    policy = policy_from([{"subsolver": "@mine.toml"}], tmp_path)
    assert policy.cases[0].subsolver == make_subsolver("uniform", shots=3)
