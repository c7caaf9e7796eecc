"""The page in a real browser: Chromium, headless, driven by Selenium.

A user's machine may have no browser, and then these tests are skipped, which says so; where CI is
set they fail instead.
"""

from __future__ import annotations

import os
import re
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from nipc.report import panel

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
DRIVER = shutil.which("chromedriver")
pytestmark = pytest.mark.skipif(
    (CHROMIUM is None or DRIVER is None) and not os.environ.get("CI"),
    reason="needs chromium and chromedriver (Debian: apt install chromium chromium-driver)",
)
WIDTHS = (1280, 768, 400)
RESULTS = ("slot", "hard", "minimal")
SWITCHES = (
    "--headless=new",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
)


HIDDEN = """
    const box = arguments[0].getBoundingClientRect(), bar = document.getElementById('clock');
    const top = bar.getBoundingClientRect().top;
    return !bar.contains(arguments[0]) && box.top > top - 4 && box.height > 0;"""


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Any]:
    if CHROMIUM is None or DRIVER is None:
        pytest.fail("CI has no chromium or no chromedriver: install both")
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    options = webdriver.ChromeOptions()
    options.binary_location = CHROMIUM
    for switch in (*SWITCHES, f"--user-data-dir={tmp_path_factory.mktemp('browser')}"):
        options.add_argument(switch)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL"})
    driver = webdriver.Chrome(options=options, service=Service(DRIVER))
    yield driver
    driver.quit()


@pytest.fixture(scope="module")
def addresses(pages: dict[str, str], tmp_path_factory: pytest.TempPathFactory) -> dict[str, str]:
    folder = tmp_path_factory.mktemp("pages")
    for name, text in pages.items():
        (folder / f"{name}.html").write_text(text, "utf-8")
    return {name: (folder / f"{name}.html").as_uri() for name in pages}


