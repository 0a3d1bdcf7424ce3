"""Core-second columns: both runs on one scale, equal parts joined by ribbons, what is handed back dashed."""

from __future__ import annotations

from typing import Any

import numpy as np
from bokeh.models import ColumnDataSource
from bokeh.plotting import figure
from numpy.typing import NDArray

from breakstep.report.page.figures.style import hover, new_figure, words
from breakstep.report.page.palette import HATCHES, LIGHT, step_tokens

HEIGHT = 480
WIDTH = 1.0  # of a column
_LEFT = {"lockstep": 0.0, "tasked": 2.0}
#: Least part of the figure's height in which a ribbon's name can be read.
_ROOM = 0.035


def columns_figure(panel: dict[str, Any]) -> figure:
    """Columns of the runs that are there."""
    sides = list(panel["total_core_s"])
    top = max(panel["total_core_s"].values())
    plot = new_figure(
        HEIGHT,
        (_LEFT[sides[0]] - 0.05, _LEFT[sides[-1]] + (1.05 if len(sides) == 2 else 1.6)),
        (-0.01 * top, 1.11 * top),
        name="columns",
    )
    plot.axis.visible = False
    plot.grid.grid_line_color = None
    bottoms = {side: _bottoms(panel, side) for side in sides}
    if len(sides) == 2:
        _ribbons(plot, panel, bottoms, top)
    drawn = [quad for side in sides for quad in _column(plot, panel, side, bottoms[side])]
    hover(plot, drawn, [("", "words"), ("core-seconds", "core_s"), ("of the run, %", "percent")])
    for side in sides:
        total = panel["total_core_s"][side]
        words(
            plot, x=[_LEFT[side] + WIDTH / 2], y=[max(top, total) * 1.075], text=[side], text_align="center",
            text_color=LIGHT[side], text_font_style="bold", text_font_size="15px",
        )  # fmt: skip
    if len(sides) == 2:
        _handed_back(plot, panel, top)
    return plot


def tokens_of(panel: dict[str, Any]) -> dict[str, str]:
    """The colour's name of each part."""
    steps = [part["name"] for part in panel["parts"] if part["kind"] == "step"]
    return {
        **step_tokens(steps),
        **{part["name"]: _token(part) for part in panel["parts"] if part["kind"] != "step"},
    }


def _token(part: dict[str, Any]) -> str:
    if part["kind"] == "machine":
        return "stolen" if part["name"] == "stolen" else "machine"
    return "wait"


def _bottoms(panel: dict[str, Any], side: str) -> list[float]:
    amounts = [part["core_s"][side] for part in panel["parts"]]
    return [0.0, *np.cumsum(amounts).tolist()]


def _column(plot: figure, panel: dict[str, Any], side: str, bottoms: list[float]) -> list[Any]:
    tokens, left = tokens_of(panel), _LEFT[side]
    drawn = []
    for place, part in enumerate(panel["parts"]):
        source = ColumnDataSource(
            {
                "left": [left], "right": [left + WIDTH],
                "bottom": [bottoms[place]], "top": [bottoms[place + 1]],
                "words": [f"{part['words']}, {side}"],
                "core_s": [f"{part['core_s'][side]:.4g}"], "percent": [f"{100 * part['share'][side]:.1f}"],
            }
        )  # fmt: skip
        drawn.append(
            plot.quad(
                source=source, left="left", right="right", bottom="bottom", top="top",
                fill_color=LIGHT[tokens[part["name"]]], line_color=LIGHT["paper"], line_width=1.5,
                hatch_pattern=HATCHES.get(part["name"], "blank"), hatch_color=LIGHT["hatch"], hatch_scale=9,
                name=f"column-{side}-{part['name']}",
            )
        )  # fmt: skip
    return drawn


def _ribbons(plot: figure, panel: dict[str, Any], bottoms: dict[str, list[float]], top: float) -> None:
    """Equal parts joined, with their names where there is room for them."""
    tokens = tokens_of(panel)
    x = np.linspace(_LEFT["lockstep"] + WIDTH, _LEFT["tasked"], 32)
    bend = _smooth(np.linspace(0.0, 1.0, 32))
    names: list[tuple[float, str]] = []
    for place, part in enumerate(panel["parts"]):
        low, high = (
            bottoms["lockstep"][at] + bend * (bottoms["tasked"][at] - bottoms["lockstep"][at])
            for at in (place, place + 1)
        )
        plot.patch(
            np.concatenate([x, x[::-1]]), np.concatenate([low, high[::-1]]),
            fill_color=LIGHT[tokens[part["name"]]], fill_alpha=0.22, line_color=None,
        )  # fmt: skip
        middle = len(x) // 2
        if high[middle] - low[middle] > _ROOM * top:
            names.append((float(high[middle] + low[middle]) / 2, _short(part)))
    words(plot, x=[1.5] * len(names), y=[y for y, _ in names], text=[n for _, n in names], text_align="center")


def _short(part: dict[str, Any]) -> str:
    names = {
        "neighbour": "neighbour", "reduction": "reduction", "barrier": "barrier", "transfer": "bytes",
        "unemployed": "out of work", "engine": "dispatch", "stolen": "no processor",
    }  # fmt: skip
    return names.get(part["name"], str(part["name"]))


def _smooth(t: NDArray[np.float64]) -> NDArray[np.float64]:
    return t * t * (3.0 - 2.0 * t)


def _handed_back(plot: figure, panel: dict[str, Any], top: float) -> None:
    """A dashed box on top of the shorter column, as high as the difference."""
    handed = panel["handed_back_core_s"]
    if abs(handed) < 0.005 * top:
        return
    side = "tasked" if handed > 0 else "lockstep"
    low, left = panel["total_core_s"][side], _LEFT[side]
    plot.quad(
        left=[left], right=[left + WIDTH], bottom=[low], top=[low + abs(handed)],
        fill_color=LIGHT["back"], line_color=LIGHT["tasked"], line_dash="dashed", line_width=1.5, name="handed-back",
    )  # fmt: skip
    text = f"{abs(handed):.3g} core-s"
    tail = "handed back" if handed > 0 else "more when tasked"
    inside = abs(handed) > 2.2 * _ROOM * top
    place, align = (WIDTH / 2, "center") if inside else (WIDTH, "right") if handed > 0 else (0.0, "left")
    words(
        plot, x=[left + place], y=[low + abs(handed) / 2 if inside else low + abs(handed) + 0.02 * top],
        text=[f"{text}\n{tail}" if inside else f"{text} {tail}"], text_align=align, text_color=LIGHT["tasked"],
    )  # fmt: skip
