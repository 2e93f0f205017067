"""How kernels are compiled: one decorator, and a guard against stale machine code on disk.

numba keeps compiled kernels beside their source and notices when that file changes, but not when a kernel it calls in
*another* file does. The guard keeps a fingerprint of every source file together with all of ours that it imports, and
throws a file's compiled kernels away when its fingerprint is no longer the one they were made under.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import re
import sys
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, TypeVar, cast

import numba

F = TypeVar("F", bound=Callable[..., Any])

OUR_IMPORT = re.compile(r"^\s*from (patchwalk[\w.]*) import", re.MULTILINE)


def compiled(function: F) -> F:
    """The function as a cached kernel that runs without the interpreter lock; dividing by zero gives inf or nan."""
    return cast(F, numba.njit(cache=True, nogil=True, error_model="numpy")(function))


def fingerprints(sources: Mapping[str, str]) -> dict[str, str]:
    """A hash for every module (name to source text) of itself and all modules in the mapping that it leads to.

    >>> before = fingerprints({"patchwalk.a": "from patchwalk.b import f", "patchwalk.b": "", "patchwalk.c": ""})
    >>> after = fingerprints({"patchwalk.a": "from patchwalk.b import f", "patchwalk.b": "new", "patchwalk.c": ""})
    >>> [name for name in before if before[name] != after[name]]
    ['patchwalk.a', 'patchwalk.b']
    """
    imports = {
        name: [other for other in OUR_IMPORT.findall(text) if other in sources] for name, text in sources.items()
    }
    hashes = {}
    for name in sources:
        reached, waiting = {name}, [name]
        while waiting:
            fresh = set(imports[waiting.pop()]) - reached
            reached |= fresh
            waiting.extend(fresh)
        text = "\0".join(f"{module}\0{sources[module]}" for module in sorted(reached))
        hashes[name] = hashlib.sha256(text.encode()).hexdigest()
    return hashes


def _discard_stale_kernels() -> None:
    paths = _our_files()
    current = fingerprints({name: path.read_text(encoding="utf-8") for name, path in paths.items()})
    stamp = Path(__file__).resolve().parent / "__pycache__" / "kernels.json"
    with contextlib.suppress(OSError):  # a read-only installation: numba then caches in the user's own folder
        try:
            known = json.loads(stamp.read_text())
        except (OSError, ValueError):
            known = {}
        stale = [name for name, fingerprint in current.items() if known.get(name) != fingerprint]
        for name in stale:
            for index in (paths[name].parent / "__pycache__").glob(f"{paths[name].stem}.*.nbi"):
                index.unlink(missing_ok=True)
        if stale:
            stamp.parent.mkdir(exist_ok=True)
            stamp.write_text(json.dumps(current))


def _our_files() -> dict[str, Path]:
    """Every module of the package and its file, wherever its two halves are installed."""
    halves = {"patchwalk": [*map(Path, sys.modules["patchwalk"].__path__)]}
    halves["patchwalk.subsolvers"] = [Path(__file__).resolve().parent]
    files = {}
    for prefix, folders in halves.items():
        for folder in folders:
            for path in sorted(folder.rglob("*.py")):
                files[".".join([prefix, *path.relative_to(folder).with_suffix("").parts])] = path
    return files


_discard_stale_kernels()
