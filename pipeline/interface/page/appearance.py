"""How the page looks: colours for light and dark, and the one style sheet.

Pictures are drawn in stand-in colours, which become variables of the style sheet, so that a picture follows the scheme
of its reader. No meaning rests on colour alone: lines differ in their dashes and marks, cells hold their numbers.
"""

from __future__ import annotations

from typing import NamedTuple


class Colour(NamedTuple):
    """What it is drawn as, and what it is on a light and on a dark page."""

    drawn: str
    light: str
    dark: str


COLOURS = {
    "paper": Colour("#fefe01", "#fdfcf9", "#16181b"),
    "ink": Colour("#010201", "#1d1f22", "#e9e7e1"),
    "soft": Colour("#010202", "#55595f", "#a9aeb5"),
    "line": Colour("#010203", "#d5d2ca", "#3a3f46"),
    "series-1": Colour("#010301", "#155a94", "#82b9ea"),
    "series-2": Colour("#010302", "#a3401a", "#f0a17c"),
    "series-3": Colour("#010303", "#1f6d49", "#7fcda4"),
    "series-4": Colour("#010304", "#74398f", "#cfa4e6"),
    "series-5": Colour("#010305", "#755b00", "#dcc25e"),
    "series-6": Colour("#010306", "#006870", "#6bcad2"),
    "gain-1": Colour("#010401", "#e3edf6", "#1c2c3b"),
    "gain-2": Colour("#010402", "#bdd7ee", "#1d3f60"),
    "gain-3": Colour("#010403", "#8fbce2", "#1f5486"),
    "loss-1": Colour("#010501", "#f8e9df", "#37291f"),
    "loss-2": Colour("#010502", "#f2cdb4", "#553523"),
    "loss-3": Colour("#010503", "#e8ab84", "#7a4623"),
}

SERIES = tuple(name for name in COLOURS if name.startswith("series"))
MARKS = ("o", "s", "^", "D", "v", "P")
DASHES: tuple[str | tuple[int, tuple[float, ...]], ...] = (
    "-", (0, (5, 2)), (0, (1.5, 1.5)), (0, (6, 2, 1.5, 2)), (0, (9, 3)), (0, (3, 1, 1, 1, 1, 1)),
)  # fmt: skip


def _variables(scheme: str) -> str:
    return "".join(f"--{name}:{getattr(colour, scheme)};" for name, colour in COLOURS.items())


STYLE = f"""
:root{{color-scheme:light dark;{_variables("light")}}}
@media (prefers-color-scheme:dark){{:root{{{_variables("dark")}}}}}
@media print{{:root{{color-scheme:light;{_variables("light")}}}}}
*{{box-sizing:border-box}}
html{{-webkit-text-size-adjust:100%;text-size-adjust:100%}}
body{{margin:0;background:var(--paper);color:var(--ink);font:16px/1.55 Georgia,"Liberation Serif","DejaVu Serif",serif;
overflow-wrap:anywhere}}
main,header,footer{{max-width:74rem;margin:0 auto;padding:0 1rem}}
header{{padding-top:1.6rem}}
h1,h2,h3,h4,th,.caption,figcaption strong,.data,nav{{
font-family:system-ui,"Liberation Sans","DejaVu Sans",sans-serif}}
h1{{font-size:1.7rem;line-height:1.2;margin:0 0 .4rem}}
h2{{font-size:1.35rem;line-height:1.25;margin:2.6rem 0 .6rem;padding-top:.7rem;border-top:2px solid var(--ink)}}
h3{{font-size:1.1rem;margin:1.9rem 0 .4rem}}
h4{{font-size:1rem;margin:1.2rem 0 .2rem}}
p,ul,dl,pre{{margin:.5rem 0 .8rem;max-width:46rem}}
li{{margin:.15rem 0}}
a{{color:var(--series-1)}}
a:focus-visible,.wide:focus-visible{{outline:2px solid var(--series-1);outline-offset:2px}}
nav a{{margin-right:1rem}}
.lead{{font-size:1.15rem}}
.soft{{color:var(--soft)}}
.caution{{border-left:4px solid var(--series-2);padding:.1rem 0 .1rem .8rem}}
.facts{{display:grid;grid-template-columns:repeat(auto-fit,minmax(9rem,1fr));gap:.6rem 1.2rem;max-width:none;
margin:1rem 0}}
.facts div{{border-top:1px solid var(--line);padding-top:.3rem}}
.facts dt{{color:var(--soft);font-size:.85rem}}
.facts dd{{margin:0;font-size:1.15rem}}
pre{{white-space:pre-wrap;font:13px/1.5 ui-monospace,"Liberation Mono","DejaVu Sans Mono",monospace}}
code{{font:.88em ui-monospace,"Liberation Mono","DejaVu Sans Mono",monospace}}
.pairs{{columns:17rem;column-gap:2.4rem;max-width:none;font-size:.92rem}}
.pairs div{{display:flex;justify-content:space-between;gap:1rem;
border-bottom:1px solid var(--line);break-inside:avoid;padding:.15rem 0}}
.pairs dt{{color:var(--soft);white-space:nowrap}}
.pairs dd{{margin:0;text-align:right;min-width:0}}
.pictures{{columns:25rem 2;column-gap:2.4rem;margin:.6rem 0 1rem}}
figure{{margin:0 0 1.8rem;max-width:36rem;break-inside:avoid}}
figure svg{{display:block;width:100%;height:auto;font-family:system-ui,"Liberation Sans","DejaVu Sans",sans-serif;
stroke-linejoin:round;stroke-linecap:butt}}
figcaption{{font-size:.92rem;line-height:1.45;margin-top:.4rem}}
figcaption strong{{display:block}}
.data{{font-size:.85rem;white-space:nowrap}}
.wide{{overflow-x:auto;margin:.6rem 0 1rem}}
table{{border-collapse:collapse;font-size:.9rem;line-height:1.4;min-width:min(100%,18rem)}}
.caption{{font-size:.9rem;font-weight:600;margin:1.2rem 0 0}}
th,td{{text-align:left;vertical-align:top;padding:.28rem .9rem .28rem 0;border-bottom:1px solid var(--line);
overflow-wrap:normal}}
td{{max-width:24rem}}
td:first-child{{overflow-wrap:anywhere;min-width:7rem}}
th{{font-weight:600;color:var(--soft);font-size:.82rem}}
.number{{text-align:right;font-variant-numeric:tabular-nums;white-space:nowrap}}
.closing p{{margin:.2rem 0}}
footer{{color:var(--soft);font-size:.85rem;padding-bottom:2rem}}
@media print{{
html{{font-size:13px}} body{{font-size:1rem}} nav,.data{{display:none}}
main,header,footer{{padding:0;max-width:none}}
.wide{{overflow:visible}} table{{font-size:8.5pt}} .number{{white-space:normal}}
td,th{{padding-right:.5rem}} td{{overflow-wrap:anywhere}}
figure,tr,.facts div{{break-inside:avoid}} h2,h3,h4{{break-after:avoid}}
.pictures{{columns:2;column-gap:1.6rem}} figure{{max-width:none}} .pairs{{columns:2}}
}}
"""
