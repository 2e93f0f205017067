"""Every example that a reader may copy runs: docstrings, the README's Python, the commands in help texts."""

from __future__ import annotations

import doctest
import importlib
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

from patchwalk.interface.cli import COMMANDS, program

ROOT = Path(__file__).resolve().parents[2]


def module_names() -> list[str]:
    names = []
    for folder, prefix in ((ROOT / "pipeline", "patchwalk"), (ROOT / "subsolvers", "patchwalk.subsolvers")):
        for path in sorted(folder.rglob("*.py")):
            parts = [part for part in path.relative_to(folder).with_suffix("").parts if part != "__init__"]
            names.append(".".join([prefix, *parts]))
    return names


@pytest.mark.parametrize("name", module_names())
def test_docstrings(name: str) -> None:
    outcome = doctest.testmod(importlib.import_module(name), optionflags=doctest.NORMALIZE_WHITESPACE)
    assert outcome.failed == 0


def test_the_readmes_python(capsys: pytest.CaptureFixture[str]) -> None:
    blocks = re.findall(r"```python\n(.*?)```", (ROOT / "README.md").read_text(), re.DOTALL)
    assert blocks
    for block in blocks:
        exec(block, {})
    assert "budget" in capsys.readouterr().out


def help_examples() -> list[str]:
    """Command lines of all help texts, in the order in which they build on each other."""
    texts = [program.help or ""]
    for location, _ in COMMANDS.values():
        module, _, attribute = location.partition(":")
        texts.append(getattr(importlib.import_module(module), attribute).help or "")
    return [line.strip() for text in texts for line in text.splitlines() if line.strip().startswith("patchwalk ")]


def test_the_commands_in_help_texts_run(tmp_path: Path) -> None:
    """With budgets cut down, in a folder that holds the files they speak of."""
    examples = help_examples()
    assert len(examples) >= 6
    (tmp_path / "configs").symlink_to(ROOT / "configs")
    (tmp_path / "graph.csv").write_text("a,b,1\nb,c,2\nc,a,1\nc,d,1\n")
    (tmp_path / "couplings.csv").write_text("a,b,1\nb,c,-2\nc,a,1\nc,d,1\n")
    (tmp_path / "fields.csv").write_text("a,0.5\nd,-1\n")
    executable = Path(sys.executable).with_name("patchwalk")
    for example in examples:
        words = shlex.split(example)[1:]
        if words[0] == "solve":
            size = ["--cluster-size", "3"] if "graph.csv" in words or "couplings.csv" in words else []
            words += ["--calls", "40", *size]
        if words[0] == "make":
            words.append("--force")
        run = subprocess.run([executable, *words], cwd=tmp_path, capture_output=True, text=True, check=False)
        assert run.returncode == 0, f"{example}: {run.stderr}"


def test_help_imports_nothing_heavy() -> None:
    heavy = ("numpy", "numba", "scipy", "pydantic", "rich", "matplotlib", "distributed")
    code = (
        "import sys; from patchwalk.interface.cli import program; program(['--help'], standalone_mode=False); "
        f"print([name for name in {heavy!r} if name in sys.modules])"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.strip().endswith("[]")
