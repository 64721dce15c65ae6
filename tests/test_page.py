"""The report: whole, closed to the network, safe against hostile names, the same bytes for the same run."""

import base64
import hashlib
import json
import re
from dataclasses import replace
from html.parser import HTMLParser
from importlib.resources import files
from itertools import combinations, pairwise
from pathlib import Path

import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from some_pages import Made, made, plain
from some_streams import Laid, belt, scattered, tray

from pipeline.account.choices import choices_of
from pipeline.account.loads import loads_of
from pipeline.account.pace import pace_of
from pipeline.account.phases import phases_of, split_of
from pipeline.account.windows import windows_of
from pipeline.page import write_page
from pipeline.page.charts import ticks
from pipeline.page.drawn import thinned
from pipeline.page.images import MOST_BYTES, shots_of
from pipeline.page.markup import escaped, tag
from pipeline.page.pack import packed
from pipeline.plots.written import write_plots
from pipeline.policy import Lookahead

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


def scene_of(text: str) -> dict:
    found = re.search(r'<script type="application/json" id="scene">(.*?)</script>', text, re.DOTALL)
    assert found
    return json.loads(found[1])


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


# what the scripts are given


def unpacked(text: str) -> list[int]:
    """Read `packed` text as its docstring says, byte by byte."""
    values, before, last = [], 0, 0
    number = shift = 0
    for byte in base64.b64decode(text):
        number |= (byte & 127) << shift
        shift += 7
        if byte < 128:
            second = -(number + 1) // 2 if number % 2 else number // 2
            before, last = last, second + 2 * last - before
            values.append(last)
            number = shift = 0
    return values


@given(st.lists(st.integers(-10**9, 10**9), max_size=40))
def test_packed_numbers_come_back(values: list[int]) -> None:
    assert unpacked(packed(np.array(values, float) * 0.5, 0.5)) == values


@pytest.mark.parametrize(("number", "stored"), [
    (1, "02"), (-64, "7f"), (64, "8001"), (-65, "8101"), (-6429, "b964"), (2**31 - 1, "feffffff0f"),
    (-(2**31), "ffffffff0f"),
])  # fmt: skip
def test_packed_bytes_are_those_of_the_published_examples(number: int, stored: str) -> None:
    """DWARF 5, 7.6: 2, 127, 128, 129, 12857 as 02, 7f, 80 01, 81 01, b9 64; Protocol Buffers' encoding page: a signed n
    travels as 2 n or -2 n - 1, the greatest and least of 32 bits as 4294967294 and 4294967295. From memory."""
    assert base64.b64decode(packed(np.array([float(number)]), 1.0)).hex() == stored


def test_the_motion_shown_is_the_motion_planned(one: Made, page: str) -> None:
    """To 0.3 degrees and 0.5 mm at grasp and release, as the scripts interpolate it."""
    scene = scene_of(page)
    motion = scene["motion"]
    series = zip(motion["joints"], motion["units"], strict=True)
    joints = np.array([np.array(unpacked(text)) * unit for text, unit in series])
    grid = motion["start"] + motion["step"] * np.arange(joints.shape[1])
    for pick in one.run.picks:
        cycle = pick.cycle
        for at in (cycle.grasp_start_s, 0.5 * (cycle.grasp_end_s + cycle.left_s), cycle.release_start_s):
            shown = [np.interp(at, grid, row) for row in joints]
            off = np.abs(shown - one.run.mover.joints(cycle, np.array([at]))[0])
            assert off[2] < 0.5
            assert np.degrees(off[[0, 1, 3]]).max() < 0.3