def show(browser: Any, address: str, width: int = 1280, scripts: bool = True) -> None:
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": not scripts})
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "", "features": []})
    browser.execute_cdp_cmd(
        "Emulation.setDeviceMetricsOverride",
        {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": False},
    )
    browser.get(address)


def put(browser: Any, selector: str, value: Any, event: str = "input") -> None:
    """What a user's hand does to a control."""
    browser.execute_script(
        "const c = document.querySelector(arguments[0]); c.value = arguments[1];"
        "c.dispatchEvent(new Event(arguments[2], { bubbles: true }));",
        selector,
        value,
        event,
    )


def readout(browser: Any, kind: str, quantity: str) -> str:
    selector = f'figure[data-kind="{kind}"][data-quantity="{quantity}"] .readout'
    return str(browser.find_element("css selector", selector).get_property("textContent"))


@pytest.mark.parametrize("width", WIDTHS)
@pytest.mark.parametrize("result", RESULTS)
def test_everything_is_there_and_fits(
    browser: Any, addresses: dict[str, str], result: str, width: int
) -> None:
    show(browser, addresses[result], width)
    assert browser.execute_script("return document.documentElement.scrollWidth") <= width
    plots = browser.execute_script("""
        return [...document.querySelectorAll('.plot svg')]
          .filter(svg => !svg.closest('[hidden]'))
          .map(svg => {
            const box = svg.getBoundingClientRect();
            const outside = [...svg.querySelectorAll('text')].filter(text => {
              const b = text.getBoundingClientRect();
              return b.left < box.left - 1 || b.right > box.right + 1
                || b.top < box.top - 1 || b.bottom > box.bottom + 1;
            }).map(text => text.textContent);
            return [box.width, box.height, svg.querySelectorAll('path').length, outside];
          });""")
    assert len(plots) >= {"slot": 26, "hard": 15, "minimal": 2}[result]
    for wide, high, paths, outside in plots:
        assert wide > 0.8 * min(width, 450)
        assert high > 60
        assert paths >= 4
        assert outside == []
    assert [entry for entry in browser.get_log("browser") if entry["level"] != "INFO"] == []


@pytest.mark.parametrize("width", WIDTHS)
def test_texts_of_figures_do_not_meet(browser: Any, addresses: dict[str, str], width: int) -> None:
    """With the browser's own letters, which are not those that the figures were laid out with."""
    for result in RESULTS:
        show(browser, addresses[result], width)
        meeting = browser.execute_script("""
            const found = [];
            for (const svg of document.querySelectorAll('.plot svg')) {
              const boxes = [...svg.querySelectorAll('text')].filter(t => t.textContent.trim())
                .map(t => [t.textContent, t.getBoundingClientRect()]);
              boxes.forEach(([one, a], i) => boxes.slice(i + 1).forEach(([other, b]) => {
                if (a.left < b.right - 1.5 && b.left < a.right - 1.5
                    && a.top < b.bottom - 1.5 && b.top < a.bottom - 1.5) {
                  found.push([svg.closest('figure').id, one, other]);
                }
              }));
            }
            return found;""")
        assert meeting == [], result


def test_the_slider_reads_values_off_every_figure(
    browser: Any, addresses: dict[str, str], slot: xr.Dataset
) -> None:
    from selenium.webdriver.common.keys import Keys

    show(browser, addresses["slot"])
    slider = browser.find_element("css selector", "#clock-range")
    slider.send_keys(Keys.HOME)
    for _ in range(3):
        slider.send_keys(Keys.ARROW_RIGHT)
    index = 3
    time = float(slot["time"].values[index])  # 0.25 d
    here = slot.sel(quantity="longitude").isel(time=index)
    words = readout(browser, "bands", "longitude")
    assert words.startswith("At 0.25\u202fd:")
    assert f"median {float(here['quantile'].sel(level=0.5)):.3f}\u202fdeg" in words
    shares = readout(browser, "driver_shares", "radius")
    share = float(slot["driver_first"].sel(quantity="radius", source="start").isel(time=index))
    assert f"start {100 * share:.1f}\u202f%" in shares
    place = browser.execute_script("""
        const figure = document.querySelector('figure[data-kind="bands"]');
        const { frame } = JSON.parse(figure.querySelector('script.data').textContent);
        return [Number(figure.querySelector('.cursor').getAttribute('x1')), frame];""")
    frame = place[1]
    part = (time - frame["start"]) / (frame["end"] - frame["start"])
    assert place[0] == pytest.approx(frame["left"] + part * (frame["right"] - frame["left"]))
    slider.send_keys(Keys.END)
    words = readout(browser, "bands", "longitude")
    last = slot.sel(quantity="longitude").isel(time=-1)
    assert words.startswith("At 28\u202fd‡:")  # past every trust horizon
    assert f"97.5 % {float(last['quantile'].sel(level=0.975)):.3f}\u202fdeg" in words
    assert f"inside {float(last['inside_probability']):.3f}" in readout(
        browser, "confinement", "longitude"
    )


def test_pointing_at_a_figure_reads_it_there(
    browser: Any, addresses: dict[str, str], slot: xr.Dataset
) -> None:
    from selenium.webdriver import ActionChains

    show(browser, addresses["slot"])
    plot = browser.find_element("css selector", 'figure[data-kind="bands"] .plot')
    browser.execute_script("arguments[0].scrollIntoView({block: 'center'})", plot)
    ActionChains(browser).move_to_element(plot).perform()
    words = readout(browser, "bands", "radius")
    found = re.match(r"At ([\d.]+)\u202fd: median ([\d.]+)\u202fkm", words)
    assert found is not None, words
    assert 10 < float(found[1]) < 18  # the middle of the drawing, a little right of half time
    near = (
        slot["quantile"]
        .sel(quantity="radius", level=0.5)
        .sel(time=float(found[1]), method="nearest")
    )
    assert float(found[2]) == pytest.approx(float(near), abs=0.011)
    assert readout(browser, "bands", "longitude").startswith("At 28\u202fd")  # the others stay


@pytest.mark.parametrize(
    ("quantity", "scales", "edges"),
    [
        (1, (1.0, 0.5, 1.0), (74.95, 75.05)),
        (1, (2.0, 1.7, 0.0), (74.97, 75.02)),
        (0, (0.3, 1.0, 1.4), (42162.0, 42168.0)),
        (2, (1.0, 2.0, 2.0), (None, -4.72679)),
    ],
)
def test_the_panel_answers_as_python_does(
    browser: Any,
    addresses: dict[str, str],
    slot: xr.Dataset,
    quantity: int,
    scales: tuple[float, ...],
    edges: tuple[float | None, float | None],
) -> None:
    """To plotting accuracy: 16 bits of each contribution leave 1e-4 of the spread."""
    show(browser, addresses["slot"])
    put(browser, "#whatif-quantity", str(quantity), "change")
    for index, scale in enumerate(scales):
        put(browser, f"#whatif-{index}", str(scale))
    for side, edge in zip(("low", "high"), edges, strict=True):
        put(browser, f"#whatif-{side}", "" if edge is None else str(edge))
    now = browser.execute_script("return nipc.panel.state().now")
    kept = panel.read(slot)
    assert kept is not None
    low, high = (-np.inf if edges[0] is None else edges[0]), edges[1]
    assert high is not None
    expected = panel.answer(kept, np.array(scales), quantity, low, high)
    spread = float(expected.std.max())
    assert np.array(now["quantiles"]) == pytest.approx(expected.quantiles, abs=1e-4 * spread)
    assert np.array(now["std"]) == pytest.approx(expected.std, abs=1e-4 * spread)
    # a member within 1e-4 of the spread of an edge may change sides: allow two of 600
    assert np.array(now["inside"]) == pytest.approx(expected.inside, abs=2.1 / 600)
    for name in ("first", "total"):
        found = np.array(now[name], dtype=float)  # null becomes NaN
        assert found == pytest.approx(getattr(expected, name), abs=1e-3, nan_ok=True)
    words = browser.find_element("css selector", '[data-part="said"]').text
    assert f"inside {now['inside'][-1]:.3f}" in words
    assert words.startswith("At 28\u202fd")


def test_the_panel_draws_its_answers_and_goes_back(browser: Any, addresses: dict[str, str]) -> None:
    show(browser, addresses["slot"])
    band = "return document.querySelector('#whatif-band').innerHTML"
    shares = "return document.querySelector('#whatif-shares').innerHTML"
    before = browser.execute_script(band), browser.execute_script(shares)
    put(browser, "#whatif-1", "0.2")
    assert browser.execute_script(band) != before[0]
    assert browser.execute_script(shares) != before[1]
    button = browser.find_element("css selector", '[data-part="reset"]')
    browser.execute_script("arguments[0].scrollIntoView({block: 'center'})", button)
    button.click()
    assert (browser.execute_script(band), browser.execute_script(shares)) == before
    put(browser, "#whatif-quantity", "2", "change")
    inside = browser.find_element("css selector", "#whatif-inside")
    assert not inside.is_displayed()  # energy has no box
    put(browser, "#whatif-high", "-4.7268")
    assert inside.is_displayed()
    put(browser, "#whatif-high", "not a number")
    assert [e for e in browser.get_log("browser") if e["level"] == "SEVERE"] == []


def test_the_cloud_follows_the_slider(browser: Any, addresses: dict[str, str]) -> None:
    show(browser, addresses["slot"])
    cloud = "return document.querySelector('#whatif-cloud').innerHTML"
    before = browser.execute_script(cloud)
    put(browser, "#clock-range", "100")
    assert browser.execute_script(cloud) != before


def test_controls_are_reached_by_keyboard(browser: Any, addresses: dict[str, str]) -> None:
    from selenium.webdriver.common.keys import Keys

    show(browser, addresses["slot"])
    seen = []
    for _ in range(60):
        browser.switch_to.active_element.send_keys(Keys.TAB)
        focus = browser.switch_to.active_element
        seen.append(focus.get_attribute("id") or focus.get_attribute("data-part"))
        assert browser.execute_script(HIDDEN, focus) is False, seen[-1]
    wanted = [
        "whatif-quantity",
        "whatif-low",
        "whatif-high",
        "whatif-0",
        "whatif-1",
        "whatif-2",
        "reset",
        "clock-range",
    ]
    assert [each for each in seen if each in wanted][:8] == wanted
    knob = browser.find_element("css selector", "#whatif-1")
    knob.send_keys(Keys.ARROW_LEFT)
    assert browser.execute_script("return nipc.panel.state().scales[1]") == pytest.approx(0.99)


def test_without_scripts_it_is_a_paper(browser: Any, addresses: dict[str, str]) -> None:
    show(browser, addresses["slot"], scripts=False)
    figures = browser.find_elements("css selector", "figure .plot svg")
    assert len(figures) >= 22
    assert all(each.size["height"] > 60 for each in figures)
    assert not browser.find_element("css selector", "#clock").is_displayed()
    assert not browser.find_element("css selector", "#whatif form").is_displayed()
    text = browser.find_element("css selector", "body").text
    assert "0.802" in text
    assert "nipc whatif" in text
    assert "With scripts on" in text


def test_dark_and_print(browser: Any, addresses: dict[str, str]) -> None:
    show(browser, addresses["slot"])
    ground = "return getComputedStyle(document.documentElement).backgroundColor"
    curve = """return getComputedStyle(document.querySelector(
        'figure[data-kind="bands"] path[style*="--main"]')).stroke"""
    light = browser.execute_script(ground), browser.execute_script(curve)
    browser.execute_cdp_cmd(
        "Emulation.setEmulatedMedia",
        {"features": [{"name": "prefers-color-scheme", "value": "dark"}]},
    )
    dark = browser.execute_script(ground), browser.execute_script(curve)
    assert light == ("rgb(252, 251, 248)", "rgb(36, 80, 122)")
    assert dark == ("rgb(22, 25, 29)", "rgb(143, 187, 230)")
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    assert browser.execute_script(ground) == "rgb(255, 255, 255)"
    assert not browser.find_element("css selector", "#clock").is_displayed()
    show(browser, addresses["slot"], width=700)  # A4 between its margins
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    assert browser.execute_script("return document.documentElement.scrollWidth") <= 700
    printed = browser.execute_cdp_cmd("Page.printToPDF", {"printBackground": True})
    assert len(printed["data"]) > 50_000


def test_hostile_names_do_not_run(browser: Any, addresses: dict[str, str]) -> None:
    from selenium.common.exceptions import NoAlertPresentException

    show(browser, addresses["hard"])
    with pytest.raises(NoAlertPresentException):
        browser.switch_to.alert.accept()
    assert browser.title.startswith("</title><script>")
    assert Path(browser.current_url).name == "hard.html"
