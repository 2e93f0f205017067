"""Our JSON of choices, costs and rules: what it says is what the builder is told, and errors name the key."""

from __future__ import annotations

import gzip
import io
import json
from pathlib import Path
from typing import Any

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from patchwalk.problem import layout_json
from patchwalk.problem.builder import ProblemBuilder
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.layout_json import is_ours, problem_from_json

ROTA = Path(__file__).resolve().parents[2] / "configs" / "kiosk-rota.json"

WHOLE: dict[str, Any] = {
    "layout": "patchwalk choices",
    "version": 1,
    "about": "Ünïcode is welcome",
    "choices": {"Mon": ["Ada", "Ben"], "Tue": ["Ada", "Cleo", 7]},
    "yes or no": ["open"],
    "numbers": {"loaves": [0, 5]},
    "forms": {"Tue": "domain-wall"},
    "costs": [{"cost": 3, "if": [["Mon", "Ada"]]}, {"cost": -1.5, "if": [["Tue", 7], "open"]}, {"cost": 2}],
    "rules": [
        {"name": "Ada once", "of": [["*", "Ada"]], "at most": 1},
        {"of": ["loaves", "open"], "times": [1, -3], "at least": 0},
        {"of": [["Mon", "Ben"], "open"], "exactly": 1},
    ],
    "known": {"Mon": "Ben", "Tue": "Ada", "open": False, "loaves": 2},
}


def with_entry(*path: Any, value: Any) -> str:
    """The whole example with one entry changed."""
    table = json.loads(json.dumps(WHOLE))
    inner = table
    for key in path[:-1]:
        inner = inner[key]
    inner[path[-1]] = value
    return json.dumps(table)


def test_it_says_what_the_builder_is_told() -> None:
    builder = ProblemBuilder()
    builder.choice("Mon", ["Ada", "Ben"])
    builder.choice("Tue", ["Ada", "Cleo", 7], "domain-wall")
    builder.yes_no("open")
    builder.number("loaves", 0, 5)
    builder.cost(3, ("Mon", "Ada"))
    builder.cost(-1.5, ("Tue", 7), "open")
    builder.cost(2)
    builder.at_most_one([("Mon", "Ada"), ("Tue", "Ada")], name="Ada once")
    builder.total(["loaves", "open"], 0, times=[1, -3])
    builder.exactly_one([("Mon", "Ben"), "open"])
    told = builder.build(known=WHOLE["known"])
    read = problem_from_json(json.dumps(WHOLE))
    assert read.fingerprint == told.fingerprint
    assert (read.kind, read.names) == ("constrained", told.names)


def test_read_and_written_it_is_the_same(tmp_path: Path) -> None:
    (tmp_path / "a.json.gz").write_bytes(gzip.compress(json.dumps(WHOLE).encode()))
    problem = layout_json.read(tmp_path / "a.json.gz")
    stream = io.BytesIO()
    layout_json.write(problem, stream)
    again = problem_from_json(stream.getvalue().decode())
    assert again.fingerprint == problem.fingerprint
    assert is_ours(stream.getvalue().decode())
    with pytest.raises(ProblemError, match="only a problem that was read from our JSON"):
        layout_json.text_of(Problem.from_arrays([0], [1], [1]))
    with pytest.raises(ProblemError, match=r"a\.json\.gz: this is our JSON of choices, kind constrained, but maxcut"):
        layout_json.read(tmp_path / "a.json.gz", "maxcut")


def test_the_documented_example_and_the_rota_are_read() -> None:
    text = layout_json.__doc__ or ""
    example_text = text[text.index("    {") : text.index("}}") + 2]
    assert is_ours(example_text)
    problem = problem_from_json(example_text)
    assert problem.encoding is not None
    known = json.loads(example_text)["known"]
    assert problem.encoding.judge({"choices": known}) == (0.0, ())
    assert is_ours(ROTA.read_text())
    assert len(problem_from_json(ROTA.read_text()).groups) == 16


