"""The house keeps its shape: imports run one way, and every folder is in the package list."""

from __future__ import annotations

import ast
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]

FLOORS = {"interface": 5, "commands": 4, "search": 3, "evidence": 3, "bounds": 3, "clusters": 2, "problem": 1}
"""A room may import from lower floors only; search may use bounds, and search and evidence do not know each other."""

SAME_FLOOR = {("search", "bounds")}
LEAVES = {"acceptance", "engine", "cost", "statistics", "settings", "records", "settings_checks", "workers"}


def modules() -> list[tuple[str, Path]]:
    """Every module of the package with its full name."""
    found = []
    for folder, prefix in ((ROOT / "pipeline", "patchwalk"), (ROOT / "subsolvers", "patchwalk.subsolvers")):
        for path in sorted(folder.rglob("*.py")):
            parts = path.relative_to(folder).with_suffix("").parts
            found.append((".".join([prefix, *(part for part in parts if part != "__init__")]), path))
    return found


def imports_of(path: Path) -> list[str]:
    """Names of our own modules that a file imports, wherever in the file."""
    names = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path} imports relatively, line {node.lineno}"
            names.append(node.module or "")
        elif isinstance(node, ast.Import):
            names.extend(alias.name for alias in node.names)
    return [name for name in names if name.split(".")[0] == "patchwalk"]


def room_of(module: str) -> str:
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else ""


def allowed(importer: str, imported: str) -> bool:
    """Whether one room may import from another."""
    if importer == imported or imported in ("subsolvers", ""):
        return importer != "subsolvers" or imported == "subsolvers"
    if importer == "subsolvers":
        return False
    if importer in LEAVES:
        return imported in LEAVES
    if imported in LEAVES or importer == "":
        return True
    return FLOORS[importer] > FLOORS[imported] or (importer, imported) in SAME_FLOOR


@pytest.mark.parametrize(("module", "path"), modules(), ids=lambda value: value if isinstance(value, str) else "")
def test_imports_run_one_way(module: str, path: Path) -> None:
    for imported in imports_of(path):
        assert allowed(room_of(module), room_of(imported)), f"{module} must not import {imported}"


def test_the_rule_can_fail() -> None:
    assert not allowed("problem", "search")
    assert not allowed("search", "evidence")
    assert not allowed("evidence", "search")
    assert not allowed("subsolvers", "problem")
    assert not allowed("cost", "search")
    assert allowed("search", "bounds")
    assert not allowed("bounds", "search")


def test_the_package_list_names_every_folder() -> None:
    listed = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]["packages"]
    folders = {".".join(["patchwalk", *path.parent.relative_to(ROOT / "pipeline").parts])
               for path in (ROOT / "pipeline").rglob("*.py")}  # fmt: skip
    assert sorted(listed) == sorted({*folders, "patchwalk.subsolvers"})


def test_no_module_bears_the_name_of_a_public_function() -> None:
    public = ast.literal_eval(
        next(
            ast.unparse(node.value)
            for node in ast.parse((ROOT / "pipeline" / "__init__.py").read_text()).body
            if isinstance(node, ast.Assign) and ast.unparse(node.targets[0]) == "__all__"
        )
    )
    assert not {module.split(".")[-1] for module, _ in modules()} & set(public)
