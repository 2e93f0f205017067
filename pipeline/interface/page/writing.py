"""``report``: run files read, drawn and told on one page that needs nothing else, neither network nor scripts."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Sequence
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

from patchwalk.commands.reporting import Asked, Chapter, ComparedChapter, RunsChapter, ScalingChapter, chapters_of
from patchwalk.evidence.layout import RunFileError
from patchwalk.interface.page.appearance import STYLE
from patchwalk.interface.page.markup import element, joined, sentence
from patchwalk.interface.page.sections import chapter_of, title_of
from patchwalk.settings_checks import SettingsError

GENERATOR = "Patchwalk report"
OPENING = f'<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8"><meta name="generator" content="{GENERATOR}'
POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:; base-uri 'none'; form-action 'none'"


@dataclass(frozen=True)
class Report:
    """A page that was written: its ``size`` in bytes, its ``figures``, and its one ``sentence``."""

    path: Path
    size: int
    figures: int
    sentence: str

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``."""
        return {"path": str(self.path), "bytes": self.size, "figures": self.figures, "sentence": self.sentence}


def report(
    runs: str | Path | Sequence[str | Path],
    output: str | Path,
    cost: str | Path | None = None,
    *,
    subsolver: str | None = None,
    against: str | None = None,
) -> Report:
    """Write one page about run files of ``solve``, ``sample``, ``bound``, ``compare`` and ``scale``.

    ``output`` is a new name that ends in ``.html``, or an earlier report, which is replaced in one step. ``cost``,
    ``subsolver`` and ``against`` are those of :func:`patchwalk.profile`. The same files give the same bytes. Raises
    ``RunFileError`` for files that cannot be read and ``SettingsError`` for a name that is not free.

    >>> import os, tempfile
    >>> from patchwalk import make, solve
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     run = solve(make("sk", 8, seed=1), cluster_size=4, calls=8, run=os.path.join(folder, "run.sqlite")).run_path
    ...     report(run, os.path.join(folder, "page.html")).figures
    2
    """
    target = Path(output)
    check_name(target)
    many = [runs] if isinstance(runs, str | Path) else list(runs)
    chapters = chapters_of(many, Asked(cost, subsolver, against))
    page = page_of(chapters)
    content = page.encode("utf-8", "replace")
    _put(target, content)
    return Report(target, len(content), page.count("<figure"), sentence_of(chapters))


def page_of(chapters: Sequence[Chapter]) -> str:
    """The whole page as text."""
    parts = [chapter_of(chapter, number + 1, chapters) for number, chapter in enumerate(chapters)]
    title = " and ".join(dict.fromkeys(title_of(chapter) for chapter in chapters[:3]))
    contents = [element("a", title_of(chapter), href=f"#c{number + 1}") for number, chapter in enumerate(chapters)]
    header = element(
        "header", element("h1", f"Report: {title}"), element("p", sentence_of(chapters), class_="lead"),
        *([element("nav", *contents, aria_label="chapters")] if len(contents) > 1 else []),
    )  # fmt: skip
    footer = element("footer", f"Written by patchwalk {version('patchwalk')}; run files hold everything shown here.")
    head = (
        f'{OPENING} {version("patchwalk")}"><meta http-equiv="Content-Security-Policy" content="{POLICY}">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f'{element("title", f"Report: {title}")}<link rel="icon" href="data:,"><style>{STYLE}</style></head>'
    )
    return f"{head}\n<body>{header}{element('main', joined(parts))}{footer}</body></html>\n"


def sentence_of(chapters: Sequence[Chapter]) -> str:
    """The page in one sentence: that of the first chapter that has something to advise, else what was found."""
    for chapter in chapters:
        if isinstance(chapter, RunsChapter | ComparedChapter) and chapter.worth.profile is not None:
            return chapter.worth.profile.sentence
    first = chapters[0]
    if isinstance(first, RunsChapter):
        word = first.problem.objective_name.replace("_", " ")
        return f"Best {word} {first.answer.objective:,.10g}; what calls were worth is not known without a replay."
    if isinstance(first, ScalingChapter):
        return sentence(f"success against size: {first.scaled.what}")
    sentences = first.compared.comparison.sentences
    return sentence("; ".join(sentences[:3])) if sentences else "No two contenders share instance and seed."


def check_name(target: Path) -> None:
    """Refuse a name that is no page, or a file there that is no earlier report; raises :class:`SettingsError`."""
    if target.suffix.lower() not in (".html", ".htm"):
        raise SettingsError([f"output is {target}; give a name that ends in .html"])
    if not target.exists():
        return
    try:
        with target.open("rb") as file:
            start = file.read(len(OPENING))
    except OSError as error:
        raise SettingsError([f"{target}: {error.strerror or error}; give another name"]) from error
    if start != OPENING.encode():
        raise SettingsError(
            [f"{target} is there and is no report of Patchwalk; it is left as it is: give another name"]
        )


def _put(target: Path, content: bytes) -> None:
    """The whole page in one step, or nothing."""
    unfinished = target.with_name(f".{target.name}.{os.getpid()}.unfinished")
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        unfinished.write_bytes(content)
        os.replace(unfinished, target)
    except OSError as error:
        raise RunFileError(f"cannot write {target}: {error.strerror or error}; give a writable place") from error
    finally:
        with contextlib.suppress(OSError):
            unfinished.unlink(missing_ok=True)
