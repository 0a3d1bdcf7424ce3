"""What pointing, clicking and the keyboard read off the page equals the numbers that ``--json`` writes."""

from __future__ import annotations

import re
from typing import Any

import pytest
from playwright.sync_api import Page

from tests.page.conftest import Open

pytestmark = [pytest.mark.page, pytest.mark.slow]

#: The middle of each run's column, on the figure's own axis.
COLUMN = {"lockstep": 0.5, "tasked": 2.5}
#: Where a value of a figure's axes is on the screen.
_PIXEL = """([name, x, y]) => {
    const view = breakstep.views[name], place = document.getElementById(`plot-${name}`);
    place.scrollIntoView({block: "center", behavior: "instant"});
    const box = place.getBoundingClientRect();
    return [box.left + view.frame.x_scale.compute(x), box.top + view.frame.y_scale.compute(y)];
}"""


def pixel(page: Page, figure: str, x: float, y: float) -> tuple[float, float]:
    left, top = page.evaluate(_PIXEL, [figure, x, y])
    return left, top


def tip_at(page: Page, figure: str, x: float, y: float) -> str:
    """The text of the tip that appears when the pointer goes there."""
    page.mouse.move(2, 2)
    page.mouse.move(*pixel(page, figure, x, y))
    page.locator(".tip").first.wait_for(state="visible", timeout=3000)
    return "\n".join(page.locator(".tip").all_inner_texts())


def cycle_at(fronts: dict[str, Any], cell: int, moment: float) -> str:
    """The cycle that a cell is in: that of the last front that has passed it."""
    if moment >= fronts["span_s"]:
        return "end"
    passed = [c for c, row in zip(fronts["cycles"], fronts["front_s"], strict=False) if row[cell] <= moment]
    return str(passed[-1]) if passed else "\u2013"


def moment_of(page: Page, data: dict[str, Any]) -> float:
    end = max(panel["span_s"] for panel in data["fronts"].values())
    return end * float(page.locator("#moment").input_value()) / 1000


def test_pointing_at_a_column_reads_its_core_seconds(opened: Open) -> None:
    found = opened()
    for side, middle in COLUMN.items():
        bottom = 0.0
        for part in found.data["columns"]["parts"]:
            height = part["core_s"][side]
            if height > 0.05 * found.data["columns"]["total_core_s"][side]:  # thinner ones are hard to point at
                tip = tip_at(found.page, "columns", middle, bottom + height / 2)
                assert f"{part['words']}, {side}" in tip
                assert f"core-seconds {height:.4g}" in tip
                assert f"of the run, % {100 * part['share'][side]:.1f}" in tip
            bottom += height


def test_pointing_at_lines_reads_their_points(opened: Open) -> None:
    found = opened()
    costs = found.data["costs"]
    for place, step in enumerate(costs["steps"][:2]):
        tip = tip_at(found.page, "unevenness", costs["cycles"][1], costs["busiest_over_mean"][place][1])
        assert f"{step}\ncycle 1\nbusiest ÷ mean {costs['busiest_over_mean'][place][1]:g}" in tip
    memory = found.data["memory"]["tasked"]
    bin_ = len(memory["bytes"]) // 2
    x = (memory["edges_s"][bin_] + memory["edges_s"][bin_ + 1]) / 2
    tip = tip_at(found.page, "memory", x, 0.5)
    assert f"tasked\nfrom {memory['edges_s'][bin_]:.3f} s\nlive, at most {memory['bytes'][bin_] / 1000:.1f} kB" in tip


def test_pointing_at_forecasts_reads_their_figures(opened: Open) -> None:
    found = opened()
    row = found.data["forecast"]["scaling"]["rows"][2]
    assert "forecast 2.60 s" in tip_at(found.page, "scaling", row["workers"], row["tasked_s"])
    grain = found.data["forecast"]["grain"]["rows"][2]
    assert "tasks 400" in tip_at(found.page, "grain-tasked", 2, grain["tasked_s"])
    tip = tip_at(found.page, "barriers", 0.15, 0)
    assert "burn\nin this order, s 0.31" in tip


def test_the_arrow_keys_move_the_moment_and_maps_follow(opened: Open) -> None:
    found = opened()
    slider = found.page.locator("#moment")
    slider.focus()
    before = int(slider.input_value())
    for _ in range(3):
        found.page.keyboard.press("ArrowRight")
    assert int(slider.input_value()) == before + 3
    for place in (50, 333, 700, 1000):
        slider.evaluate("(e, v) => { e.value = v; e.dispatchEvent(new Event('input')); }", place)
        for side, fronts in found.data["fronts"].items():
            shown = found.page.locator(f"[data-map=moment-{side}] text").all_text_contents()
            moment = moment_of(found.page, found.data)
            assert shown == [cycle_at(fronts, cell, moment) for cell in range(len(shown))]


