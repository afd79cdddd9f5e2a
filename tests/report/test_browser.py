"""Pages in a real browser: they work, ask for nothing, and print."""

from __future__ import annotations

import base64
import json
import os
import re
import shutil
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

from finished_sample import build_result

from xrdmica.report.page import write_pages, write_sample_page

pytestmark = pytest.mark.filterwarnings("ignore::DeprecationWarning", "ignore::ResourceWarning")

HOSTILE = "</script><script>document.title='taken'</script>\"' عينة 样品 " + "x" * 200


def _found() -> tuple[str, str] | None:
    browser = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
    driver = shutil.which("chromedriver")
    return (browser, driver) if browser and driver else None


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    places = _found()
    if places is None:
        if os.environ.get("CI"):
            pytest.fail("no browser is installed: install chromium and chromedriver, these tests are never skipped here")
        pytest.skip("no chromium with chromedriver is installed")
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    options = webdriver.ChromeOptions()
    options.binary_location = places[0]
    for flag in ("--headless=new", "--no-sandbox", "--disable-dev-shm-usage", "--hide-scrollbars"):
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    driver = webdriver.Chrome(options=options, service=Service(places[1]))
    yield driver
    driver.quit()


@pytest.fixture(scope="module")
def pages(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    folder = tmp_path_factory.mktemp("pages")
    written = write_pages([build_result("S1"), build_result(HOSTILE, verdict="no"), build_result("S3")], folder / "many")
    return {
        "single": write_sample_page(build_result("S12"), folder / "single.html"),
        "overview": written[0], "shared": written[1], "hostile": written[2],
    }  # fmt: skip


def until(condition: Callable[[], Any], seconds: float = 20) -> Any:
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        value = condition()
        if value:
            return value
        time.sleep(0.05)
    raise AssertionError("the page did not get there in time")


def open_page(browser: Any, path: Path, width: int = 1200, height: int = 1500, *, chart: bool = True) -> list[str]:
    """Open a page; return the addresses it asked for."""
    size = {"width": width, "height": height, "deviceScaleFactor": 1, "mobile": False}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    browser.get("about:blank")
    for kind in ("browser", "performance"):
        browser.get_log(kind)
    browser.get(path.as_uri())
    if chart:
        until(lambda: browser.execute_script("return document.querySelector('#plot[data-ready] .main-svg') !== null"))
    messages = [json.loads(entry["message"])["message"] for entry in browser.get_log("performance")]
    return [m["params"]["request"]["url"] for m in messages if m["method"] == "Network.requestWillBeSent"]


@pytest.mark.parametrize("name", ["single", "shared", "hostile", "overview"])
def test_loads_quietly_and_asks_for_nothing(browser: Any, pages: dict[str, Path], name: str) -> None:
    asked = open_page(browser, pages[name], chart=name != "overview")
    assert [entry for entry in browser.get_log("browser") if entry["level"] in ("SEVERE", "WARNING")] == []
    mine = {pages[name].as_uri()} | ({(pages[name].parent / "plotting.js").as_uri()} if name in ("shared", "hostile") else set())
    assert set(asked) == mine
    assert browser.title != "taken"
    # the policy holds for what comes later, too
    blocked = browser.execute_async_script(
        "const done = arguments[0]; fetch('https://example.org/').then(() => done('went out'), () => done('blocked'));"
    )
    assert blocked == "blocked"
    brands = "return document.querySelectorAll('.modebar, .plotly-logo').length + document.links.length - "
    brands += "Array.from(document.links).filter(a => /^file:/.test(a.href)).length"
    assert browser.execute_script(brands) == 0


def test_pointing_at_a_curve_tells_the_spacing(browser: Any, pages: dict[str, Path]) -> None:
    from selenium.webdriver.common.action_chains import ActionChains

    open_page(browser, pages["single"])
    # the illite 001 of the sample stands at 10.02 angstrom
    at = browser.execute_script(
        "const p = document.getElementById('plot'), l = p._fullLayout, t = p.data.find(t => t.meta === 'observed:0');"
        "p.scrollIntoView({block: 'start', behavior: 'instant'}); let i = t.x.findIndex(x => x > 8.8);"
        "const r = p.getBoundingClientRect(); return [r.left + l.xaxis._offset + l.xaxis.d2p(t.x[i]),"
        " r.top + l.yaxis._offset + l.yaxis.d2p(t.y[i])];"
    )
    chain = ActionChains(browser)
    chain.w3c_actions.pointer_action.move_to_location(int(at[0]) - 3, int(at[1]))
    chain.w3c_actions.pointer_action.move_to_location(int(at[0]), int(at[1]))
    chain.perform()
    text = until(lambda: browser.execute_script("return document.querySelector('#plot .hoverlayer').textContent"))
    assert re.search(r"2θ 8\.\d\d", text)
    # Bragg: 1.5418 / (2 sin(8.82/2)) is 10.02, worked out by hand
    spacing = float(re.search(r"d (\d+\.\d+) Å", text)[1])  # type: ignore[index]
    assert spacing == pytest.approx(10.02, abs=0.12)
    assert "001" in text


def curves(browser: Any) -> list[str]:
    return list(browser.execute_script("return document.getElementById('plot').data.map(t => t.meta)"))


def click(browser: Any, selector: str) -> None:
    browser.execute_script("document.querySelector(arguments[0]).click()", selector)


def test_switches_change_the_chart(browser: Any, pages: dict[str, Path]) -> None:
    open_page(browser, pages["shared"])
    before = curves(browser)
    assert before.count("phase:kaolinite") == 3  # lost at 550
    drawn = "return document.querySelectorAll('#plot .scatterlayer .trace').length"
    traces = browser.execute_script(drawn)
    click(browser, "input[name=phase][value=kaolinite]")
    after = curves(browser)
    assert "phase:kaolinite" not in after
    assert browser.execute_script(drawn) < traces
    click(browser, "input[name=phase][value=kaolinite]")
    assert curves(browser) == before
    for curve in ("observed", "calculated", "background", "residual"):
        click(browser, f"input[name=curve][value={curve}]")
        assert not [meta for meta in curves(browser) if meta.split(":")[0] == curve]
        click(browser, f"input[name=curve][value={curve}]")
    click(browser, "#which-scans input")
    assert "observed:0" not in curves(browser)
    click(browser, "#which-scans input")
    top = "return Math.max(...document.getElementById('plot').data.find(t => t.meta === 'observed:0').y)"
    root = browser.execute_script(top)
    click(browser, "input[value=linear]")
    linear = browser.execute_script(top)
    assert linear == pytest.approx(root**2)
    click(browser, "input[value=log]")
    assert 10 ** browser.execute_script(top) == pytest.approx(linear)
    axes = "return new Set(document.getElementById('plot').data.map(t => t.yaxis)).size"
    assert browser.execute_script(axes) == 8
    click(browser, "input[value=overlaid]")
    assert browser.execute_script(axes) == 2


def test_keys_zoom_and_move(browser: Any, pages: dict[str, Path]) -> None:
    from selenium.webdriver.common.keys import Keys

    open_page(browser, pages["shared"])
    span = "return document.getElementById('plot')._fullLayout.xaxis.range"
    whole = browser.execute_script(span)
    plot = browser.find_element("id", "plot")
    plot.send_keys("+")
    near = browser.execute_script(span)
    assert near[1] - near[0] == pytest.approx(0.6 * (whole[1] - whole[0]))
    plot.send_keys(Keys.ARROW_RIGHT)
    assert browser.execute_script(span)[0] > near[0]
    plot.send_keys("0")
    assert browser.execute_script(span) == pytest.approx(whole)
    unnamed = "return Array.from(document.querySelectorAll('input, button, a, [role=img]')).filter(e =>"
    unnamed += " !(e.textContent.trim() || e.getAttribute('aria-label') || (e.labels && e.labels.length))).length"
    assert browser.execute_script(unnamed) == 0


def test_tables_sort(browser: Any, pages: dict[str, Path]) -> None:
    open_page(browser, pages["single"])
    names = "return Array.from(document.querySelectorAll('.weights tbody th bdi')).map(e => e.textContent)"
    assert browser.execute_script(names) == ["Illite", "Kaolinite", "Smectite", "Chlorite", "Talc"]
    button = browser.find_element("css selector", ".weights thead th:nth-child(1) button")
    button.send_keys("\n")
    assert browser.execute_script(names) == ["Chlorite", "Illite", "Kaolinite", "Smectite", "Talc"]
    click(browser, ".weights thead th:nth-child(3) button")
    click(browser, ".weights thead th:nth-child(3) button")
    assert browser.execute_script(names)[0] == "Talc"
    assert browser.execute_script("return document.querySelectorAll('.weights [aria-sort=ascending]').length") == 1


def test_overview_finds(browser: Any, pages: dict[str, Path]) -> None:
    open_page(browser, pages["overview"], chart=False)
    browser.find_element("id", "find").send_keys("s3")
    shown = "return Array.from(document.querySelectorAll('#samples tbody tr')).filter(r => !r.hidden).length"
    assert browser.execute_script(shown) == 1
    browser.find_element("link text", "S3").click()
    until(lambda: browser.execute_script("return document.querySelector('#plot[data-ready]') !== null"))


@pytest.mark.parametrize("name", ["single", "hostile"])
def test_prints_two_pages_of_a4(browser: Any, pages: dict[str, Path], name: str) -> None:
    open_page(browser, pages[name])
    printed = browser.execute_cdp_cmd("Page.printToPDF", {"preferCSSPageSize": True, "printBackground": True})
    content = base64.b64decode(printed["data"])
    assert len(re.findall(rb"/Type\s*/Page\b", content)) == 2
    sizes = re.findall(rb"/MediaBox\s*\[\s*0 0 ([\d.]+) ([\d.]+)\s*\]", content)
    # ISO 216: A4 is 210 by 297 mm, 595.3 by 841.9 points
    assert {(round(float(w)), round(float(h))) for w, h in sizes} <= {(595, 842), (596, 842), (595, 841)}


@pytest.mark.parametrize("name", ["single", "hostile", "overview"])
def test_narrow_screens_need_no_sideways_scroll(browser: Any, pages: dict[str, Path], name: str) -> None:
    open_page(browser, pages[name], width=380, height=800, chart=name != "overview")
    assert browser.execute_script("return document.documentElement.scrollWidth") <= 380
    if name != "overview":
        assert browser.execute_script("return document.querySelector('#plot .main-svg').getBoundingClientRect().width") <= 380


def test_dark(browser: Any, pages: dict[str, Path]) -> None:
    open_page(browser, pages["single"])
    ground = "return getComputedStyle(document.body).backgroundColor"
    observed = "return document.getElementById('plot').data.find(t => t.meta === 'observed:0').line.color"
    light = browser.execute_script(ground), browser.execute_script(observed)
    click(browser, "[data-theme-switch]")
    dark = browser.execute_script(ground), browser.execute_script(observed)
    assert light[0] != dark[0]
    assert light[1] != dark[1]
