"""A subsolver is spelled the same everywhere, and read back from its own spelling."""

from __future__ import annotations

from pathlib import Path

import pytest

from patchwalk.subsolvers import make_subsolver
from patchwalk.subsolvers.registry import SubsolverError, parse_spelling, spelled, subsolver_from


@pytest.mark.parametrize(
    ("text", "table"),
    [
        ("walk", {"name": "walk"}),
        ("walk,shots=4", {"name": "walk", "shots": 4}),
        ("walk, time=[0.5, 1] ,start=uniform", {"name": "walk", "time": [0.5, 1], "start": "uniform"}),
        ('external,command="python a,b.py"', {"name": "external", "command": "python a,b.py"}),
        ("my.module:Thing,flag=true,path=runs/a.txt", {"name": "my.module:Thing", "flag": True, "path": "runs/a.txt"}),
    ],
)
def test_spellings(text: str, table: dict[str, object]) -> None:
    assert parse_spelling(text) == table


@pytest.mark.parametrize("text", ["walk,shots", "walk,=4", "walk,time=[1, 2", "walk,start='uni", "walk,start=a b"])
def test_broken_spellings_are_refused(text: str) -> None:
    with pytest.raises(SubsolverError):
        parse_spelling(text)


@pytest.mark.parametrize(
    "text", ["walk", "walk,shots=4", "walk,hopping=0.25,time_in_hops=[0.5, 2.0]", "enumeration,draw=boltzmann"]
)
def test_spelled_is_the_way_back(text: str) -> None:
    subsolver = subsolver_from(text)
    assert subsolver_from(spelled(subsolver)) == subsolver


def test_a_file_a_table_and_a_made_one(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text('name = "walk"\nshots = 2\n')
    assert subsolver_from("@mine.toml", tmp_path) == make_subsolver("walk", shots=2)
    assert subsolver_from("@mine.toml,times=3", tmp_path) == make_subsolver("walk", shots=2, times=3)
    assert subsolver_from({"name": "walk", "shots": 2}) == make_subsolver("walk", shots=2)
    made = make_subsolver("uniform")
    assert subsolver_from(made) is made


def test_a_strangers_class_by_module_and_name() -> None:
    made = subsolver_from("patchwalk.subsolvers.uniform:Uniform,shots=3")
    assert made == make_subsolver("uniform", shots=3)


def test_broken_files_are_named(tmp_path: Path) -> None:
    (tmp_path / "bad.toml").write_text("name = ")
    for text, words in (("@none.toml", "none.toml"), ("@bad.toml", "not a TOML file")):
        with pytest.raises(SubsolverError, match=words):
            subsolver_from(text, tmp_path)
    with pytest.raises(SubsolverError, match="needs a name"):
        subsolver_from({"shots": 2})
