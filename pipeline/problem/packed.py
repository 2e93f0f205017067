"""Couplings and fields as compressed arrays: a ``.npz`` of numpy, without a single Python object in it.

Entries: ``header``, a JSON text as bytes, ``{"patchwalk": 1, "kind": ..., "offset": ...}`` with names, recipe and
planted energy where there are any; ``heads``, ``tails`` i4 (m,) from 0, each pair once, smaller first; ``couplings``
f8 (m,); ``fields`` f8 (n,). All numbers are those of the energy, for ``maxcut`` too.
"""

from __future__ import annotations

import io
import json
import warnings
import zipfile
from collections.abc import Iterable
from dataclasses import replace
from typing import IO, Any

import numpy as np
import numpy.typing as npt
from scipy import sparse

from patchwalk.problem.forms import PathLike
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import UNPACKED_ALWAYS, UNPACKED_PER_BYTE, chunks, fail, stated

VERSION = 1
ENTRIES = {"header": "|u1", "heads": "<i4", "tails": "<i4", "couplings": "<f8", "fields": "<f8"}


def read(path: PathLike, kind: str | None) -> Problem:
    """The problem in a file of arrays; raises :class:`ProblemError`, naming the entry."""
    data = b"".join(chunks(path))
    try:
        arrays = _entries(path, data)
    except ProblemError:
        raise
    except Exception as error:  # whatever zipfile trips over in a damaged file, of which it raises many kinds
        fail(path, None, f"not a .npz file, or a damaged one: {str(error)[:100]}")
    header = _header(path, arrays["header"].tobytes())
    if header["patchwalk"] != VERSION:
        fail(path, None, f"written in version {header['patchwalk']!r} of this layout; this program reads {VERSION}")
    known = ("kind", "offset", "names", "planted_energy")
    settings: dict[str, tuple[object, int]] = {name: (header[name], 0) for name in known if name in header}
    source = stated(path, settings)
    size = len(arrays["fields"])
    kind = source.kind(kind)
    with source.naming():
        if np.any(arrays["heads"] >= arrays["tails"]):
            raise ProblemError("heads: an entry is not below that of tails; each pair stands once, smaller first")
        if kind == "maxcut" and np.any(arrays["fields"]):
            raise ProblemError("fields: an entry is not 0, but kind maxcut has no fields")
        problem = Problem.from_arrays(
            arrays["heads"], arrays["tails"], arrays["couplings"], size=size, fields=arrays["fields"]
        )
        details = {**source.details(), **({"recipe": tuple(map(str, header["recipe"]))} if "recipe" in header else {})}
        return replace(problem, kind=kind, offset=source.offset(0.0), names=source.names(size), details=details)


def _entries(path: PathLike, data: bytes) -> dict[str, npt.NDArray[Any]]:
    """The arrays, each of its type and one dimension."""
    arrays: dict[str, npt.NDArray[Any]] = {}
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        left = UNPACKED_ALWAYS + UNPACKED_PER_BYTE * len(data)
        for name, dtype in ENTRIES.items():
            if f"{name}.npy" not in archive.namelist():
                fail(path, None, f"there is no entry {name}; expected {', '.join(ENTRIES)}")
            with archive.open(f"{name}.npy") as stream:
                content = stream.read(left + 1)
            left -= len(content)
            if left < 0:
                fail(path, None, f"unpacks to more than {UNPACKED_PER_BYTE} times its size, as no list of numbers does")
            arrays[name] = _array(path, name, dtype, content)
    return arrays


def _array(path: PathLike, name: str, dtype: str, content: bytes) -> npt.NDArray[Any]:
    """One array; its own header is held against what is there, so that nothing is allocated on its word."""
    stream = io.BytesIO(content)
    try:
        version = np.lib.format.read_magic(stream)
        if version != (1, 0):
            raise ValueError(f"layout version {version}")
        with warnings.catch_warnings():
            warnings.simplefilter("error")  # numpy mends headers of old Pythons, which are not ours
            shape, _, found = np.lib.format.read_array_header_1_0(stream, max_header_size=1000)
    except Exception as error:  # whatever numpy finds wrong with the header: it is evaluated as a literal
        fail(path, None, f"entry {name} has no header that can be read: {str(error)[:100]}")
    body = content[stream.tell() :]
    if found != np.dtype(dtype) or len(shape) != 1 or shape[0] * found.itemsize != len(body):
        expected = f"one dimension of {np.dtype(dtype).name}"
        fail(
            path, None, f"entry {name} is {found} of shape {str(shape)[:60]} in {len(body)} bytes; expected {expected}"
        )
    return np.frombuffer(body, dtype)


def _header(path: PathLike, data: bytes) -> dict[str, Any]:
    try:
        header = json.loads(data.decode())
    except (ValueError, RecursionError) as error:
        fail(path, None, f"entry header is not JSON: {str(error)[:100]}")
    if not isinstance(header, dict) or "patchwalk" not in header or not isinstance(header.get("recipe", []), list):
        fail(path, None, 'entry header does not say {"patchwalk": 1, "kind": ...}')
    return header


def write(problem: Problem, stream: IO[bytes], recipe: Iterable[str]) -> None:
    """Write compressed arrays, the same bytes for the same problem."""
    upper = sparse.triu(problem.matrix, 1).tocoo()
    header: dict[str, Any] = {"patchwalk": VERSION, "kind": problem.kind, "offset": problem.offset}
    if problem.names is not None:
        header["names"] = problem.names
    if "planted_energy" in problem.details:
        header["planted_energy"] = problem.details["planted_energy"]
    header["recipe"] = list(recipe)
    arrays = {
        "header": np.frombuffer(json.dumps(header).encode(), np.uint8),
        "heads": upper.row.astype("<i4"),
        "tails": upper.col.astype("<i4"),
        "couplings": upper.data.astype("<f8"),
        "fields": problem.fields.astype("<f8"),
    }
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, array in arrays.items():
            # a fixed date, so that equal problems give equal files
            info = zipfile.ZipInfo(f"{name}.npy", (1980, 1, 1, 0, 0, 0))
            info.compress_type = zipfile.ZIP_DEFLATED
            with archive.open(info, "w", force_zip64=True) as entry:
                np.lib.format.write_array(entry, array, version=(1, 0), allow_pickle=False)
