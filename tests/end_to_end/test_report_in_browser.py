"""The report in a browser: Debian's chromium, headless, driven by selenium; skipped, with the reason, without them.

Looked at are what no reading of the file shows: whether anything is asked of a network or complained of, whether marks
have a place and an extent, and whether something is cut off on a phone, on a wide screen, in the dark or on paper.
"""

from __future__ import annotations

import json
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from patchwalk import compare, make, replay, report, scale, solve, write_problem

webdriver = pytest.importorskip("selenium.webdriver", reason="selenium is not installed")
from selenium.webdriver.chrome.service import Service  # noqa: E402 - only where there is selenium

NAMES = {"browser": ("chromium", "chromium-browser"), "driver": ("chromedriver",)}
SWITCHES = (
    "--headless=new", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-dev-shm-usage",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--hide-scrollbars",
)  # fmt: skip
PATIENCE = 120
"""Seconds that a page may take to load on a busy machine."""

NASTY = '<img src=x onerror="boom()">&$x_1$'
VIEWS = [(width, scheme) for width in (400, 1400) for scheme in ("light", "dark")]

CUT_OFF = """
const out = [], wide = document.documentElement.clientWidth;
for (const element of document.querySelectorAll('body *')) {
  if (element.closest('svg') && element.tagName !== 'svg') continue;
  if (element.closest('.wide') && !element.classList.contains('wide')) continue;
  const box = element.getBoundingClientRect();
  if (box.width && (box.right > wide + 1 || box.left < -1)) out.push(element.tagName + ' ' + element.textContent);
}
for (const svg of document.querySelectorAll('figure svg')) {
  const frame = svg.getBoundingClientRect();
  for (const text of svg.querySelectorAll('text')) {
    const box = text.getBoundingClientRect(), inside = [box.left - frame.left, frame.right - box.right,
      box.top - frame.top, frame.bottom - box.bottom];
    if (Math.min(...inside) < -1)
      out.push('text of ' + svg.parentNode.id + ': ' + text.textContent);
  }
}
return out;
"""

MARKS = """
return Object.fromEntries([...document.querySelectorAll('figure')].map(figure => [figure.id,
  [...figure.querySelectorAll('[id*="-marks-"]')].flatMap(group => [...group.querySelectorAll('path, use, rect')])
    .filter(mark => { const box = mark.getBoundingClientRect(); return box.width + box.height > 1; }).length]));
"""

SMALLEST_TEXT = """
return Math.min(...[...document.querySelectorAll('figure svg text')].map(text =>
  parseFloat(getComputedStyle(text).fontSize) * text.ownerSVGElement.getBoundingClientRect().width
  / text.ownerSVGElement.viewBox.baseVal.width));
"""


def program(kind: str) -> str:
    """Where Debian puts it; skips with the reason where it is not there."""
    found = next((path for name in NAMES[kind] if (path := shutil.which(name)) is not None), None)
    if found is None:
        pytest.skip(f"no {' or '.join(NAMES[kind])} on this machine: apt-get install chromium chromium-driver")
    return found


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Any]:
    """A browser with a profile of its own that writes down what it asks for and complains of."""
    options = webdriver.ChromeOptions()
    options.binary_location = program("browser")
    for switch in (*SWITCHES, f"--user-data-dir={tmp_path_factory.mktemp('browser')}"):
        options.add_argument(switch)
    options.set_capability("goog:loggingPrefs", {"performance": "ALL", "browser": "ALL"})
    driver = webdriver.Chrome(options=options, service=Service(program("driver")))
    try:
        driver.set_page_load_timeout(PATIENCE)
        driver.set_script_timeout(PATIENCE)
        yield driver
    finally:
        driver.quit()