@given(st.integers(3, 60), st.integers(0, 10**6))
def test_thinned_outlines_stay_near(number: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    turns = np.sort(rng.uniform(0, 2 * np.pi, number))
    outline = rng.uniform(8, 12, number)[:, None] * np.column_stack([np.cos(turns), np.sin(turns)])
    kept = thinned(outline, 0.3)
    ends = np.roll(kept, -1, axis=0) - kept
    share = np.clip(((outline[:, None] - kept) * ends).sum(-1) / np.maximum((ends**2).sum(-1), 1e-12), 0, 1)
    assert np.linalg.norm(outline[:, None] - kept - share[..., None] * ends, axis=-1).min(axis=1).max() < 0.31


def test_frames_of_a_long_recording_fit_into_the_page(tmp_path: Path) -> None:
    """400 frames that hardly compress, as of 40 s at 10 Hz."""
    stream = belt(scattered(4, 6, 300.0), 40.0, 60.0)
    noisy = made(stream, tmp_path, images=True)
    noise = np.random.default_rng(0).integers(0, 255, (600, 800), np.uint8)
    for k in range(len(stream.times_s)):
        cv2.imwrite(str(tmp_path / f"none-{k}.bmp"), np.roll(noise, 40 * k, axis=1))
        (tmp_path / f"none-{k}.bmp").replace(tmp_path / f"none-{k}.png")
    shots = shots_of(noisy.seen)
    assert len(shots) > 100
    assert sum(len(shot.jpeg) for shot in shots) <= MOST_BYTES
    assert all(shot.width / shot.height == pytest.approx(800 / 600, abs=0.02) for shot in shots)
    assert len(noisy.written(tmp_path / "report.html")) < 6_000_000


# what is said of a run


def test_phases_tell_the_whole_run_without_gaps(one: Made) -> None:
    phases = phases_of(one.run)
    assert phases[0].start_s == one.run.start_s
    assert phases[-1].end_s == one.run.picks[-1].cycle.release_end_s
    assert all(before.end_s == after.start_s for before, after in pairwise(phases))
    dwell = [phase.end_s - phase.start_s for phase in phases if phase.name == "dwell"]
    assert dwell == pytest.approx([one.setting.cell.motion.grasp_s] * len(one.run.picks))


def test_a_split_adds_up_to_its_cycle(one: Made) -> None:
    whole = [pick.cycle.release_end_s - pick.cycle.depart_s for pick in one.run.picks]
    assert split_of(one.run).sum(axis=1) == pytest.approx(whole)
    assert (split_of(one.run) >= 0).all()


def test_loads_reach_the_limits_and_never_pass_them(one: Made) -> None:
    """Against the exact extremes of the planned curves."""
    loads, limits = loads_of(one.run), one.run.mover.arm.limits
    assert loads is not None
    assert loads.peak_speed.max() < 1.001
    assert loads.peak_accel.max() < 1.001
    exact = [max(curve.extremes()[2] for pick in one.run.picks for curve in (pick.cycle.out[k], pick.cycle.back[k]))
             for k in range(3)]
    assert loads.peak_speed[[0, 1, 3]] == pytest.approx(np.array(exact) / limits.speed[[0, 1, 3]], abs=0.02)
    assert loads.speed.max(axis=0) == pytest.approx(loads.peak_speed)


def test_pace_counts_every_pick_once(one: Made) -> None:
    pace = pace_of(one.run, one.setting)
    assert pace.mean_per_min == pytest.approx(60 * len(one.run.picks) / (one.run.end_s - one.run.start_s))
    last = pace.picks_per_min[-1] * pace.span_s / 60
    recent = [p for p in one.run.picks if p.cycle.release_end_s > one.run.end_s - pace.span_s]
    assert last == pytest.approx(len(recent))


def test_parts_are_gripped_inside_their_windows(one: Made) -> None:
    windows = windows_of(one.setting)
    for pick in one.run.picks:
        window = windows[pick.part.number - 1]
        assert window.known_s <= pick.decided_s + 1e-9
        assert window.enters_s - 1e-6 <= pick.cycle.grasp_start_s <= window.leaves_s + 1e-6


def test_choices_know_a_bound_where_the_order_gives_one(one: Made, tmp_path: Path) -> None:
    assert choices_of(one.run).bounded == 0
    ahead = made(belt(scattered(4, 6, 90.0), 14.0, 150.0), tmp_path, Lookahead())
    told = choices_of(ahead.run)
    assert told.bounded == told.decisions == len(ahead.run.picks) > 0
    assert told.best == sum(gap < 1e-9 for gap in told.gaps)


@given(st.floats(-1e4, 1e4), st.floats(1e-3, 1e4))
def test_ticks_are_few_and_inside(low: float, wide: float) -> None:
    marks = ticks(low, low + wide)
    assert 2 <= len(marks) <= 8
    assert low - 1e-6 * wide <= marks[0]
    assert marks[-1] <= low + wide * (1 + 1e-6)


def test_plots_are_written_and_the_same_again(one: Made, tmp_path: Path) -> None:
    first = [path.read_bytes() for path in write_plots(tmp_path / "a", one.setting, one.run)]
    again = [path.read_bytes() for path in write_plots(tmp_path / "b", one.setting, one.run)]
    assert len(first) == 5
    assert first == again
    assert all(data.startswith(b"\x89PNG") for data in first)


# what eyes need


def colours(dark: bool) -> dict[str, np.ndarray]:
    """The style sheets' colours, linear RGB in 0 to 1 (IEC 61966-2-1)."""
    css = "".join(files("pipeline.page").joinpath(name).read_text() for name in ("page.css", "desk.css"))
    blocks = re.findall(r"(@media \(prefers-color-scheme: dark\) \{\s*)?:root[^{]*\{([^}]*)\}", css)
    found: dict[str, np.ndarray] = {}
    for in_dark, block in blocks:
        if dark or not in_dark:
            for name, value in re.findall(r"--([\w-]+): #([0-9a-f]{6})", block):
                coded = np.array([int(value[k : k + 2], 16) for k in (0, 2, 4)]) / 255
                found[name] = np.where(coded <= 0.04045, coded / 12.92, ((coded + 0.055) / 1.055) ** 2.4)
    return found


def contrast(a: np.ndarray, b: np.ndarray) -> float:
    """WCAG 2.2, contrast ratio of relative luminances."""
    low, high = sorted(float(c @ [0.2126, 0.7152, 0.0722]) for c in (a, b))
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("dark", [False, True])
def test_text_and_marks_stand_out(dark: bool) -> None:
    """WCAG 2.2, 1.4.3: text 4.5 to 1; 1.4.11: marks 3 to 1."""
    found = colours(dark)
    for ground in ("paper", "card", "faint", "belt"):
        for text in ("ink", "soft", "deep", "alarm"):
            assert contrast(found[text], found[ground]) >= 4.5, (text, ground)
        for name in [*(f"kind-{k}" for k in range(6)), "kind-unknown"]:
            assert contrast(found[name], found[ground]) >= 3.0, (name, ground)


# Machado, Oliveira, Fernandes, IEEE TVCG 15(6), 2009, table 1, severity 1.0 (from memory)
BLIND = {
    "none": np.eye(3),
    "protan": np.array([[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216],
                        [-0.003882, -0.048116, 1.051998]]),
    "deutan": np.array([[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413],
                        [-0.011820, 0.042940, 0.968881]]),
}  # fmt: skip


def lab(linear: np.ndarray) -> np.ndarray:
    """CIELAB under D65 (CIE 15; sRGB primaries)."""
    to_xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
    t = to_xyz @ np.clip(linear, 0, 1) / [0.9505, 1.0, 1.089]
    f = np.where(t > (6 / 29) ** 3, np.cbrt(t), t / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("dark", [False, True])
@pytest.mark.parametrize("sight", BLIND)
def test_kinds_are_told_apart_by_colour_blind_readers(dark: bool, sight: str) -> None:
    """By ten units of CIELAB at least; shapes tell them apart besides."""
    seen = [lab(BLIND[sight] @ colours(dark)[f"kind-{k}"]) for k in range(6)]
    assert min(float(np.linalg.norm(a - b)) for a, b in combinations(seen, 2)) > 10
