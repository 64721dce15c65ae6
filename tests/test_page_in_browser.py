"""The report in a real browser: it plays, jumps, filters, asks no host for anything, and logs no error."""

import shutil
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from some_pages import Made, made, plain
from some_streams import Laid, belt, scattered
from webdriver import Browser, browser

from pipeline.page import write_page
from pipeline.page.head import words

SPACE, RIGHT, LEFT, TAB = " ", "\ue014", "\ue012", "\ue004"  # WebDriver's code points for keys
TIME = "return Number(document.getElementById('clock').value)"


@pytest.fixture(scope="module")
def chrome(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Browser]:
    binary, driver = shutil.which("chromium"), shutil.which("chromedriver")
    if binary is None or driver is None:
        pytest.skip("no chromium with its driver installed")
    with browser(driver, binary, tmp_path_factory.mktemp("profile")) as session:
        yield session


@pytest.fixture(scope="module")
def one(tmp_path_factory: pytest.TempPathFactory) -> Made:
    return plain(tmp_path_factory.mktemp("run"), images=True)


@pytest.fixture(scope="module")
def report(one: Made, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("page") / "report.html"
    one.written(path)
    return path


@pytest.fixture
def page(chrome: Browser, report: Path) -> Iterator[Browser]:
    """The report just opened; at the end nothing has been logged and no host been asked."""
    chrome.cdp("Emulation.setDeviceMetricsOverride", width=1280, height=900, deviceScaleFactor=1, mobile=False)
    chrome.log("browser")
    chrome.requested()
    chrome.open(report)
    yield chrome
    assert chrome.log("browser") == []
    assert {address.split(":")[0] for address in chrome.requested()} <= {"file", "data"}


def at(page: Browser) -> float:
    return float(page.js(TIME))


def test_opens_with_something_to_see(page: Browser) -> None:
    """The cell, the frame and the timeline are drawn."""
    inked = """const c = document.getElementById(arguments[0]);
               const d = c.getContext('2d').getImageData(0, 0, c.width, c.height).data;
               return new Set(new Uint32Array(d.buffer)).size"""
    assert page.js(inked, "above") > 50
    assert page.js(inked, "timeline") > 20
    page.wait("return document.getElementById('shot').naturalWidth > 0")


def test_plays_and_pauses_with_space(page: Browser) -> None:
    before = at(page)
    page.press(SPACE)
    page.wait(f"{TIME.replace('return ', 'return 0.3 + ' + str(before) + ' < ')}")
    page.press(SPACE)
    stopped = at(page)
    time.sleep(0.2)
    assert at(page) == stopped
    assert page.js("return document.getElementById('play').textContent") == "Play"


def test_arrows_step(page: Browser) -> None:
    before = at(page)
    page.press(RIGHT, RIGHT, RIGHT, LEFT)
    assert at(page) == pytest.approx(before + 0.2, abs=1e-6)


def test_jumps_to_a_pick_and_to_a_miss(page: Browser, one: Made) -> None:
    """From the tables' links, the list and the keys; the sentence says what happens there."""
    pick = one.run.picks[2]
    page.js("document.querySelector('#picks tbody tr:nth-child(3) a').click()")
    assert at(page) == pytest.approx(pick.cycle.grasp_start_s, abs=0.01)
    assert f"part {pick.part.number} " in page.js("return document.getElementById('now').textContent")
    missed, fate = next((p, f) for p, f in zip(one.run.parts, one.run.fates, strict=True) if f)
    page.js(f"document.querySelector('.cases a.jump[data-part=\"{missed.number}\"]').click()")
    told = page.js("return document.getElementById('now').textContent")
    assert f"Part {missed.number} is missed, {words(fate.reason)}: {fate.detail}" in told
    page.js("""const s = document.getElementById('goto');
               s.value = [...s.options].find((o) => o.textContent.startsWith('pick 5:')).value;
               s.dispatchEvent(new Event('change'))""")
    assert at(page) == pytest.approx(one.run.picks[4].cycle.grasp_start_s, abs=0.01)
    page.js("document.activeElement.blur()")
    page.js("document.getElementById('above').scrollIntoView()")
    page.wait("return desk.inView")
    page.press("n")
    assert at(page) > one.run.picks[4].cycle.grasp_start_s


def test_the_arm_is_drawn_where_the_plan_has_it(page: Browser, one: Made) -> None:
    """The page's own kinematics against the planner's, at every grasp: to 1 mm."""
    for pick in one.run.picks:
        t = pick.cycle.grasp_start_s
        tip = page.js("const p = pose(jointsAt(arguments[0])); return [...p.tip, p.z]", t)
        hold = pick.cycle.hold
        aim = [*(hold.at_mm + one.setting.belt.shift_mm(t)), hold.z_mm]
        assert tip == pytest.approx([float(v) for v in aim], abs=1.0)


def test_what_was_found_lies_where_the_camera_sees_it(page: Browser, one: Made) -> None:
    """A pixel is a millimetre in these pictures, y upwards: (u, v) shows (u + 120, -v - 200)."""
    found = page.js("""return scene.frames.flatMap((f) => f.found.map((one) =>
        [f.t, one.part, one.at.filter((v, i) => i % 2 === 0), one.at.filter((v, i) => i % 2 === 1)]))""")
    assert len(found) > 20
    for t, part, us, vs in found:
        x, y = one.run.parts[part].xy_mm + one.setting.belt.recorded_mm[round(t / 0.1)] * one.setting.belt.heading
        assert 0.5 * (min(us) + max(us)) == pytest.approx(x - 120, abs=2)
        assert 0.5 * (min(vs) + max(vs)) == pytest.approx(-y - 200, abs=2)


def test_tables_sort_and_filter(page: Browser, one: Made) -> None:
    column = "return [...document.querySelectorAll('#picks tbody tr')].map((r) => Number(r.cells[6].textContent))"
    page.js("document.querySelector('#picks th:nth-child(7) button').click()")
    assert page.js(column) == sorted(page.js(column))
    page.js("document.querySelector('#picks th:nth-child(7) button').click()")
    assert page.js(column) == sorted(page.js(column), reverse=True)
    assert page.js("return document.querySelector('#picks th:nth-child(7)').getAttribute('aria-sort')") == "descending"
    shown = """const f = document.querySelectorAll('input[type=search]')[1];
               f.value = arguments[0]; f.dispatchEvent(new Event('input'));
               return [...document.querySelectorAll('#parts tbody tr')].filter((r) => !r.hidden).length"""
    missed = sum(fate is not None for fate in one.run.fates)
    assert 0 < missed < len(one.run.parts)
    assert page.js(shown, "missed") == missed
    wrong = sum(fate is not None and fate.reason == "wrong_side" for fate in one.run.fates)
    assert page.js(shown, "missed wrong") == wrong
    assert page.js(shown, "") == len(one.run.parts)


def test_typing_in_the_filter_does_not_play(page: Browser) -> None:
    before = at(page)
    page.click("#lists input[type=search]")
    page.press("n", SPACE, RIGHT)
    time.sleep(0.1)
    assert at(page) == before
    assert page.js("return document.querySelector('input[type=search]').value") == "n "


@pytest.mark.parametrize("width", [400, 1280])
def test_nothing_is_wider_than_the_window(page: Browser, width: int) -> None:
    page.cdp("Emulation.setDeviceMetricsOverride", width=width, height=800, deviceScaleFactor=2, mobile=False)
    page.wait(f"return document.documentElement.clientWidth <= {width}")
    assert page.js("return document.documentElement.scrollWidth") <= width


def test_dark_and_light_and_paper(page: Browser) -> None:
    ground = "return getComputedStyle(document.documentElement).backgroundColor"
    told = {}
    for scheme in ("dark", "light"):
        page.cdp("Emulation.setEmulatedMedia", features=[{"name": "prefers-color-scheme", "value": scheme}])
        told[scheme] = page.js(ground)
    assert told["dark"] != told["light"]
    page.cdp("Emulation.setEmulatedMedia", features=[{"name": "prefers-color-scheme", "value": "dark"}])
    page.js("window.dispatchEvent(new Event('beforeprint'))")
    assert page.js(ground) == told["light"]
    page.js("window.dispatchEvent(new Event('afterprint'))")
    page.cdp("Emulation.setEmulatedMedia", features=[])


def read_out(page: Browser) -> list[dict[str, Any]]:
    """The accessibility tree as the browser hands it to a screen reader: role, name and states of each."""
    nodes = page.cdp("Accessibility.getFullAXTree")["nodes"]
    return [{"role": node["role"]["value"], "name": node.get("name", {}).get("value", "").strip(),
             **{one["name"]: one["value"].get("value") for one in node.get("properties", [])}}
            for node in nodes if not node.get("ignored") and "role" in node]  # fmt: skip


def test_every_control_has_a_name_and_a_role(page: Browser) -> None:
    """WAI-ARIA 1.2: what can be operated has a role that is operated, and a name."""
    nodes = read_out(page)
    operated = {"button", "slider", "combobox", "searchbox", "link", "DisclosureTriangle", "option"}
    shown = {"RootWebArea", "image", "region", "table", "columnheader"}
    named = [node for node in nodes if node["role"] in operated | shown]
    assert len(named) > 40
    assert [node for node in named if not node["name"]] == []
    fields = [node["name"] for node in nodes if node["role"] in ("searchbox", "combobox", "slider")]
    assert len(set(fields)) == len(fields) == 6
    assert "decided s" in {node["name"] for node in nodes if node["role"] == "button"}
    assert [node for node in nodes if node.get("focusable") and node["role"] not in operated | shown] == []


def test_tables_tell_their_headers(page: Browser) -> None:
    """Every table has a caption for a name, and a header over each column."""
    tables = page.js("""return [...document.querySelectorAll('table')].map((t) => [t.caption?.textContent ?? '',
        [...t.tHead.rows[0].cells].every((c) => c.tagName === 'TH' && c.scope === 'col' && c.textContent.trim()),
        [...t.tBodies[0].rows].every((r) => r.cells.length === t.tHead.rows[0].cells.length)])""")
    assert len(tables) >= 5
    assert [told for told in tables if not all(told)] == []


def test_the_slider_tells_the_time(page: Browser) -> None:
    page.press(RIGHT)
    slider, = (node for node in read_out(page) if node["role"] == "slider")
    assert slider["name"] == "Time"
    told = page.js("return document.getElementById('clock').getAttribute('aria-valuetext')")
    assert told == f"{at(page):.1f} seconds"


def test_screen_readers_hear_a_moment_once_and_nothing_while_it_plays(page: Browser) -> None:
    page.js("""window.heard = []; for (const live of document.querySelectorAll('[aria-live], [role=status], output'))
        if (live.ariaLive !== 'off') new MutationObserver(() => heard.push(live.textContent))
            .observe(live, { childList: true, subtree: true, characterData: true })""")
    page.press(SPACE)
    time.sleep(0.8)
    assert page.js("return window.heard") == []
    page.press(SPACE)
    page.press(*[RIGHT] * 5)
    page.wait("return window.heard.length > 0")
    time.sleep(0.7)
    assert page.js("return window.heard") == [page.js("return document.getElementById('now').textContent")]


def test_tab_reaches_every_control_in_the_order_of_the_page(page: Browser) -> None:
    """Each with a ring around it that can be seen; the skip link first."""
    page.js("""document.activeElement.blur(); window.scrollTo(0, 0);
        window.wanted = [...document.querySelectorAll('a[href], button, select, input, summary, [tabindex="0"]')]
            .filter((one) => one.checkVisibility())""")
    many = page.js("return window.wanted.length")
    assert many > 30
    reached, ringed = [], []
    for _ in range(many):
        page.press(TAB)
        found = page.js("""const on = document.activeElement, look = getComputedStyle(on);
            return [wanted.indexOf(on), look.outlineStyle !== 'none' && parseFloat(look.outlineWidth) > 0,
                    on.outerHTML]""")
        reached.append(found[0])
        ringed.append((found[1], found[2][:80]))
    assert [k for k in reached if k >= 0] == list(range(len([k for k in reached if k >= 0])))
    assert len([k for k in reached if k < 0]) <= 6, "the browser's own stops, at what scrolls"
    assert [html for seen, html in ringed if not seen] == []


def test_a_hostile_name_runs_nothing(chrome: Browser, tmp_path: Path) -> None:
    name = "<img src=x onerror=alert(1)><script>alert(1)</script>"
    laid = [Laid(part.x_mm, part.y_mm, part.yaw_deg, name) for part in scattered(4, 4, 90.0)]
    stream = belt(laid, 10.0, 150.0, name=name, parts={name: {"grasp_mm": 3.0, "height_mm": 6.0, "places": [name]}},
                  places=[{"name": name, "origin_mm": [-60.0, 260.0, -40.0], "endless": True}])  # fmt: skip
    hostile = made(stream, tmp_path)
    write_page(tmp_path / "report.html", hostile.seen, hostile.setting, hostile.run, hostile.figures())
    chrome.log("browser")
    chrome.requested()
    chrome.open(tmp_path / "report.html")
    chrome.js("document.querySelector('#picks a').click()")
    assert chrome.js("return document.title") == f"{name}: replay"
    assert name in chrome.js("return document.getElementById('now').textContent")
    assert chrome.js("return document.scripts.length") == 2
    assert chrome.log("browser") == []
    assert {address.split(":")[0] for address in chrome.requested()} <= {"file", "data"}
