"""Pictures: drawn by matplotlib as SVG, then made at home on the page.

Text stays text. Stand-in colours become variables of the style sheet, every id gets the picture's own name in front,
and nothing that depends on the hour or points elsewhere is left in, so that the same data gives the same bytes.
"""

from __future__ import annotations

import contextlib
import io
import math
import re
import textwrap
import unicodedata
import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import matplotlib as mpl

from patchwalk.interface.page.appearance import COLOURS, MARKS
from patchwalk.interface.page.markup import Markup, Table, download, element, escaped, shown

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

WIDTH = 400.0
"""Width of every picture in its own units; a phone shows it at about this many pixels, with text of 11 to 12."""

LABEL_LETTERS = 50

RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")

LOOK: dict[Any, Any] = {
    "svg.fonttype": "none", "text.parse_math": False, "font.family": ["DejaVu Sans"], "font.size": 11.5,
    "axes.titlesize": 11.5, "axes.titlelocation": "left", "axes.labelsize": 11.5, "axes.formatter.useoffset": False,
    "xtick.labelsize": 11, "ytick.labelsize": 11, "legend.fontsize": 11, "legend.frameon": False,
    "axes.spines.top": False, "axes.spines.right": False, "axes.facecolor": "none", "figure.facecolor": "none",
    "text.color": COLOURS["ink"].drawn, "axes.labelcolor": COLOURS["ink"].drawn,
    "axes.titlecolor": COLOURS["ink"].drawn, "axes.edgecolor": COLOURS["soft"].drawn,
    "xtick.color": COLOURS["soft"].drawn, "ytick.color": COLOURS["soft"].drawn,
    "xtick.labelcolor": COLOURS["ink"].drawn, "ytick.labelcolor": COLOURS["ink"].drawn,
    "axes.grid": True, "axes.axisbelow": True, "grid.color": COLOURS["line"].drawn, "grid.linewidth": 0.7,
    "lines.linewidth": 1.7, "lines.markersize": 5.5, "path.simplify": True, "savefig.facecolor": "none",
}  # fmt: skip


@dataclass(frozen=True)
class Picture:
    """A figure of the page: its ``name`` is unique on it, ``alternative`` says in words what is to be seen."""

    name: str
    title: str
    caption: str
    alternative: str
    svg: str
    data: Table

    def as_html(self) -> Markup:
        """The picture, what it shows, and its data."""
        opening = f'<svg role="img" aria-label="{escaped(self.alternative)}"'
        picture = Markup(self.svg.replace("<svg", opening, 1))
        told = element("figcaption", element("strong", self.title), self.caption, " ", download(self.data, self.name))
        return element("figure", picture, told, id=self.name)


def colour(name: str) -> str:
    """The stand-in that the style sheet gives its colour."""
    return COLOURS[name].drawn


@contextlib.contextmanager
def canvas(height: float, name: str) -> Iterator[Figure]:
    """An empty figure of the page's width to draw on; nothing of matplotlib's own settings outlives the block."""
    from matplotlib.figure import Figure

    with mpl.rc_context({**LOOK, "svg.hashsalt": name}), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message=".*Glyph.*", category=UserWarning)  # the reader's fonts have it
        yield Figure(figsize=(WIDTH / 72.0, height / 72.0), layout="constrained")


def finished(figure: Figure, name: str) -> str:
    """The figure as an SVG element; to be called inside :func:`canvas`."""
    text = io.StringIO()
    figure.savefig(text, format="svg", metadata={"Date": None})
    svg = text.getvalue()
    svg = svg[svg.index("<svg") :].strip()
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<style type=\"text/css\">.*?</style>", "", svg, flags=re.DOTALL)
    svg = re.sub(r'<svg[^>]*?viewBox="([^"]*)"[^>]*>', r'<svg viewBox="\1">', svg, count=1)
    svg = re.sub(r"\bid=\"", f'id="{name}-', svg)
    svg = re.sub(r"href=\"#", f'href="#{name}-', svg)
    svg = re.sub(r"url\(#", f"url(#{name}-", svg)
    svg = re.sub(r"font: (?:\w+ )?([\d.]+)px [^;\"]*", r"font-size: \1px", svg)
    for word, own in COLOURS.items():
        svg = svg.replace(own.drawn, f"var(--{word})")
    return re.sub(r">\s+<", "><", svg)


def marked(artists: Any, what: str) -> None:
    """Give what stands for data an id by which it is told from axes and text."""
    for place, artist in enumerate(artists if isinstance(artists, list | tuple) else [artists]):
        artist.set_gid(f"marks-{what}-{place}")


def label(text: Any, letters: int = LABEL_LETTERS) -> str:
    """A user's words inside a picture, cut in their middle where they are too long for it.

    >>> label("walk,time_in_hops=[0.65,1.05]", 15)
    'walk,ti…,1.05]'
    """
    words = " ".join(shown(text).split())
    if sum(map(_breadth, words)) <= letters:
        return words
    head, tail, room = "", "", letters - 1.0
    for first, last in zip(words, reversed(words), strict=True):
        room -= _breadth(first)
        if room < 0.0:
            break
        head += first
        room -= _breadth(last)
        if room < 0.0:
            break
        tail = last + tail
    return f"{head}…{tail}"