@pytest.mark.parametrize("how", ["point", "click"])
def test_pointing_and_clicking_at_fronts_read_tile_and_moment(opened: Open, how: str) -> None:
    found = opened()
    x, y = pixel(found.page, "fronts-tasked", 0.05, 2.5)
    (found.page.mouse.move if how == "point" else found.page.mouse.click)(x, y)
    assert moment_of(found.page, found.data) == pytest.approx(0.05, abs=0.001)  # a pixel is 0.2 ms, a notch 0.16 ms
    said = found.page.locator("#fronts-readout").inner_text()
    assert f"tile {found.data['cells']['labels'][2]}" in said
    for side, fronts in found.data["fronts"].items():
        assert f"{side} in cycle {cycle_at(fronts, 2, moment_of(found.page, found.data))}" in said


def test_pointing_and_keys_read_the_cost_of_a_tile(opened: Open) -> None:
    found = opened()
    costs, labels = found.data["costs"], found.data["cells"]["labels"]
    slider = found.page.locator("#cycle")
    slider.focus()
    found.page.keyboard.press("Home")
    found.page.keyboard.press("ArrowRight")
    readout = found.page.locator("#costs-readout")
    for cell, label in enumerate(labels):
        found.page.locator(f"[data-map=cost-0] [data-cell='{cell}']").hover()
        value = costs["relative"][0][1][cell]
        assert (
            readout.inner_text()
            == f"{costs['steps'][0]}, cycle 1, tile {label}: {shown(value)} times the mean tile's cost."
        )
    found.page.locator("[data-map=cost-1]").focus()
    found.page.keyboard.press("ArrowRight")
    cell = labels.index(re.search(r"tile ([\d,]+):", readout.inner_text())[1])  # type: ignore[index]
    assert f"{shown(costs['relative'][1][1][cell])} times" in readout.inner_text()


def shown(value: float) -> str:
    """As the browser writes a number."""
    return f"{value:.15g}"


def test_the_keyboard_goes_from_tile_to_tile_along_the_map(opened: Open) -> None:
    found = opened()
    cells = found.data["cells"]
    grid = found.page.locator("[data-map=bytes]")
    grid.focus()
    chosen = grid.locator(".cell.chosen")
    for key, change in (("ArrowRight", (1, 0)), ("ArrowDown", (0, 1)), ("ArrowLeft", (-1, 0)), ("ArrowUp", (0, -1))):
        before = cells["places"][int(chosen.get_attribute("data-cell"))]
        found.page.keyboard.press(key)
        after = cells["places"][int(chosen.get_attribute("data-cell"))]
        wanted = [before[0] + change[0], before[1] + change[1]]
        assert after == (wanted if wanted in cells["places"] else before)


def test_the_bytes_of_a_tile_are_those_of_its_faces(opened: Open) -> None:
    found = opened()
    traffic = found.data["traffic"]["tasked"]
    found.page.locator("[data-map=bytes] [data-cell='0']").click()
    own = sum(count for a, b, count in traffic["faces"] if 0 in (a, b))
    assert f"{own / 1000:.1f} kB to and from other workers" in found.page.locator("#bytes-readout").inner_text()


def test_the_tables_hold_the_ledger_to_the_nanosecond(opened: Open) -> None:
    found = opened()
    for side_column, side in ((2, "lockstep"), (4, "tasked")):
        accounts = found.data["accounts"][side]
        for account, ns in accounts["accounts_ns"].items():
            cell = found.page.locator(f"[data-account={account}] > :nth-child({side_column})")
            assert int(re.sub(r"\s", "", cell.inner_text())) == ns
        assert sum(accounts["accounts_ns"].values()) == accounts["available_ns"]
        assert sum(link["ns"] for link in found.data["chain"][side]["links"]) == found.data["chain"][side]["wait_ns"]


def test_the_head_says_what_the_numbers_say(opened: Open) -> None:
    found = opened()
    head = found.data["headline"]
    assert found.page.locator("h1").inner_text() == head["sentence"]
    assert found.page.locator("[data-key=gain]").inner_text() == f"{head['gain']['median']:.2f}\u00d7"
    assert head["verdict"]["words"] in found.page.locator(".verdict").inner_text()
    for answer in found.data["answers"]:
        assert found.page.get_by_text(answer["question"], exact=True).count() == 1
        assert found.page.get_by_text(answer["answer"], exact=True).count() == 1


def test_the_words_are_explained_and_advice_is_marked(opened: Open) -> None:
    found = opened()
    words = found.page.locator("details.words")
    assert not words.locator("dl").is_visible()
    words.locator("summary").click()
    assert words.locator("dt", has_text="lockstep, tasked").is_visible()
    listed = found.page.locator(".advice li").all_inner_texts()
    for row, text in zip(found.data["forecast"]["advice"], listed, strict=True):
        assert row["do"].lower() in text.lower()
        assert ("Not certain to gain" in text) == row["uncertain"]
    assert found.data["answers"][-1]["answer"].lower().startswith(found.data["forecast"]["advice"][0]["do"].lower())
