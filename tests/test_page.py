"""The report: whole, closed to the network, safe against hostile names, the same bytes for the same run."""

import base64
import hashlib
import re
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from some_pages import Made, made, plain, scene_of
from some_streams import Laid, belt, scattered, tray

from pipeline.page import write_page
from pipeline.page.markup import escaped, tag

HOSTILE = "<script>alert(1)</script>"
VOID = {"meta", "link", "input", "br", "img"}


@pytest.fixture(scope="module")
def one(tmp_path_factory: pytest.TempPathFactory) -> Made:
    return plain(tmp_path_factory.mktemp("page"))


@pytest.fixture(scope="module")
def page(one: Made, tmp_path_factory: pytest.TempPathFactory) -> str:
    return one.written(tmp_path_factory.mktemp("page") / "report.html")


class Reader(HTMLParser):
    """Elements, their attributes and texts; every one closed in turn."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: list[tuple[str, dict[str, str | None]]] = []
        self.text: dict[str, str] = {}
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        name = self.open[-1] if self.open else ""
        self.text[name] = self.text.get(name, "") + data

    def of(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.seen if name == tag]


def test_every_element_is_closed_and_every_id_is_used_once(page: str) -> None:
    reader = Reader(page)
    ids = [attributes["id"] for _, attributes in reader.seen if "id" in attributes]
    assert len(ids) == len(set(ids))
    targets = {a["href"] for a in reader.of("a")}
    assert {target[1:] for target in targets} <= set(ids)


def test_nothing_is_asked_of_any_host(page: str) -> None:
    """No address but data: and places in the page, and a policy (W3C, CSP 3) under which none could be."""
    reader = Reader(page)
    for _, attributes in reader.seen:
        for name in ("src", "href", "srcset", "action", "data"):
            assert re.match(r"#|data:|$", attributes.get(name) or "")
    assert "url(" not in page
    assert "@import" not in page
    assert "http:" not in page
    assert "https:" not in page
    policy = next(a["content"] for a in reader.of("meta") if a.get("http-equiv") == "Content-Security-Policy")
    assert policy is not None
    assert policy.startswith("default-src 'none'; img-src data:;")
    assert "unsafe" not in policy


def test_the_policy_names_the_style_and_script_that_are_there(page: str) -> None:
    for name in ("style", "script"):
        text = re.search(rf"<{name}>(.*?)</{name}>", page, re.DOTALL)
        assert text
        hashed = base64.b64encode(hashlib.sha256(text[1].encode()).digest()).decode()
        assert f"{name}-src 'sha256-{hashed}'" in page.replace("&#x27;", "'")


def test_no_element_carries_what_the_policy_forbids(page: str) -> None:
    for _, attributes in Reader(page).seen:
        assert not [name for name in attributes if name == "style" or name.startswith("on")]


def test_the_same_run_makes_the_same_bytes_whatever_the_time_it_took(one: Made, page: str, tmp_path: Path) -> None:
    figures = {**one.figures(), "decide_ms": {"median": 99.0, "max": 123.0}, "find_ms": {"median": 9.0, "max": 77.0}}
    slow = replace(one.run, picks=tuple(replace(pick, decide_s=9.0) for pick in one.run.picks), decide_s=(9.0,))
    write_page(tmp_path / "again.html", one.seen, one.setting, slow, figures)
    assert (tmp_path / "again.html").read_text(encoding="utf-8") == page


def test_hostile_names_are_text_everywhere(tmp_path: Path) -> None:
    """In headings, tables, the cell file and the data that the scripts read."""
    laid = [replace(part, kind=HOSTILE) for part in scattered(4, 5, 90.0)]
    stream = belt([*laid, Laid(280.0, -520.0, kind=HOSTILE, side="down")], 14.0, 150.0, **{
        "name": f"</title>{HOSTILE}", "parts": {HOSTILE: {"grasp_mm": 3.0, "height_mm": 6.0, "places": [HOSTILE]}},
        "places": [{"name": HOSTILE, "origin_mm": [-60.0, 260.0, -40.0], "endless": True}],
        "keepouts": [{"name": HOSTILE, "polygon_mm": [[-400, -400], [-380, -400], [-380, -380]], "top_mm": 300.0}],
    })  # fmt: skip
    hostile = made(stream, tmp_path)
    text = hostile.written(tmp_path / "report.html")
    assert hostile.run.picks
    reader = Reader(text)
    assert len(reader.of("script")) == 2
    assert HOSTILE not in text
    assert "alert(1)" not in reader.text["script"].replace("\\u003cscript\\u003ealert(1)", "")
    scene = scene_of(text)
    assert [scene["kinds"][0]["name"], scene["places"][0]["name"], scene["keepouts"][0]["name"]] == [HOSTILE] * 3
    assert HOSTILE in reader.text["td"]
    assert HOSTILE in reader.text["code"]
    assert HOSTILE in reader.text["h1"]


@given(st.text())
def test_escaped_text_reads_as_itself(text: str) -> None:
    shown = Reader(str(tag("p", tag("b", text), title=text)))
    kept = "".join(c if c in "\t\n" or c.isprintable() or ord(c) > 0x9F else "\N{REPLACEMENT CHARACTER}" for c in text)
    assert (shown.text.get("b", "") == kept)
    assert (shown.of("p")[0]["title"] == kept)


def test_markup_is_not_escaped_twice() -> None:
    assert escaped(tag("b", "a < b")) == "<b>a &lt; b</b>"


def test_tables_hold_every_pick_and_part(one: Made, page: str) -> None:
    for name, count in (("picks", len(one.run.picks)), ("parts", len(one.run.parts))):
        table = re.search(rf'<table class="listing" id="{name}">.*?</table>', page, re.DOTALL)
        assert table
        assert table[0].count("<tr>") == count + 1
    assert len(one.run.picks) >= 7


def test_misses_are_told_with_reason_and_sentence(one: Made, page: str) -> None:
    missed = [(part, fate) for part, fate in zip(one.run.parts, one.run.fates, strict=True) if fate]
    assert "wrong_side" in {fate.reason for _, fate in missed}
    section = page[page.index('id="misses"') : page.index('id="pace"')]
    for part, fate in missed:
        assert f">part {part.number}</a>" in section
        assert escaped(fate.detail) in section


def test_the_cautions_name_what_they_defer_to(page: str) -> None:
    cautions = page[page.index('<section id="cautions"') :]
    for words in ("ISO 12100", "ISO 10218-1", "ISO 10218-2", "risk assessment", "qualified people", "manual",
                  "local codes", "reduced speed"):  # fmt: skip
        assert words in cautions


def test_the_whole_cell_file_is_there(one: Made, page: str) -> None:
    text = one.setting.cell.file.read_text(encoding="utf-8")
    assert Reader(page).text["code"] == text


def test_a_clock_of_seconds_since_1970_is_shown_from_the_start(tmp_path: Path) -> None:
    stream = belt(scattered(4, 3, 90.0), 10.0, 150.0)
    late = made(replace(stream, times_s=stream.times_s + 1.7e9), tmp_path)
    scene = scene_of(late.written(tmp_path / "report.html"))
    assert scene["start"] == 0.0
    assert 5 < scene["end"] < 20
    assert late.run.picks
    assert all(0 <= edge <= scene["end"] for pick in scene["picks"] for edge in pick["edges"])


def test_a_recording_of_nothing_makes_a_page(tmp_path: Path) -> None:
    empty = made(belt([], 2.0), tmp_path)
    text = empty.written(tmp_path / "report.html")
    Reader(text)
    assert "No part was seen" in text
    assert scene_of(text)["motion"] is None


def test_a_tray_makes_a_page(tmp_path: Path) -> None:
    laid = [Laid(250.0 + 40 * k, 10.0 * k, 15.0 * k, first=k % 2) for k in range(4)]
    still = made(tray(laid, 2), tmp_path)
    scene = scene_of(still.written(tmp_path / "report.html"))
    assert scene["belt"] is None
    assert len(scene["picks"]) == 4
