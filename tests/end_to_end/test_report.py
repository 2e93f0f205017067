"""``patchwalk report``: what the page says, that it is the same every time, and what it refuses to overwrite."""

from __future__ import annotations

import contextlib
import csv
import dataclasses
import io
import json
import re
import shutil
import sqlite3
import urllib.parse
from html.parser import HTMLParser
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from patchwalk import bound, compare, make, profile, replay, report, resume, sample, scale, solve, write_problem
from patchwalk.interface.cli import program
from patchwalk.interface.page.appearance import COLOURS
from patchwalk.interface.page.markup import Table, download, element, escaped
from patchwalk.interface.page.words import helps_line

NASTY = '<img src=x onerror="boom()">&$x_1$'
NAMED = f'"{NASTY.replace(chr(34), chr(34) * 2)}"'


def patchwalk(*words: object) -> Result:
    return CliRunner().invoke(program, [str(word) for word in words])


class Page(HTMLParser):
    """The elements, their attributes and all text of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_data(self, data: str) -> None:
        self.text += data

    def tables(self) -> dict[str, list[list[str]]]:
        """Every table that can be downloaded, by the name of its file."""
        links = [own for tag, own in self.tags if tag == "a" and "download" in own]
        found = {}
        for link in links:
            head, _, data = str(link["href"]).partition(",")
            assert head == "data:text/csv;charset=utf-8"
            found[str(link["download"])] = list(csv.reader(io.StringIO(urllib.parse.unquote(data))))
        return found


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Three replayed runs of a small cut whose names hold markup, in a folder of their own."""
    folder = tmp_path_factory.mktemp("report <b>")
    glass = make("lattice2d", 5, seed=4)
    rows = [f"{name(i)},{name(j)},{weight:g}" for i, j, weight in pairs_of(glass)]
    (folder / "glass <i>.csv").write_text("\n".join(rows) + "\n")
    path = solve(
        folder / "glass <i>.csv", kind="ising", subsolver="walk", cluster_size=6, calls=60, seeds="1..3",
        record="all", run=folder / "run.sqlite",
    ).run_path  # fmt: skip
    replay(path, rivals=["uniform", "enumeration", "none"], calls=30)
    return path


def name(spin: int) -> str:
    return NAMED if spin == 0 else f"s{spin}"


def pairs_of(glass: object) -> list[tuple[int, int, float]]:
    from patchwalk import Problem

    assert isinstance(glass, Problem)
    matrix = glass.matrix.tocoo()
    return [(int(i), int(j), float(w)) for i, j, w in zip(*matrix.coords, matrix.data, strict=True) if i < j]