def _breadth(letter: str) -> float:
    """About how wide a letter is, in small ones."""
    wide = 1.8 if unicodedata.east_asian_width(letter) in "WF" else 1.0
    return 1.4 if letter.isupper() or letter in "mw@%" else wide


def wrapped(text: str, letters: int = 56) -> str:
    """Text for a title inside a picture, in lines."""
    return "\n".join(textwrap.wrap(text, letters))


def spread_scale(axes: Axes, values: Sequence[float], across: bool = False) -> bool:
    """Make the upright axis, or that ``across``, linear near zero and logarithmic beyond where values differ in size a
    hundredfold."""
    limit = _linear_limit(values)
    if limit is None:
        return False
    (axes.set_xscale if across else axes.set_yscale)("symlog", linthresh=limit)
    plain_log(axes.xaxis if across else axes.yaxis)
    ends = axes.get_xlim() if across else axes.get_ylim()
    (axes.set_xlim if across else axes.set_ylim)(*_room(ends, values, limit))
    return True


def _linear_limit(values: Sequence[float]) -> float | None:
    sizes = sorted(abs(value) for value in values if value == value and abs(value) not in (0.0, float("inf")))
    if len(sizes) < 3:
        return None
    middle = sizes[len(sizes) // 2]
    return 10.0 ** round(math.log10(middle)) if sizes[-1] > 30.0 * middle else None


def _room(ends: tuple[float, float], values: Sequence[float], limit: float) -> tuple[float, float]:
    """The ends of an axis with some room beyond the values, in the sense of its scale."""
    known = [value for value in values if math.isfinite(value)]
    return 1.6 * min(-limit, ends[0], *known), 1.6 * max(limit, ends[1], *known)


def plain_log(axis: Any) -> None:
    """Numbers as text along a logarithmic axis."""
    from matplotlib.ticker import FuncFormatter, NullFormatter

    axis.set_major_formatter(FuncFormatter(lambda value, _: number(value)))
    axis.set_minor_formatter(NullFormatter())


def number(value: float) -> str:
    """A number at an axis, powers of ten where zeros would have to be counted.

    >>> number(-0.25), number(1000.0), number(1e-7)
    ('−0.25', '1000', '10⁻⁷')
    """
    power = math.log10(abs(value)) if value else 0.0
    if -4.0 < power < 5.0:
        return f"{value:g}".replace("-", "\N{MINUS SIGN}")
    whole = math.floor(power + 1e-9)
    factor = value / 10.0**whole
    lead = "" if math.isclose(factor, 1.0) else "\N{MINUS SIGN}" if math.isclose(factor, -1.0) else f"{factor:.3g}·"
    return f"{lead}10{str(whole).translate(RAISED)}"


@dataclass(frozen=True)
class Row:
    """One line of a picture of intervals: a name, a value with its ends (nan where unknown), and perhaps a second."""

    name: str
    value: float
    low: float
    high: float
    second: float = float("nan")
    second_low: float = float("nan")
    second_high: float = float("nan")
    note: str = ""


def interval_rows(axes: Axes, rows: Sequence[Row], zero: float, favourable: int = 1) -> None:
    """A line for each row from the top: the name above, below it a mark with its interval.

    Filled marks lie with their whole interval on one side of ``zero``, upwards or downwards as they point; hollow ones
    do not, or have no interval. ``favourable`` is the side that is good, 1 or -1, or 0 where neither is.
    """
    from matplotlib.transforms import blended_transform_factory

    across = blended_transform_factory(axes.transAxes, axes.transData)
    for place, row in enumerate(rows):
        height = -float(place)
        behind = {"facecolor": colour("paper"), "edgecolor": "none", "pad": 1.0}
        where: dict[str, Any] = {"transform": across, "va": "center", "ha": "left", "bbox": behind}
        name = f"{label(row.name, LABEL_LETTERS - len(row.note))} {row.note}".strip()
        axes.text(0.0, height + 0.28, name, **where)
        _one_interval(axes, f"row-{place}", (row.value, row.low, row.high), height - 0.08, zero, favourable)
        if row.second == row.second:
            ends = (row.second, row.second_low, row.second_high)
            _one_interval(axes, f"second-{place}", ends, height - 0.34, zero, favourable, second=True)
    axes.axvline(zero, color=colour("ink"), linewidth=1.0)
    axes.set_ylim(-len(rows) + 0.4, 0.6)
    axes.set_yticks([])
    axes.grid(visible=False, axis="y")
    axes.spines["left"].set_visible(False)


def _one_interval(
    axes: Axes, name: str, ends: tuple[float, float, float], height: float, zero: float, favourable: int,
    second: bool = False,
) -> None:  # fmt: skip
    value, low, high = ends
    if value != value or abs(value) == float("inf"):
        return
    known = low == low and high == high
    side = 0 if not known or low <= zero <= high else 1 if low > zero else -1
    good = side * favourable
    tone = colour("series-4" if second else "soft" if not side else "series-2" if good < 0 else "series-1")
    if known:
        bar = axes.plot([low, high], [height, height], color=tone, linewidth=2.2, linestyle=":" if second else "-")
        marked(bar, f"{name}-interval")
    sign = MARKS[3] if second else {1: ">", -1: "<", 0: "o"}[side]
    filled = tone if side and not second else "none"
    point = axes.plot([value], [height], sign, color=tone, markerfacecolor=filled, markersize=8.0)
    marked(point, name)