@pytest.mark.parametrize(
    "text", ["", "[]", '{"nodes": [], "links": []}', '{"layout": "spring"}', "layout patchwalk choices"]
)
def test_other_json_is_not_ours(text: str) -> None:
    assert not is_ours(text)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('{"layout": "patchwalk choices",\n "version": 1,\n oops}', "rota, line 3: not JSON"),
        ("[1]", "rota: expected an object"),
        ('{"version": 1, "version": 1}', 'rota: the key "version" stands twice'),
        ('{"version": NaN}', "NaN is no number"),
        ('{"version": ' + "9" * 10_000 + "}", "a number is too long"),
        ("[" * 100_000, "nested too deeply|not JSON"),
        (with_entry("layout", value="other"), "layout is 'other'; expected"),
        (with_entry("version", value=2), "version is 2; this program reads version 1"),
        (with_entry("version", value=True), "version is True"),
        (with_entry("rule", value=[]), "rule is not known; did you mean 'rules'"),
        (with_entry("choices", value=[]), r"choices is \[\]; expected an object of names"),
        (with_entry("choices", "Mon", value="Ada"), r'choices\["Mon"\] is "Ada"; expected a list'),
        (with_entry("choices", "Mon", value=[["Ada"]]), r'choices\["Mon"\] has the value \["Ada"\]; expected text'),
        (with_entry("choices", "Mon", value=[]), r"choices\[\"Mon\"\]: 'Mon' has 0 values"),
        (with_entry("yes or no", value=["Mon"]), r"yes or no\[0\]: 'Mon' is there already"),
        (with_entry("yes or no", value=[3]), r"yes or no\[0\]: name 3 is no text"),
        (with_entry("numbers", "loaves", value=[1]), r'numbers\["loaves"\] has to be a list of the least and the most'),
        (with_entry("numbers", "loaves", value=[0, "x"]), r"numbers\[\"loaves\"\]: bound 'x' of 'loaves'"),
        (
            with_entry("forms", "Monday", value="binary"),
            r'forms\["Monday"\] is none of the choices; did you mean \'Mon\'',
        ),
        (with_entry("forms", "Mon", value="unary"), "form 'unary' of 'Mon' is not known"),
        (with_entry("forms", "Mon", value=[]), r"form \[\] of 'Mon' is not known"),
        (with_entry("costs", 0, value=3), r"costs\[0\] is 3; expected an object"),
        (with_entry("costs", 0, value={"cost": "3"}), r'costs\[0\].cost is "3"; expected a number'),
        (with_entry("costs", 0, value={"cost": 1e300}), r"costs\[0\].cost is 1e\+300; expected a number up to 1e100"),
        (with_entry("costs", 0, value={"cost": 1, "iff": []}), r"costs\[0\].iff is not known; did you mean 'if'"),
        (with_entry("costs", 0, "if", value=["open"] * 3), r"costs\[0\].if: a product of 3 terms"),
        (
            with_entry("costs", 0, "if", value=["Mon"]),
            r'costs\[0\].if\[0\] is the choice "Mon"; expected \["Mon", value\]',
        ),
        (with_entry("costs", 0, "if", value=[["Mon", "Bem"]]), '"Bem" is no value of "Mon"; did you mean \'Ben\''),
        (with_entry("costs", 0, "if", value=[["Mon", "Zoe"]]), '"Zoe" is no value of "Mon"; it has: Ada, Ben'),
        (with_entry("costs", 0, "if", value=[["open", 1]]), 'gives "open" a value, but it is no choice'),
        (with_entry("costs", 0, "if", value=["opne"]), "speaks of \"opne\", which is not stated; did you mean 'open'"),
        (with_entry("costs", 0, "if", value=[[]]), r"costs\[0\].if\[0\] is \[\]; expected a name, or"),
        (with_entry("costs", 0, "if", value=[["Mon", "Ada", 1]]), "expected a name, or"),
        (
            with_entry("rules", 0, "of", value=[["*", "Adda"]]),
            'every choice with "Adda", but there is none; did you mean',
        ),
        (with_entry("rules", 0, "of", value=None), r"rules\[0\].of is null; expected a list"),
        (with_entry("rules", 0, "name", value=1), r"rules\[0\].name is 1; expected text"),
        (with_entry("rules", 1, "times", value=[1]), r"rules\[1\].times has 1 numbers for 2 terms"),
        (with_entry("rules", 1, "times", value=[1, 0.5]), r"rules\[1\]: rule 2: 0.5 is not a whole number"),
        (with_entry("rules", 1, "exactly", value=1), r"rules\[1\].exactly stands beside another bound"),
        (with_entry("rules", 2, "exactly", value=None), r"rules\[2\]: rule 3: neither least nor most"),
        (with_entry("rules", 2, "exactly", value="1"), r"rules\[2\]: rule 3: '1' is not a whole number"),
        (with_entry("rules", 2, "exactly", value=9), r"rota: rule 3 can never be kept: the total is 0 to 2"),
        (with_entry("known", value=[]), "known is no object"),
        (with_entry("known", "Mon", value="Ada"), "rota: the known answer breaks the rules: Ada once"),
        (with_entry("known", "Mon", value=["Ada", {}]), "rota: Mon is {}; expected one of"),
    ],
)
def test_errors_name_the_key(text: str, message: str) -> None:
    with pytest.raises(ProblemError, match=message) as caught:
        problem_from_json(text, "rota")
    assert str(caught.value).startswith("rota")
    assert len(str(caught.value)) < 400


PIECES = st.sampled_from(
    [
        "Mon",
        "Tue",
        "Ada",
        "open",
        "loaves",
        "*",
        0,
        1,
        -2,
        2.5,
        True,
        None,
        10**18,
        ["Mon", "Ada"],
        ["*", "Ada"],
        {},
        [],
    ]
)
VALUES = st.recursive(
    PIECES,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=3), inner, max_size=2),
    max_leaves=5,
)
PLACES = st.sampled_from(
    [(key,) for key in WHOLE]
    + [
        ("choices", "Mon"),
        ("numbers", "loaves"),
        ("forms", "Tue"),
        ("known", "Mon"),
        ("known", "loaves"),
        ("known", "open"),
    ]
    + [("costs", 0), ("costs", 0, "cost"), ("costs", 1, "if"), ("costs", 1, "if", 0), ("rules", 0), ("rules", 0, "of")]
    + [("rules", 1, "times"), ("rules", 1, "at least"), ("rules", 2, "exactly"), ("rules", 0, "at most")]
)


@given(PLACES, VALUES)
@example(("numbers", "loaves"), [-(10**18), 10**18])
def test_whatever_stands_anywhere_is_read_or_refused(place: tuple[Any, ...], value: Any) -> None:
    try:
        problem = problem_from_json(with_entry(*place, value=value), "rota")
    except ProblemError as error:
        message = str(error)
    else:
        message = problem.summary()
    assert message


@given(st.integers(0, 700), st.text(max_size=3), st.integers(0, 3))
def test_broken_texts_are_read_or_refused(where: int, put: str, cut: int) -> None:
    text = json.dumps(WHOLE)
    where %= len(text)
    try:
        problem = problem_from_json(text[:where] + put + text[where + cut :], "rota")
    except ProblemError as error:
        message = str(error)
    else:
        message = problem.summary()
    assert message
