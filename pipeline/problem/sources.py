"""Text files line by line, with errors that name the line: what every reader of a problem stands on."""

from __future__ import annotations

import contextlib
import gzip
import io
import json
import os
import zlib
from collections.abc import Callable, Generator, Iterable, Iterator, Mapping
from dataclasses import dataclass
from itertools import chain
from typing import IO, Any, NoReturn

import numpy as np

from patchwalk.problem.forms import PathLike as PathLike
from patchwalk.problem.forms import forms_of, homes_of
from patchwalk.problem.ising import KINDS, ProblemError, known_kind

Lines = Iterator[tuple[int, str]]

LARGEST_NUMBER = 1e100  # squares and sums of millions of such numbers are still finite
LONGEST_LINE = 1_000_000  # in characters; a longer one is no row of numbers or names
# gzip makes a line of zeros a thousand times smaller, but no list of numbers more than about 30 times
UNPACKED_ALWAYS, UNPACKED_PER_BYTE = 16_000_000, 100
SETTINGS = ("kind", "offset", "names", "planted_energy", "colours")


def fail(path: PathLike, line: int | None, message: str) -> NoReturn:
    """Raise the :class:`ProblemError` that names file and line."""
    place = f", line {line}" if line else ""
    raise ProblemError(f"{os.fspath(path)}{place}: {message}")


def shortened(text: str) -> str:
    """What stood in a file, cut to a length that a message can bear."""
    return text if len(text) <= 40 else text[:37] + "..."


def quoted(text: str) -> str:
    """The same, in quotes."""
    return repr(shortened(text))


def plain(text: str) -> bool:
    """Whether a number is written as elsewhere: only Python reads ``1_000`` and the like."""
    return text.isascii() and "_" not in text


def numbered_lines(path: PathLike) -> Generator[tuple[int, str], None, None]:
    """The lines of a text file, ``.gz`` or plain, with their numbers from 1; raises :class:`ProblemError`."""
    number = 0
    with (
        _named_failures(path, lambda: number + 1),
        io.TextIOWrapper(io.BufferedReader(_opened(path), 1 << 18), "utf-8-sig", "surrogateescape") as stream,
    ):
        # bytes that are not UTF-8 have become lone surrogates, so that the error can name their line
        for number, text in enumerate(stream, 1):
            if not text.isascii() and any("\udc80" <= letter <= "\udcff" for letter in text):
                fail(path, number, "not UTF-8 text; save the file as UTF-8")
            if len(text) > LONGEST_LINE and text[0] not in "#%":
                fail(path, number, f"the line has {len(text)} characters; expected rows of at most {LONGEST_LINE}")
            yield number, text


def write_lines(stream: IO[bytes], comments: Iterable[str], lines: Iterable[str], mark: str = "#") -> None:
    """Write comments, each behind ``mark``, and lines as UTF-8 text."""
    text = io.TextIOWrapper(stream, encoding="utf-8", newline="\n")
    text.writelines(f"{mark} {comment}\n" for comment in comments)
    text.writelines(line + "\n" for line in lines)
    text.detach()  # which also flushes


def chunks(path: PathLike) -> Generator[bytes, None, None]:
    """The bytes of a file piece by piece, unpacked where it is named ``.gz``; raises :class:`ProblemError`."""
    with _named_failures(path, lambda: None), io.BufferedReader(_opened(path)) as stream:
        while chunk := stream.read(1 << 18):
            yield chunk


def stated(path: PathLike, settings: Mapping[str, tuple[object, int]], colours: int | None = None) -> Source:
    """A source without lines, for files that state their settings in another way: a value and its line for each."""
    texts = {
        name: (value if isinstance(value, str) else json.dumps(value), line) for name, (value, line) in settings.items()
    }
    return Source(path, texts, iter(()), colours)


@contextlib.contextmanager
def _named_failures(path: PathLike, line: Callable[[], int | None]) -> Generator[None, None, None]:
    """Whatever goes wrong with the file itself as a :class:`ProblemError`; ``line`` tells how far reading came."""
    try:
        yield
    except FileNotFoundError:
        fail(path, None, "there is no such file")
    except IsADirectoryError:
        fail(path, None, "this is a folder; name a file in it")
    except (gzip.BadGzipFile, EOFError, zlib.error) as error:
        fail(path, line(), f"the gzip data are damaged or cut short ({error}); compress them again")
    except OSError as error:
        fail(path, None, f"cannot be read: {error.strerror or error}")


class _Unpacked(io.RawIOBase):
    """The content of a gzip file as a raw stream, with an end to how much may come out of it."""

    def __init__(self, path: str) -> None:
        self.path = path
        self.left = UNPACKED_ALWAYS + UNPACKED_PER_BYTE * os.path.getsize(path)
        self.stream = gzip.open(path, "rb")  # noqa: SIM115 - closed in close()

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: Any) -> int:
        data = self.stream.read(len(buffer))
        buffer[: len(data)] = data
        self.left -= len(data)
        if self.left < 0:
            fail(
                self.path,
                None,
                f"unpacks to more than {UNPACKED_PER_BYTE} times its size, as no list of numbers does; "
                "if it is right, unpack it first",
            )
        return len(data)

    def close(self) -> None:
        self.stream.close()
        super().close()


def _opened(path: PathLike) -> io.RawIOBase:
    name = os.fspath(path)
    if "\0" in name:
        raise ProblemError(f"{name!r} cannot be the name of a file: it holds a zero byte")
    return _Unpacked(name) if name.endswith(".gz") else io.FileIO(name)


