"""Runs compared: the table, the page, and that nothing is looked for twice."""

import csv
import html
import re
from html.parser import HTMLParser
from pathlib import Path

import pytest
from some_cases import ENDLESS, stream
from some_streams import Laid, belt, sanderling

from pipeline.account.choices import choices_of
from pipeline.cell import load_cell
from pipeline.compare import compare, runs
from pipeline.compare.page import compare_page
from pipeline.compare.runs import cell_names
from pipeline.study import Source, run, see, setting

EVIL = "<script>alert(1)</script>"


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """More than the arm can pick, so that orders differ."""
    return stream(20, 45.0, 22.0, 160.0).written(tmp_path_factory.mktemp("recorded"))


def written_as(folder: Path, **changes: object) -> Path:
    """The recording's cell under another name, with changes."""
    return stream(1, **changes).written(folder) / "cell.toml"


class Page(HTMLParser):
    """Tags and addresses of a page, and whether all that opens is closed."""

    VOID = frozenset({"meta", "link", "line", "path", "rect", "polyline", "input", "br"})

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.open: list[str] = []
        self.addresses: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.addresses += [value or "" for name, value in attrs if name in ("src", "href", "srcset", "action")]
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        if tag not in self.VOID:
            assert self.open.pop() == tag


def test_figures_are_those_of_single_replays(recorded: Path, tmp_path: Path) -> None:
    """Each row of the table says what a replay by that order says."""
    told = sanderling("compare", recorded, "--cell", recorded / "cell.toml", "--located", recorded / "located.csv",
                      "--orders", "arrival, nearest,lookahead", "--horizon", 5, "--out", tmp_path)
    assert told.status == 0, told.err
    with open(tmp_path / "compare.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["run"] for row in rows] == ["arrival", "nearest", "lookahead"]
    cell = load_cell(recorded / "cell.toml")
    seen = see(cell, recorded, Source(located=recorded / "located.csv"))
    for row in rows:
        done = run(setting(seen), row["order"], 5)
        assert int(row["picked"]) == len(done.picks)
        assert int(row["parts_seen"]) - int(row["picked"]) == sum(int(row[k]) for k in row if k.startswith("missed_"))
        busy = sum(pick.cycle.release_end_s - pick.cycle.depart_s for pick in done.picks)
        assert float(row["waiting_s"]) == pytest.approx(done.end_s - done.start_s - busy, abs=1e-3)
        assert (row["gap"] == "") == (not choices_of(done).gaps)
    assert all((tmp_path / name).stat().st_size > 5000 for name in ("picks.png", "missed.png", "cycle.png"))
    assert "lookahead" in told.out
    assert "picks a minute" in told.out


def test_what_is_there_is_looked_for_once(recorded: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Cells that see alike share what was found; another surface is looked at anew."""
    looked: list[str] = []

    def counted(cell, folder, source, rows):  # type: ignore[no-untyped-def]
        looked.append(cell.name)
        return see(cell, folder, source, rows)

    monkeypatch.setattr(runs, "see", counted)
    slow = written_as(tmp_path / "slow", name="slow", arm__j1__max_speed=100.0)
    low = written_as(tmp_path / "low", name="low", belt__surface_mm=-55.0)
    cells = [load_cell(path) for path in (recorded / "cell.toml", slow, low)]
    tried = compare(cells, recorded, Source(located=recorded / "located.csv"), ["arrival"], horizon=4)
    assert looked == ["plain", "low"]
    assert [one.label for one in tried] == ["plain", "slow", "low"]
    assert tried[1].figures["picked"] < tried[0].figures["picked"]
    differing = compare_page(tried).partition("Picked in some runs, missed in others")[2]
    fates = [[one.run.fates[k] is None for one in tried] for k in range(len(tried[0].run.parts))]
    assert differing.count("<tr>") - 1 == sum(len(set(fate)) > 1 for fate in fates) > 0


def test_cells_have_names_of_their_own(recorded: Path, tmp_path: Path) -> None:
    one = load_cell(recorded / "cell.toml")
    other = load_cell(written_as(tmp_path, name="other"))
    assert cell_names([one, other]) == ["plain", "other"]
    assert len(set(cell_names([one, one]))) == 2
    assert len(set(cell_names([one, load_cell(written_as(tmp_path / "b"))]))) == 2


def test_the_page_needs_no_network_and_runs_no_script(recorded: Path) -> None:
    cell = load_cell(recorded / "cell.toml")
    tried = compare([cell], recorded, Source(located=recorded / "located.csv"), ["arrival", "lookahead"], horizon=4)
    text = compare_page(tried)
    page = Page(text)
    assert page.open == []
    assert "script" not in page.tags
    assert page.addresses == ["data:,"]
    assert re.search(r"default-src 'none'; img-src data:; style-src 'sha256-[\w+/=]{44}'", html.unescape(text))
    assert not re.search(r"https?://|@import|url\(", text)
    assert page.tags.count("article") == 2
    assert compare_page(tried) == text


def test_names_from_files_appear_as_text(tmp_path: Path) -> None:
    """A kind, a place and a cell named like a script are shown, not run."""
    part = {"grasp_mm": 3.0, "height_mm": 6.0, "places": [EVIL]}
    place = {**ENDLESS["places"][0], "name": EVIL}
    laid = [Laid(280.0, -450.0 - 25 * k, 40.0 * k, kind=EVIL) for k in range(12)]
    made = belt(laid, 14.0, 160.0, name=EVIL, parts={EVIL: part}, places=[place])
    folder = made.written(tmp_path / EVIL.replace("/", "_"))
    told = sanderling("compare", folder, "--cell", folder / "cell.toml", "--cell", folder / "cell.toml", "--located",
                      folder / "located.csv", "--orders", "arrival,nearest", "--out", tmp_path / "out")
    assert told.status == 0, told.err
    text = (tmp_path / "out" / "compare.html").read_text()
    assert EVIL not in text
    assert "&lt;script&gt;" in text
    assert "script" not in Page(text).tags


def test_an_empty_belt_can_be_compared(tmp_path: Path) -> None:
    folder = belt([], 3.0).written(tmp_path / "in")
    told = sanderling("compare", folder, "--cell", folder / "cell.toml", "--located", folder / "located.csv",
                      "--orders", "arrival,lookahead", "--out", tmp_path / "out")
    assert told.status == 0, told.err


@pytest.mark.parametrize(("words", "told"), [
    (["--orders", "arrival,best"], "not an order"), (["--cell", "none.toml"], "no such file"),
    (["--detections", "a.csv"], "give one of the two"), (["--least-score", "2"], "least"),
])  # fmt: skip
def test_bad_words_end_in_two_and_leave_nothing(recorded: Path, tmp_path: Path, words: list[str], told: str) -> None:
    ended = sanderling("compare", recorded, "--cell", recorded / "cell.toml", "--located", recorded / "located.csv",
                       "--out", tmp_path / "out", *words)
    assert ended.status == 2
    assert told in ended.err
    assert not (tmp_path / "out").exists()

