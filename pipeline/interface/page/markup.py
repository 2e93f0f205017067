"""HTML put together so that nothing from a user's file can ever become markup.

Whatever is not :class:`Markup` is text and goes through :func:`escaped` on its way into an element.
"""

from __future__ import annotations

import csv
import html
import io
import re
import urllib.parse
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

CONTROLS = re.compile(r"[\x00-\x08\x0b-\x1f\x7f-\x9f\ud800-\udfff\ufffe\uffff]")
DIRECTIONS = re.compile(r"[\u202a-\u202e\u2066-\u2069]")
"""Signs that turn the direction of writing round, and with it the text that follows."""

FORMULA = ("=", "+", "-", "@", "\t", "\r")
"""A cell of text that begins with one of these would be taken for a formula by spreadsheets."""

BARE = {"meta", "br"}


class Markup(str):
    """HTML that is ready to stand on the page."""

    __slots__ = ()


def shown(value: Any) -> str:
    """A value as text of one sort: signs that control a terminal, or turn writing round, become a visible mark."""
    return DIRECTIONS.sub("\ufffd", CONTROLS.sub("\ufffd", str(value)))


def escaped(value: Any) -> Markup:
    """The one way in which text comes onto the page.

    >>> escaped('<b title="x">')
    '&lt;b title=&quot;x&quot;&gt;'
    """
    return value if isinstance(value, Markup) else Markup(html.escape(shown(value), quote=True))


def element(name: str, *children: Any, **attributes: Any) -> Markup:
    """An element; children that are not markup are escaped, attributes always. ``class_`` is the attribute class.

    >>> element("p", "1 < 2", class_="note")
    '<p class="note">1 &lt; 2</p>'
    """
    written = "".join(
        f' {key.rstrip("_").replace("_", "-")}="{html.escape(shown(value), quote=True)}"'
        for key, value in attributes.items()
        if value is not None
    )
    if name in BARE:
        return Markup(f"<{name}{written}>")
    return Markup(f"<{name}{written}>{joined(children)}</{name}>")


def joined(parts: Iterable[Any]) -> Markup:
    """Parts one after the other."""
    return Markup("".join(escaped(part) for part in parts))


def sentence(text: str) -> str:
    """Text that begins with a capital and ends with a full stop.

    >>> sentence("walk ended lower")
    'Walk ended lower.'
    """
    told = text[:1].upper() + text[1:]
    return told if told.endswith((".", "!", "?")) else f"{told}."


def listed(items: Iterable[Any], **attributes: Any) -> Markup:
    """A list of points, empty where there are none."""
    points = [element("li", item) for item in items]
    return element("ul", *points, **attributes) if points else Markup("")


@dataclass(frozen=True)
class Table:
    """Rows under a header, for the page or for a CSV; numbers stay numbers."""

    header: Sequence[str]
    rows: Sequence[Sequence[Any]]

    def as_html(self, caption: str = "") -> Markup:
        """A table whose wide ones scroll inside their own frame."""
        head = element("tr", *(element("th", name, scope="col") for name in self.header))
        lines = [
            element("tr", *(element("td", _cell(one), class_="number" if _is_number(one) else None) for one in row))
            for row in self.rows
        ]
        inside = element("table", element("thead", head), element("tbody", *lines), aria_label=caption or None)
        frame = element("div", inside, class_="wide", role="region", aria_label=caption or "table", tabindex="0")
        return joined([element("p", caption, class_="caption"), frame]) if caption else frame

    def as_csv(self) -> str:
        """The same as text with commas."""
        text = io.StringIO()
        writer = csv.writer(text, lineterminator="\n")
        writer.writerow([_harmless(name) for name in self.header])
        writer.writerows([_harmless(one) for one in row] for row in self.rows)
        return text.getvalue()


def download(table: Table, name: str, label: str = "data as CSV") -> Markup:
    """A link that holds the table itself."""
    packed = urllib.parse.quote(table.as_csv(), safe=",.:;()-_~+/[]")
    return element("a", label, href=f"data:text/csv;charset=utf-8,{packed}", download=f"{name}.csv", class_="data")


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _cell(value: Any) -> Any:
    if isinstance(value, Markup):
        return value
    if value is None or (isinstance(value, float) and value != value):
        return "–"  # noqa: RUF001 - a dash, for what is not known
    if isinstance(value, float):
        return f"{value:,.6g}"
    return f"{value:,}" if _is_number(value) else value


def _harmless(value: Any) -> Any:
    """A cell for a spreadsheet: text that looks like a formula is quoted, what is unknown stays empty."""
    if value is None or (isinstance(value, float) and value != value):
        return ""
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, int):
        return value
    text = shown(value)
    return f"'{text}" if text.startswith(FORMULA) else text