@contextlib.contextmanager
def replacing(path: PathLike) -> Iterator[IO[bytes]]:
    """A stream into a file beside the target, which takes its place once it is whole; gzipped if named ``.gz``."""
    folder, name = os.path.split(os.fspath(path))
    unfinished = os.path.join(folder, f".{name}.{os.getpid()}.unfinished")
    try:
        with contextlib.ExitStack() as stack:
            stream: Any = stack.enter_context(open(unfinished, "wb"))
            if name.endswith(".gz"):  # without name and time, so that equal problems give equal files
                stream = stack.enter_context(gzip.GzipFile("", "wb", fileobj=stream, mtime=0))
            yield stream
        os.replace(unfinished, path)
    except OSError as error:
        fail(path, None, f"cannot be written: {error.strerror or error}")
    finally:
        with contextlib.suppress(OSError):
            os.unlink(unfinished)


@dataclass(frozen=True)
class Source:
    """A file with its leading comments read: ``settings`` in them (text, line), ``lines`` still to come.

    ``colours_asked`` is how many colours the caller asks for, whatever the file states.
    """

    path: PathLike
    settings: Mapping[str, tuple[str, int]]
    lines: Lines
    colours_asked: int | None = None

    def fail(self, line: int | None, message: str) -> NoReturn:
        """Raise the :class:`ProblemError` that names file and line."""
        fail(self.path, line, message)

    @contextlib.contextmanager
    def naming(self) -> Iterator[None]:
        """Whatever a problem made from the file complains of, with the name of the file."""
        try:
            yield
        except ProblemError as error:
            self.fail(None, str(error))

    def number(self, text: str, line: int, what: str) -> float:
        """A finite number from a cell; raises :class:`ProblemError`."""
        try:
            value = float(text)
        except ValueError:
            value = np.nan
        if not (-LARGEST_NUMBER <= value <= LARGEST_NUMBER and plain(text)):
            self.fail(line, f"{what} {quoted(text)} is not a finite number such as 1, -0.5 or 2e-3, up to 1e100")
        return value

    def kind(self, given: str | None) -> str:
        """The one kind that caller and file agree on, and that a file of this name can hold."""
        line = None
        if given is not None:
            known_kind(given)
        if "kind" in self.settings:
            stated, line = self.settings["kind"]
            if given not in (None, stated):
                self.fail(line, f"the file states kind = {shortened(stated)}, but {given} was asked for; drop one")
            if stated not in KINDS:
                self.fail(line, f"kind {quoted(stated)} is not known; it is one of: {', '.join(KINDS)}")
            given = stated
        kinds = [kind for form in forms_of(self.path) for kind in form.kinds]
        if given is None:
            self.fail(
                None,
                f'what do its numbers mean? Say --kind {kinds[1]} or kind="{kinds[1]}"; one of: {", ".join(kinds)}',
            )
        if given not in kinds:
            self.fail(
                line, f"kind {given} is not read from such a file but from {homes_of(given)}; name it so if it is one"
            )
        return given

    def offset(self, default: float) -> float:
        """The constant of the energy that a comment states, or the default."""
        if "offset" not in self.settings:
            return default
        text, line = self.settings["offset"]
        return self.number(text, line, "offset")

    def names(self, size: int | None) -> tuple[str, ...] | None:
        """The names of the spins that a comment states, or None; ``size`` many where that is known."""
        if "names" not in self.settings:
            return None
        text, line = self.settings["names"]
        try:
            names = json.loads(text)
        except (ValueError, RecursionError):
            names = None
        if not isinstance(names, list) or not all(isinstance(name, str) for name in names):
            self.fail(line, f'names {quoted(text)} is not a list such as ["a", "b"] (JSON)')
        if size is not None and len(names) != size:
            self.fail(line, f"{len(names)} names for {size} vertices; give one each")
        if size is None and len(set(names)) < len(names):
            self.fail(line, "a name occurs twice in it; names must differ")
        return tuple(names)

    def colours(self, most: int, notes: list[str]) -> int:
        """How many colours the caller asks for or, failing that, the file states; raises :class:`ProblemError`.

        A note says so where the two differ.
        """
        text, line = self.settings.get("colours", ("", None))
        asked = self.colours_asked
        if asked is not None:
            if isinstance(asked, bool) or not 2 <= asked <= most:
                self.fail(None, f"colours is {asked!r}; expected a whole number from 2 to {most}")
            if text not in ("", str(asked)):
                notes.append(f"{asked} colours, as asked for; the file states {shortened(text)}")
            return asked
        if not text:
            self.fail(
                line, "how many colours are there? Say --colours 3 or colours=3, or # colours = 3 in a line before all"
            )
        if not (text.isascii() and text.isdigit() and len(text) < 10 and 2 <= int(text) <= most):
            self.fail(line, f"colours {quoted(text)} is not a whole number from 2 to {most}")
        return int(text)

    def details(self) -> dict[str, Any]:
        """What comments state beyond the problem itself: the ground energy of a planted one."""
        if "planted_energy" not in self.settings:
            return {}
        text, line = self.settings["planted_energy"]
        return {"planted_energy": self.number(text, line, "planted_energy")}


def open_source(
    path: PathLike, lines: Lines, is_comment: Callable[[str], bool], marks: str = "#%", colours: int | None = None
) -> Source:
    """The file with its leading comments read; raises :class:`ProblemError` where nothing follows them.

    ``marks`` are the characters with which comments begin.
    """
    settings: dict[str, tuple[str, int]] = {}
    for number, text in lines:
        if text.strip() and not is_comment(text):
            return Source(path, settings, chain([(number, text)], lines), colours)
        key, _, value = text.strip().lstrip(f"{marks} \t").partition("=")
        if key.strip() in SETTINGS:
            settings[key.strip()] = value.strip(), number
    fail(path, None, "the file is empty, or holds nothing but comments; an edge list begins with a line 'n m'")
