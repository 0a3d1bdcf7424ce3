"""The page as a whole: no network, no complaint, both themes readable, text stays text, print gives whole pages."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import pytest
from axe_playwright_python.sync_playwright import Axe

from breakstep.report.page.palette import DARK, LIGHT
from breakstep.report.page.runs import Runs, runs_of
from tests.page.conftest import Open, recorded, write_page
from tests.page.test_reading import COLUMN, tip_at

pytestmark = [pytest.mark.page, pytest.mark.slow]


@pytest.mark.parametrize("theme", ["light", "dark"])
@pytest.mark.parametrize("size", ["wide", "phone"])
def test_the_page_asks_for_nothing_and_complains_of_nothing(opened: Open, size: str, theme: str) -> None:
    found = opened(size, theme)
    found.page.locator("#theme").click()
    found.page.locator("#theme").click()
    found.page.mouse.wheel(0, 20_000)
    assert [url for url in found.requests if not url.startswith(("file:", "data:"))] == []
    assert len([url for url in found.requests if url.startswith("file:")]) == 1
    assert found.complaints == []


@pytest.mark.parametrize("theme", ["light", "dark"])
@pytest.mark.parametrize("size", ["wide", "phone"])
def test_an_accessibility_checker_finds_nothing(opened: Open, size: str, theme: str) -> None:
    """axe-core with all its rules, contrast of 4.5:1 among them."""
    found = opened(size, theme)
    for details in found.page.locator("details").all():
        details.evaluate("one => { one.open = true; }")
    results = Axe().run(found.page)
    assert results.violations_count == 0, results.generate_report()
    assert any(rule["id"] == "color-contrast" for rule in results.response["passes"])


def test_the_switch_of_themes_reaches_the_figures(opened: Open) -> None:
    """Every colour of every figure belongs to the theme that is shown, before and after the switch."""
    found = opened()
    colours = """() => Object.values(breakstep.views).flatMap(view => [...view.model.references()].flatMap(model =>
        [...model].filter(p => p.attr.endsWith("_color")).map(p => p.get_value())
            .map(v => v && typeof v === "object" && "value" in v ? v.value : v)
            .filter(v => typeof v === "string" && v.startsWith("#"))))"""
    for wanted, other in ((LIGHT, DARK), (DARK, LIGHT), (LIGHT, DARK)):
        used = set(found.page.evaluate(colours))
        assert used & set(wanted.values())
        assert not used & (set(other.values()) - set(wanted.values()))
        background = found.page.evaluate("getComputedStyle(document.body).backgroundColor")
        assert background == "rgb({}, {}, {})".format(*(int(wanted["paper"][i : i + 2], 16) for i in (1, 3, 5)))
        found.page.locator("#theme").click()


def test_a_scenario_titled_with_markup_stays_text(opened: Open, tmp_path: Path) -> None:
    title = "<script>window.broken = 1</script><img src=x onerror='window.broken = 1'></title> & \"so\" on"
    sides = [recorded("lockstep"), recorded("tasked")]
    for profile in sides:
        profile.manifest["scenario"]["title"] = title
        profile.manifest["scenario"]["name"] = "</script><b id='bold'>{{ 7 * 7 }}"
        profile.manifest["scenario"]["resolved"]["description"] = title
        profile.manifest["machine"]["model"] = "<b id='bold'>"
    found = opened(which=write_page(runs_of(sides[:1], sides[1:]), tmp_path))
    assert title in found.page.locator(".lede").first.inner_text()
    assert "{{ 7 * 7 }}" in found.page.title()
    assert found.page.evaluate("window.broken") is None
    assert found.page.locator("#bold").count() == 0
    assert found.page.locator("img").count() == 0
    assert found.complaints == []


def test_print_gives_whole_pages(opened: Open, tmp_path: Path) -> None:
    """Nothing is wider than a page or, where it must not be cut, higher; every table of numbers is printed."""
    found = opened()
    found.page.emulate_media(media="print")
    found.page.set_viewport_size({"width": 686, "height": 1000})  # A4 less its margins, (210 - 28) mm
    found.page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
    found.page.wait_for_timeout(200)
    assert found.page.evaluate("document.documentElement.scrollWidth") <= 686
    whole = found.page.locator(".plot, .map, .keys, .answers div, tr")
    boxes = [box for one in whole.all() if (box := one.bounding_box())]
    assert max(box["height"] for box in boxes) < 1009  # (297 - 30) mm
    assert max(box["x"] + box["width"] for box in boxes) <= 687
    assert found.page.locator("details:not([open])").count() == 0
    found.page.emulate_media(media="screen")
    found.page.set_viewport_size({"width": 1280, "height": 900})
    pdf = found.page.pdf(path=tmp_path / "page.pdf", prefer_css_page_size=True)
    boxes_of_pages = re.findall(rb"/MediaBox\s*\[\s*0 0 ([\d.]+) ([\d.]+)\s*\]", pdf)
    assert len(boxes_of_pages) >= 4
    for width, height in boxes_of_pages:  # A4 in points, to the point
        assert (round(float(width)), round(float(height))) == (595, 842)


def test_a_phone_shows_everything_without_scrolling_sideways(opened: Open) -> None:
    found = opened("phone")
    assert found.page.evaluate("document.documentElement.scrollWidth") <= 390
    for plot in found.page.locator(".plot").all():
        box = plot.bounding_box()
        assert box is not None
        assert 0 <= box["x"] <= 390 - box["width"]
        assert box["width"] > 300


def test_the_skip_link_comes_first_and_focus_is_seen(opened: Open) -> None:
    found = opened()
    found.page.keyboard.press("Tab")
    focused = found.page.evaluate(
        "() => [document.activeElement.textContent, document.activeElement.getBoundingClientRect().left,"
        " getComputedStyle(document.activeElement).outlineStyle]"
    )
    assert focused == ["Skip to the answer", 8, "solid"]
    found.page.keyboard.press("Enter")
    assert found.page.evaluate("document.activeElement.id") == "main"


def largest_at(data: dict[str, Any], side: str) -> int:
    """Which part of a column is the largest."""
    amounts = [part["core_s"][side] for part in data["columns"]["parts"]]
    return amounts.index(max(amounts))


@pytest.mark.parametrize("side", ["lockstep", "tasked"])
def test_one_run_alone_shows_what_can_be_shown(opened: Open, tmp_path: Path, side: str) -> None:
    runs = Runs(recorded(side), None) if side == "lockstep" else Runs(None, recorded(side))
    found = opened(which=write_page(runs, tmp_path, forecast=None))
    assert found.complaints == []
    assert found.page.locator("[data-key=gain]").count() == 0
    largest = max(found.data["columns"]["parts"], key=lambda part: part["core_s"][side])
    bottom = sum(part["core_s"][side] for part in found.data["columns"]["parts"][: largest_at(found.data, side)])
    tip = tip_at(found.page, "columns", COLUMN[side], bottom + largest["core_s"][side] / 2)
    assert f"core-seconds {largest['core_s'][side]:.4g}" in tip
    found.page.mouse.move(2, 2)  # a tip that follows the pointer lies outside the page's landmarks
    found.page.locator(".tip").first.wait_for(state="hidden")
    assert Axe().run(found.page).violations_count == 0
