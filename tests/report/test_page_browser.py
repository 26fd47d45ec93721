"""The page in a real browser: offline, on phone, laptop and paper, light and dark. Needs Debian's `chromium`."""

from __future__ import annotations

import importlib.util
import os
import re
import shutil
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from types import ModuleType

import cv2
import numpy as np
import pytest
from playwright.sync_api import Browser, Page, sync_playwright

from vidkin.report.page import report_page
from vidkin.stages import Analysis, Motion

FLAGS = [
    "--no-sandbox", "--disable-gpu", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync",
]  # fmt: skip
EVIL = "<script>window.hit=1</script><img src=x onerror=window.hit=1>"


def _conftest() -> ModuleType:
    spec = importlib.util.spec_from_file_location("report_scenario", Path(__file__).with_name("conftest.py"))
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    found = shutil.which("chromium")
    if found is None and "CI" not in os.environ:
        pytest.skip("chromium is not installed (Debian's package 'chromium'); in CI this fails")
    assert found is not None, "chromium is not installed: install Debian's package 'chromium'"
    with sync_playwright() as play:
        browser = play.chromium.launch(executable_path=found, args=FLAGS)
        yield browser
        browser.close()


@pytest.fixture(scope="module")
def scene() -> Analysis:
    made = _conftest().make_analysis()
    assert isinstance(made, Analysis)
    return replace(made, rep=replace(made.rep, athlete=replace(made.rep.athlete, label=EVIL)))


@pytest.fixture(scope="module")
def address(scene: Analysis, tmp_path_factory: pytest.TempPathFactory) -> str:
    picture = np.full((1080, 1920, 3), 90, np.uint8)
    path = tmp_path_factory.mktemp("page") / "report.html"
    path.write_text(report_page(scene, overlay_png=bytes(cv2.imencode(".png", picture)[1])), encoding="utf-8")
    return path.as_uri()


def open_page(
    browser: Browser, address: str, width: int, height: int, scheme: str
) -> tuple[Page, list[str], list[str]]:
    context = browser.new_context(
        viewport={"width": width, "height": height},
        color_scheme=scheme,  # type: ignore[arg-type]
        offline=True,
    )
    page = context.new_page()
    asked: list[str] = []
    complaints: list[str] = []
    page.on("request", lambda r: asked.append(r.url))
    page.on("console", lambda m: complaints.append(m.text))
    page.on("pageerror", lambda e: complaints.append(str(e)))
    page.goto(address)
    return page, asked, complaints


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize(("width", "height"), [(390, 844), (1280, 800)])
def test_it_opens_offline_and_fits(browser: Browser, address: str, width: int, height: int, scheme: str) -> None:
    page, asked, complaints = open_page(browser, address, width, height, scheme)
    assert [a for a in asked if not a.startswith("data:")] == [address]
    assert complaints == []
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    assert page.evaluate("window.hit") is None
    assert page.locator("h1").inner_text() == EVIL
    assert page.evaluate("document.querySelector('img').naturalWidth") == 1600
    background = page.evaluate("getComputedStyle(document.body).backgroundColor")
    level = int(re.findall(r"\d+", background)[0])
    assert level > 200 if scheme == "light" else level < 60
    shown = "narrow" if width < 500 else "wide"
    assert page.locator(f"#chart-speed-time svg.{shown}").is_visible()
    assert page.locator("#chart-speed-time svg:visible").count() == 1
    page.context.close()


def test_text_stands_out_from_its_ground(browser: Browser, address: str) -> None:
    """Contrast of text at least 4.5:1 (W3C WCAG 2.1, success criterion 1.4.3; MEM, value from memory)."""

    def luminance(colour: str) -> float:
        c = np.array([int(n) for n in re.findall(r"\d+", colour)[:3]]) / 255
        linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)
        return float(linear @ [0.2126, 0.7152, 0.0722])

    for scheme in ("light", "dark"):
        page, _, _ = open_page(browser, address, 1280, 800, scheme)
        ground = luminance(page.evaluate("getComputedStyle(document.body).backgroundColor"))
        for where in ("h1", "header p", ".notices .warning b", ".note", "td", "figcaption", ".readout"):
            ink = luminance(page.evaluate(f"getComputedStyle(document.querySelector('{where}')).color"))
            ratio = (max(ink, ground) + 0.05) / (min(ink, ground) + 0.05)
            assert ratio >= 4.5, (scheme, where, ratio)
        page.context.close()


def test_pointing_reads_the_measured_speed_off(browser: Browser, address: str, scene: Analysis) -> None:
    motion = scene.motion
    assert isinstance(motion, Motion)
    page, _, complaints = open_page(browser, address, 1280, 800, "light")
    chart = page.locator("#chart-speed-time")
    chart.scroll_into_view_if_needed()
    drawing = chart.locator("svg.wide")
    box = drawing.bounding_box()
    assert box is not None
    page.mouse.move(box["x"] + 0.6 * box["width"], box["y"] + 0.5 * box["height"])
    said = chart.locator(".readout").inner_text()
    found = re.match(r"(−?[\d.]+) s .*?measured, with 95 % interval: ([\d.]+) \(([\d.]+) to ([\d.]+)\) m/s", said)
    assert found is not None, said
    t, v, low, high = (float(g.replace("−", "-")) for g in found.groups())
    left, right, start, end = (
        float(drawing.get_attribute(f"data-{k}") or "") for k in ("left", "right", "low", "high")
    )
    assert t == pytest.approx(start + (0.6 * 720 - left) / (right - left) * (end - start), abs=0.01)
    grid = drawing.locator("text.mid:not(.label)").all_text_contents()
    assert "0.0" in grid
    zero = drawing.locator("text.mid:not(.label)").nth(grid.index("0.0")).get_attribute("x")
    assert float(zero or "nan") == pytest.approx(left - start / (end - start) * (right - left), abs=0.1)
    assert abs(v - np.interp(t + 0.55, motion.t_s, motion.v_mps)) < 0.03
    assert low < v < high
    assert "law: mono-exponential:" in said
    page.mouse.move(5, 5)
    assert chart.locator(".readout").inner_text() == ""
    drawing.focus()
    page.keyboard.press("ArrowRight")
    first = chart.locator(".readout").inner_text()
    page.keyboard.press("Shift+ArrowRight")
    assert chart.locator(".readout").inner_text() != first != ""
    page.keyboard.press("Escape")
    assert chart.locator(".readout").inner_text() == ""
    assert complaints == []
    page.context.close()


def test_it_prints_on_a4_in_dark_ink(browser: Browser, address: str) -> None:
    page, _, _ = open_page(browser, address, 1280, 800, "dark")
    page.emulate_media(media="print", color_scheme="dark")
    assert page.evaluate("getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"
    assert page.evaluate("getComputedStyle(document.querySelector('h1')).color") == "rgb(0, 0, 0)"
    assert not page.locator("#chart-speed-time .readout").is_visible()
    sheet = page.pdf(prefer_css_page_size=True)
    boxes = re.findall(rb"/MediaBox \[0 0 ([\d.]+) ([\d.]+)\]", sheet)
    assert 4 <= len(boxes) <= 14
    # ISO 216: A4 is 210 mm x 297 mm = 595.3 pt x 841.9 pt.
    assert all(abs(float(w) - 595.3) < 1 and abs(float(h) - 841.9) < 1 for w, h in boxes)
    page.context.close()


def test_it_works_without_script(browser: Browser, address: str) -> None:
    context = browser.new_context(java_script_enabled=False, offline=True)
    page = context.new_page()
    page.goto(address)
    assert page.locator("#chart-speed-time svg.wide path").count() > 3
    context.close()