@pytest.fixture(scope="module")
def page(run: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return report(run, tmp_path_factory.mktemp("page") / "page.html").path


def test_everything_asked_for_is_on_the_page(page: Path, run: Path) -> None:
    read = Page(page.read_text())
    for heading in ("The answer", "The search", "What the calls were worth", "Scaling fit", "Runs", "Cautions",
                    "Settings, seeds and versions", "In four lines"):  # fmt: skip
        assert heading in read.text
    figures = [own["id"] for tag, own in read.tags if tag == "figure"]
    assert figures == [
        "c1-progress", "c1-fates", "c1-stage", "c1-map", "c1-features", "c1-rivals", "c1-breakeven",
    ]  # fmt: skip
    assert str(profile(run).sentence) in read.text
    closing = read.text[read.text.index("In four lines") :]
    assert [closing.index(word) for word in ("Helps:", "Where:", "Break-even:", "Untested:")] == sorted(
        closing.index(word) for word in ("Helps:", "Where:", "Break-even:", "Untested:")
    )
    assert "Enumeration wins per call, as exact answers to small clusters must: look at the cost." in read.text
    assert "rivals not replayed: elimination, metropolis, tabu, descent" in closing
    assert "90 of 180 calls of walk were not replayed" in closing
    assert "its drop is signed" in read.text
    assert "no licence" not in read.text  # the caution of the demo belongs to the demo


def test_losing_to_everybody_is_a_sentence_too(run: Path) -> None:
    found = profile(run)
    lost = dataclasses.replace(found, helps={"enumeration": found.helps["enumeration"]})
    assert lost.helps["enumeration"].per_call.below_zero
    assert "a call of walk, in energy units, is worth less than enumeration (" in helps_line(lost)


def test_every_figure_has_its_data(page: Path, run: Path) -> None:
    """And they are the numbers of the profile."""
    read, found = Page(page.read_text()), profile(run)
    tables = read.tables()
    figures = [str(own["id"]) for tag, own in read.tags if tag == "figure"]
    assert {f"{figure}.csv" for figure in figures} <= set(tables)
    header, *rows = tables["c1-rivals.csv"]
    by_rival = {row[0]: dict(zip(header, row, strict=True)) for row in rows}
    assert set(by_rival) == {"uniform", "enumeration", "none"}
    for rival, own in by_rival.items():
        assert float(own["help per call"]) == found.helps[rival].per_call.value
        assert float(own["low"]) == found.helps[rival].per_call.low
    assert sum(int(row[3]) for row in tables["c1-stage.csv"][1:] if row[0] == "uniform") == len(found.replayed)
    counted = [int(row[3]) for row in tables["c1-fates.csv"][1:]]
    assert sum(counted) == 3 * 60
    assert float(tables["c1-breakeven.csv"][1][1]) == found.break_evens["none"].factor.value
    spins = {row[1]: row[2] for row in tables["c1-answer.csv"][1:]}
    assert set(spins.values()) == {"1", "-1"}
    assert NASTY in spins
    ends = [float(row[7]) for row in tables["c1-progress.csv"][1:]]
    assert min(ends) == pytest.approx(resume(run).energy)


def test_names_stay_text(page: Path) -> None:
    text = page.read_text()
    read = Page(text)
    assert NASTY in read.text
    assert not [tag for tag, _ in read.tags if tag in ("img", "script", "b", "i", "iframe", "object")]
    assert not [key for _, own in read.tags for key in own if key.startswith("on")]
    assert "glass <i>.csv" in read.text


def test_nothing_points_elsewhere(page: Path) -> None:
    """No address but data and places on the page itself, and a policy that would stop any other."""
    read = Page(page.read_text())
    for tag, own in read.tags:
        for key in ("src", "href", "xlink:href", "action", "data"):
            if own.get(key) is not None:
                assert str(own[key]).startswith(("#", "data:")), (tag, own)
    policy = next(own["content"] for tag, own in read.tags if own.get("http-equiv") == "Content-Security-Policy")
    assert policy is not None
    assert policy.startswith("default-src 'none'")
    style = re.search("<style>(.*?)</style>", page.read_text(), re.DOTALL)
    assert style is not None
    assert "url(" not in style.group(1)
    assert "@import" not in style.group(1)


def test_ids_are_unique_and_what_refers_to_them_finds_them(page: Path) -> None:
    text = page.read_text()
    read = Page(text)
    ids = [str(own["id"]) for _, own in read.tags if "id" in own]
    assert len(ids) == len(set(ids))
    asked = set(re.findall(r"url\(#([^)]+)\)", text)) | {
        str(own[key])[1:] for _, own in read.tags for key in ("href", "xlink:href") if str(own.get(key)).startswith("#")
    }
    assert asked <= set(ids)
    assert any("clip" in one or one.split("-")[-1].startswith("p") for one in asked)


def test_the_same_runs_give_the_same_bytes(page: Path, run: Path, tmp_path: Path) -> None:
    assert report(run, tmp_path / "again.html").path.read_bytes() == page.read_bytes()


def test_without_a_replay_the_page_says_what_is_missing(tmp_path: Path) -> None:
    path = solve(make("lattice2d", 4, seed=1), cluster_size=4, calls=20, seed=3, run=tmp_path / "run.sqlite").run_path
    told = patchwalk("report", path, "-o", tmp_path / "page.html", "--json")
    assert told.exit_code == 0, told.output
    value = json.loads(told.stdout)
    assert set(value) == {"path", "bytes", "figures", "sentence"}
    assert value["bytes"] == (tmp_path / "page.html").stat().st_size
    assert value["figures"] == 2
    text = Page((tmp_path / "page.html").read_text()).text
    assert "are missing" in text
    assert f"patchwalk replay {path} --rival none --rival enumeration --rival metropolis" in text
    assert "its drop is signed" not in text


def test_one_run_claims_nothing(tmp_path: Path) -> None:
    path = solve(make("lattice2d", 5, seed=1), subsolver="walk", cluster_size=5, calls=30, record="all",
                 run=tmp_path / "run.sqlite").run_path  # fmt: skip
    replay(path, rivals=["uniform", "none"])
    text = Page(report(path, tmp_path / "page.html").path.read_text()).text
    assert "cannot tell from one run" in text
    assert "one run, so no interval" in text


def test_a_bound_stands_beside_the_runs_of_its_problem(tmp_path: Path) -> None:
    """Two files on one problem are one chapter, and a met bound is said to prove the other's answer."""
    write_problem(make("lattice2d", 4, seed=1), tmp_path / "glass.txt")
    solved = solve(tmp_path / "glass.txt", cluster_size=6, calls=300, run=tmp_path / "run.sqlite")
    proof = bound(tmp_path / "glass.txt", seconds=20, run=tmp_path / "bound.sqlite")
    assert proof.status == "proved_optimal"
    assert solved.energy == pytest.approx(proof.energy)
    found = report([solved.run_path, tmp_path / "bound.sqlite"], tmp_path / "page.html")
    read = Page(found.path.read_text())
    assert [own["id"] for tag, own in read.tags if tag == "h2"] == ["c1"]
    assert "proved optimal" in read.text
    assert "Nothing but a certificate" not in read.text
    kinds = {row[3] for row in read.tables()["c1-progress.csv"][1:]}
    assert "lower bound" in kinds


def test_runs_of_several_files_are_as_many_runs(tmp_path: Path) -> None:
    """Numbers of runs begin anew in every file; intervals over runs are those of one file that holds all runs."""
    write_problem(make("lattice2d", 5, seed=1), tmp_path / "glass.txt")
    files = {}
    for name, seeds in (("one", [1]), ("other", [2]), ("both", [1, 2])):
        files[name] = tmp_path / f"{name}.sqlite"
        solve(tmp_path / "glass.txt", subsolver="walk", cluster_size=5, calls=40, seeds=seeds, run=files[name])
    apart = Page(report([files["one"], files["other"]], tmp_path / "apart.html").path.read_text()).tables()
    together = Page(report(files["both"], tmp_path / "together.html").path.read_text()).tables()
    header, *rows = apart["c1-fates.csv"]
    assert all(row[header.index("accepted low")] for row in rows)
    assert apart["c1-fates.csv"] == together["c1-fates.csv"]


def test_a_bound_of_zero_is_a_bound(tmp_path: Path) -> None:
    path = solve(make("lattice2d", 4, seed=1), cluster_size=4, calls=20, run=tmp_path / "run.sqlite").run_path
    with contextlib.closing(sqlite3.connect(path)) as database, database:
        database.execute("UPDATE runs SET lower_bound = 0.0")
    assert "bound on the energy0" in Page(report(path, tmp_path / "page.html").path.read_text()).text


def test_the_demos_caution_comes_with_the_demo(tmp_path: Path) -> None:
    write_problem(make("beacons", 30, seed=1), tmp_path / "coast.csv")
    path = solve(tmp_path / "coast.csv", cluster_size=6, calls=20, run=tmp_path / "run.sqlite").run_path
    text = Page(report(path, tmp_path / "page.html").path.read_text()).text
    assert "no licence or navigation advice" in text
    assert "a simple greedy rule gives" in text
    assert "not checked" not in text
    (tmp_path / "coast.csv").unlink()
    text = Page(report(path, tmp_path / "page.html").path.read_text()).text
    assert "no licence or navigation advice" in text
    assert "not checked" in text  # repeaters that must agree stand in the file alone


def test_an_answer_that_cannot_be_checked_is_not_called_valid(tmp_path: Path) -> None:
    """An independent set, as its own file is there and as it is not."""
    (tmp_path / "graph.csv").write_text("a,b,1\nb,c,1\nc,a,1\nc,d,1\n")
    path = solve(tmp_path / "graph.csv", kind="independent_set", cluster_size=3, calls=40, run=tmp_path / "run.sqlite")
    whole = Page(report(path.run_path, tmp_path / "page.html").path.read_text()).text
    (tmp_path / "graph.csv").unlink()
    bare = Page(report(path.run_path, tmp_path / "page.html").path.read_text()).text
    assert "answervalid" in whole
    assert "answernot checked" in bare


def test_how_a_file_was_read_is_how_it_is_read_again(tmp_path: Path) -> None:
    """A colouring whose number of colours stands in the settings alone."""
    (tmp_path / "map.csv").write_text("a,b\nb,c\nc,a\nc,d\n")
    run = tmp_path / "run.sqlite"
    solve(tmp_path / "map.csv", kind="colouring", colours=3, subsolver="enumeration", cluster_size=3, calls=40, run=run)
    text = Page(report(run, tmp_path / "page.html").path.read_text()).text
    assert "has changed since" not in text
    assert "not checked" not in text


def test_compared_runs_and_scaling(tmp_path: Path) -> None:
    """The page of a comparison says what the comparison said, that of scaling what scale found."""
    glass = tmp_path / "glass.txt"
    write_problem(make("lattice2d", 5, seed=2), glass)
    compared = compare(glass, ["walk", "none"], calls=40, cluster_size=4, seeds=[1, 2, 3], run=tmp_path / "c.sqlite")
    scaled = scale("sk", [4, 5, 6], instances=6, fields=True, run=tmp_path / "s.sqlite")
    found = report([tmp_path / "c.sqlite", tmp_path / "s.sqlite"], tmp_path / "page.html")
    read = Page(found.path.read_text())
    tables = read.tables()
    assert [own["id"] for tag, own in read.tags if tag == "figure"] == [
        "c1-residuals", "c1-pairs", "c1-budget", "c2-scaling",
    ]  # fmt: skip
    (duel,) = compared.duels
    header, row = tables["c1-pairs.csv"]
    told = dict(zip(header, row, strict=True))
    sign = 1.0 if told["one"] == duel.one else -1.0
    assert float(told["difference per spin"]) == pytest.approx(sign * duel.difference.value)
    residuals = {(row[0], row[2]): float(row[3]) for row in tables["c1-residuals.csv"][1:]}
    assert residuals == {(one.contender, str(one.seed)): one.residual for one in compared.outcomes}
    curves = {(row[0], int(row[1])): float(row[3]) for row in tables["c2-scaling.csv"][1:]}
    assert curves == {
        (curve.name, size): pytest.approx(values.mean())
        for curve in scaled.curves
        for size, values in curve.success.items()
    }
    assert scaled.caution[1:] in read.text
    assert read.text.count("In four lines") == 2


def test_sampling_runs_have_their_averages(tmp_path: Path) -> None:
    found = sample(make("lattice2d", 4, seed=1), subsolver="walk,start=incumbent", cluster_size=4, rounds=50,
                   temperatures=[1.0, 2.0], run=tmp_path / "run.sqlite")  # fmt: skip
    page = report(tmp_path / "run.sqlite", tmp_path / "page.html")
    text = Page(page.path.read_text()).text
    assert "too few samples" not in text
    assert "Energies averaged over the Boltzmann law" in text
    assert "no interval" not in text  # series have their errors, run by run
    for level in found.levels:
        assert f"{level.energy.value:,.6g}" in text


def test_a_short_series_has_no_error_bar(tmp_path: Path) -> None:
    found = sample(make("lattice2d", 4, seed=1), subsolver="walk,start=incumbent", cluster_size=4, rounds=3,
                   temperatures=[1.0], run=tmp_path / "run.sqlite")  # fmt: skip
    assert not found.levels[0].energy.reliable
    text = Page(report(tmp_path / "run.sqlite", tmp_path / "page.html").path.read_text()).text
    assert text.count("too few samples") == 1


def test_what_is_too_much_is_thinned_and_said(tmp_path: Path) -> None:
    """Far more improvements than a picture shows: it stays small, and the page says what it left out."""
    path = solve(make("lattice2d", 4, seed=1), cluster_size=4, calls=20, run=tmp_path / "run.sqlite").run_path
    rows = [(1, -1e-4 * place, "sweeps", place, place, place, 1e-4 * place) for place in range(50_000)]
    with contextlib.closing(sqlite3.connect(path)) as database, database:
        database.executemany("INSERT INTO incumbents VALUES (?,?,?,?,?,?,?)", rows)
    found = report(path, tmp_path / "page.html")
    read = Page(found.path.read_text())
    assert found.size < 1_000_000
    assert "Drawn are 600 improvements of a run at most." in read.text
    every = re.search(r"The data hold one row in (\d+)\.", read.text)
    assert every is not None
    assert len(read.tables()["c1-progress.csv"]) - 1 == pytest.approx(50_000 / int(every.group(1)), abs=2)


@pytest.mark.slow
def test_five_thousand_calls_and_six_rivals_stay_below_five_megabytes(tmp_path: Path) -> None:
    glass = make("lattice2d", 24, seed=5, couplings="gaussian")
    path = solve(glass, subsolver="walk", cluster_size=9, calls=5000, run=tmp_path / "run.sqlite").run_path
    replay(path, rivals=["enumeration", "elimination", "metropolis", "tabu", "uniform", "none"])
    assert report(path, tmp_path / "page.html").size < 5_000_000


def test_a_killed_run_is_told_as_far_as_it_came(tmp_path: Path) -> None:
    """Its last checkpoint is what there is, and the page says so."""
    path = solve(make("lattice2d", 4, seed=1), cluster_size=4, calls=20, run=tmp_path / "run.sqlite").run_path
    with contextlib.closing(sqlite3.connect(path)) as database, database:
        database.execute(
            "UPDATE runs SET status = 'running', message = NULL, energy = NULL, spins = NULL, calls = NULL"
        )
    text = Page(report(path, tmp_path / "page.html").path.read_text()).text
    assert "Killed, or not yet over" in text
    assert "Not carried through to the end of the budget: seed 1" in text


DAMAGE = {
    "UPDATE runs SET settings = '{\"seed'": "its table of runs is damaged",
    "UPDATE runs SET spins = x''": "the answer of run 1 is damaged",
    "UPDATE runs SET spins = x'010203'": "the answer of run 1 is damaged",
    "UPDATE runs SET spins = NULL; UPDATE checkpoints SET best_spins = x'01'": "the answer of run 1 is damaged",
    "UPDATE problems SET arrays = x'504b'": "the problem inside is damaged",
    "UPDATE problems SET arrays = 'text'": "the problem inside is damaged",
    "UPDATE problems SET arrays = CAST(substr(arrays, 1, 99) || zeroblob(99) || substr(arrays, 199) AS BLOB)": (
        "the problem inside is damaged"
    ),
}


@pytest.mark.parametrize("damage", DAMAGE)
def test_a_damaged_file_is_named(run: Path, damage: str, tmp_path: Path) -> None:
    path = tmp_path / "run.sqlite"
    shutil.copy(run, path)
    with contextlib.closing(sqlite3.connect(path)) as database, database:
        database.executescript(damage)
    told = patchwalk("report", path, "-o", tmp_path / "page.html")
    assert told.exit_code == 1
    assert f"{path}: {DAMAGE[damage]}" in told.stderr
    assert not (tmp_path / "page.html").exists()


@pytest.mark.parametrize(
    "damage",
    [
        "proposal = x'01'",
        "spins_before = x''",
        "boundary_fields = 'text'",
        "members = zeroblob(3)",
        "members = CAST(x'ffffff7f' || substr(members, 5) AS BLOB)",
    ],
)
def test_a_damaged_call_is_named(run: Path, damage: str, tmp_path: Path) -> None:
    """By all that read calls: a replay, a profile, and the report, which says so where help would stand."""
    path = tmp_path / "run.sqlite"
    shutil.copy(run, path)
    with contextlib.closing(sqlite3.connect(path)) as database, database:
        database.execute(f"UPDATE calls SET {damage}")
    said = f"{path}: a call of run 1, one of those of rounds"
    for words in (("replay", path, "--rival", "tabu", "--calls", 5), ("profile", path)):
        told = patchwalk(*words)
        assert told.exit_code == 1
        assert said in told.stderr
    assert said in Page(report(path, tmp_path / "page.html").path.read_text()).text


@pytest.mark.parametrize(
    ("words", "code", "sentence"),
    [
        (["nowhere.sqlite", "-o", "page.html"], 1, "there is no such run file"),
        (["text.txt", "-o", "page.html"], 1, "not a run file of Patchwalk"),
        (["RUN", "-o", "page.txt"], 2, "give a name that ends in .html"),
        (["RUN", "-o", "foreign.html"], 2, "is no report of Patchwalk; it is left as it is"),
        (["RUN", "-o", "page.html", "--against", "tabu"], 1, "tabu was not replayed against walk"),
        (["RUN", "-o", "page.html", "--cost", "nowhere.toml"], 2, "nowhere.toml: No such file"),
        (["RUN"], 2, "Missing option"),
    ],
)
def test_mistakes_leave_everything_as_it_was(
    run: Path, words: list[str], code: int, sentence: str, tmp_path: Path
) -> None:
    (tmp_path / "text.txt").write_text("no run")
    (tmp_path / "foreign.html").write_text("<!DOCTYPE html>\n<p>mine")
    told = patchwalk("report", *[str(run) if word == "RUN" else word for word in words])
    assert told.exit_code == code, told.output
    assert sentence in told.output
    assert (tmp_path / "foreign.html").read_text() == "<!DOCTYPE html>\n<p>mine"
    assert sorted(one.name for one in tmp_path.iterdir()) == ["foreign.html", "text.txt"]


def test_an_earlier_report_is_replaced(page: Path, run: Path, tmp_path: Path) -> None:
    shutil.copy(page, tmp_path / "page.html")
    replaced = report(run, tmp_path / "page.html", against="uniform")
    assert replaced.path.read_bytes() != page.read_bytes()
    assert [one.name for one in tmp_path.iterdir()] == ["page.html"]


def test_text_cannot_become_markup() -> None:
    assert escaped("<b>\x1b[2J\u202e") == "&lt;b&gt;\ufffd[2J\ufffd"
    assert element("p", "<b>", element("i", "&"), title='"') == '<p title="&quot;">&lt;b&gt;<i>&amp;</i></p>'
    link = download(Table(["=name", "x"], [['=1+1"<b>', 2.5], ["#%", float("nan")]]), "t")
    href = re.search('href="([^"]*)"', link)
    assert href is not None
    data = urllib.parse.unquote(href.group(1).partition(",")[2])
    assert list(csv.reader(io.StringIO(data))) == [["'=name", "x"], ["'=1+1\"<b>", "2.5"], ["#%", ""]]
    assert not re.search(r"[<#\s]", href.group(1))


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_contrast(scheme: str) -> None:
    """Text 4.5 to 1, marks 3 to 1 against the paper, cells 4.5 under their numbers (WCAG 2.1, 1.4.3, 1.4.11)."""
    tones = {name: getattr(colour, scheme) for name, colour in COLOURS.items()}
    for name in ("ink", "soft", "series-1"):
        assert contrast(tones[name], tones["paper"]) >= 4.5, name
    for name in tones:
        if name.startswith("series"):
            assert contrast(tones[name], tones["paper"]) >= 3.0, name
        if name.startswith(("gain", "loss")):
            assert contrast(tones["ink"], tones[name]) >= 4.5, name


def contrast(one: str, other: str) -> float:
    """The contrast ratio of two colours (WCAG 2.1, relative luminance)."""
    lights = []
    for tone in (one, other):
        parts = [int(tone[place : place + 2], 16) / 255.0 for place in (1, 3, 5)]
        linear = [part / 12.92 if part <= 0.03928 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
        lights.append(0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2])
    return (max(lights) + 0.05) / (min(lights) + 0.05)


def test_the_measure_of_contrast_is_the_published_one() -> None:
    """Black on white is 21 to 1; the grey #767676 on white is the darkest common one that just passes, 4.54."""
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    assert contrast("#767676", "#ffffff") == pytest.approx(4.54, abs=0.01)