@pytest.fixture(scope="module")
def pages(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """Replayed runs of a cut with a name made of markup; runs without a replay; a comparison with scaling."""
    program("browser")
    folder = tmp_path_factory.mktemp("pages <u>")
    names = [f"s{place}-{NASTY if place == 3 else 'name'}" for place in range(24)]
    rows = [[names[i], names[(i + step) % 24], 1 + (i * step) % 3] for i in range(24) for step in (1, 5)]
    quoted = ["{},{},{}".format(*(f'"{str(cell).replace(chr(34), chr(34) * 2)}"' for cell in row)) for row in rows]
    (folder / "cut <u>.csv").write_text("\n".join(quoted) + "\n")
    settings = {"kind": "maxcut", "subsolver": "walk", "cluster_size": 6, "calls": 80, "seeds": "1..3", "record": "all"}
    replayed = solve(folder / "cut <u>.csv", bound=2, run=folder / "replayed.sqlite", **settings).run_path
    replay(replayed, rivals=["uniform", "enumeration", "metropolis", "none", "walk,shots=3"], calls=40)
    bare = solve(make("lattice2d", 5, seed=3), cluster_size=5, calls=40, run=folder / "bare.sqlite").run_path
    glasses = [folder / "one <u>.txt", folder / "two.txt"]
    for seed, path in enumerate(glasses):
        write_problem(make("lattice2d", 5, seed=seed), path)
    compare(glasses, ["walk", "uniform", "none"], calls=40, cluster_size=4, seeds=[1, 2], run=folder / "c.sqlite")
    scale("sk", [4, 5, 6], instances=6, fields=True, run=folder / "s.sqlite")
    runs = {"replayed": [replayed], "bare": [bare], "whole": [folder / "c.sqlite", folder / "s.sqlite"]}
    return {name: report(own, folder / f"{name}.html").path for name, own in runs.items()}


def opened(browser: Any, page: Path, width: int, scheme: str, media: str = "screen") -> None:
    """The page at this width in this colour scheme; logs begin anew."""
    for kind in ("performance", "browser"):
        browser.get_log(kind)
    screen = {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": False}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", screen)
    features = [{"name": "prefers-color-scheme", "value": scheme}]
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": media, "features": features})
    browser.get(page.as_uri())


@pytest.mark.parametrize("name", ["replayed", "bare", "whole"])
@pytest.mark.parametrize(("width", "scheme"), VIEWS)
def test_nothing_is_cut_off_or_too_small(
    browser: Any, pages: dict[str, Path], name: str, width: int, scheme: str
) -> None:
    opened(browser, pages[name], width, scheme)
    assert browser.execute_script("return innerWidth") == width
    assert browser.execute_script("return document.documentElement.scrollWidth") <= width
    assert browser.execute_script(CUT_OFF) == []
    assert browser.execute_script(SMALLEST_TEXT) >= 9.0


@pytest.mark.parametrize("name", ["replayed", "bare", "whole"])
def test_every_figure_has_its_marks(browser: Any, pages: dict[str, Path], name: str) -> None:
    opened(browser, pages[name], 1400, "light")
    marks = browser.execute_script(MARKS)
    assert len(marks) == {"replayed": 7, "bare": 2, "whole": 5}[name]
    assert all(marks.values()), marks


def requests_of(browser: Any) -> list[str]:
    """Every address that was asked for since the logs began anew."""
    events = [json.loads(entry["message"])["message"] for entry in browser.get_log("performance")]
    return [one["params"]["request"]["url"] for one in events if one["method"] == "Network.requestWillBeSent"]


def test_no_request_and_no_complaint(browser: Any, pages: dict[str, Path]) -> None:
    """All that is asked for is the page itself and data inside it."""
    for page in pages.values():
        opened(browser, page, 400, "light")
        asked = requests_of(browser)
        assert page.as_uri() in asked
        assert [url for url in asked if url != page.as_uri() and not url.startswith("data:")] == []
        assert browser.get_log("browser") == []


def test_a_request_would_be_seen(browser: Any, tmp_path: Path) -> None:
    """The same looking finds a page that asks for something, and one that complains."""
    page = tmp_path / "asking.html"
    page.write_text('<img src="nowhere.png"><script>console.error("here")</script>')
    opened(browser, page, 400, "light")
    asked = requests_of(browser)
    assert [url for url in asked if url.endswith("nowhere.png")]
    assert browser.get_log("browser") != []


def test_names_of_markup_stay_text(browser: Any, pages: dict[str, Path]) -> None:
    opened(browser, pages["replayed"], 400, "light")
    assert browser.execute_script("return document.querySelectorAll('img, script, u, iframe').length") == 0
    assert NASTY in browser.execute_script("return document.body.textContent")
    assert "cut <u>.csv" in browser.execute_script("return document.querySelector('h1').textContent")


@pytest.mark.parametrize(("media", "scheme", "dark"), [("screen", "light", False), ("screen", "dark", True),
                                                       ("print", "dark", False)])  # fmt: skip
def test_the_scheme_is_followed_and_paper_stays_light(
    browser: Any, pages: dict[str, Path], media: str, scheme: str, dark: bool
) -> None:
    """Page and pictures alike: text in a figure has the colour of text on the page."""
    opened(browser, pages["replayed"], 1400, scheme, media)
    paper, ink, drawn = browser.execute_script(
        "const tone = (e, key) => getComputedStyle(e)[key]; return [tone(document.body, 'backgroundColor'), "
        "tone(document.body, 'color'), tone(document.querySelector('figure svg text'), 'fill')];"
    )
    assert (lightness(paper) < 128) == dark
    assert (lightness(ink) > 128) == dark
    assert drawn == ink


def lightness(tone: str) -> float:
    """The mean of red, green and blue of rgb(...)."""
    parts = [float(part) for part in tone[tone.index("(") + 1 : tone.index(")")].split(",")[:3]]
    return sum(parts) / 3.0


def test_nothing_is_cut_off_on_paper(browser: Any, pages: dict[str, Path]) -> None:
    """At the width of an A4 page between margins of 2 cm, in pixels of 1/96 inch; no frame scrolls on paper."""
    scrolling = "return [...document.querySelectorAll('.wide')].filter(e => e.scrollWidth > e.clientWidth + 1).length"
    for page in pages.values():
        opened(browser, page, 642, "light", "print")
        assert browser.execute_script("return document.documentElement.scrollWidth") <= 642
        assert browser.execute_script(scrolling) == 0
        assert browser.execute_script(CUT_OFF) == []
