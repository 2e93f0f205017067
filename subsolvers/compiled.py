"""How kernels are compiled: one decorator, and a guard against stale machine code on disk.

numba keeps compiled kernels beside their source and notices when that file changes, but not when a kernel it calls
in *another* file does. The guard compares a fingerprint of all our kernel sources with the one left by the last
process and throws the old index away when they differ.
"""

from __future__ import annotations

import contextlib
import hashlib
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar, cast

import numba

F = TypeVar("F", bound=Callable[..., Any])


def compiled(function: F) -> F:
    """The function as a cached kernel that runs without the interpreter lock; dividing by zero gives inf or nan."""
    return cast(F, numba.njit(cache=True, nogil=True, error_model="numpy")(function))


def _discard_stale_kernels() -> None:
    package = Path(__file__).resolve().parent
    roots = [package, *map(Path, sys.modules["patchwalk"].__path__)]
    sources = sorted({path for root in roots for path in root.rglob("*.py")})
    fingerprint = hashlib.sha256(b"".join(path.read_bytes() for path in sources)).hexdigest()
    stamp = package / "__pycache__" / "kernels.sha256"
    with contextlib.suppress(OSError):  # a read-only installation: numba then caches in the user's own folder
        if stamp.exists() and stamp.read_text() == fingerprint:
            return
        for folder in {path.parent / "__pycache__" for path in sources}:
            for index in folder.glob("*.nbi"):
                index.unlink(missing_ok=True)
        stamp.parent.mkdir(exist_ok=True)
        stamp.write_text(fingerprint)


_discard_stale_kernels()
