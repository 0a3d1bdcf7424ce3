"""Colours by what they mean, for a light and a dark page.

The colours of steps were chosen by a search that keeps any two of them apart for full colour vision, protanopia and
deuteranopia alike; a test simulates all three. Nothing is told by colour alone: steps differ in marker and dash,
waits in their hatching, and every figure has its numbers beside it.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

#: Bokeh draws on a canvas, which knows no style sheet: on a change of theme the page replaces these colours in it,
#: one by one. So all colours of the light page must differ.
LIGHT: Final[Mapping[str, str]] = {
    "paper": "#fbfaf6",
    "raised": "#f3f1ea",
    "ink": "#1b2330",
    "soft": "#525c6b",
    "grid": "#e4e1d8",
    "axis": "#848a93",
    "lockstep": "#3d4a6b",
    "tasked": "#ab4118",
    "shade_lockstep": "#b4bac7",
    "shade_tasked": "#e4b8a4",
    "back": "#fbf0ea",
    "wait": "#d6d2c3",
    "hatch": "#6f6c60",
    "machine": "#7c838e",
    "stolen": "#a49d92",
    "ramp_low": "#f2eee1",
    "ramp_high": "#4a2a1c",
    "step1": "#2357ae",
    "step2": "#c38514",
    "step3": "#156d52",
    "step4": "#7d3774",
    "step5": "#4d96d3",
    "step6": "#768542",
    "step7": "#692d11",
    "step8": "#cb789b",
}
DARK: Final[Mapping[str, str]] = {
    "paper": "#14181e",
    "raised": "#1d222a",
    "ink": "#ebe8df",
    "soft": "#aab2be",
    "grid": "#2c323c",
    "axis": "#737b88",
    "lockstep": "#9fb2e8",
    "tasked": "#f18d62",
    "shade_lockstep": "#435070",
    "shade_tasked": "#713d29",
    "back": "#261b17",
    "wait": "#4b4a43",
    "hatch": "#a9a596",
    "machine": "#7e8694",
    "stolen": "#5e5a55",
    "ramp_low": "#242a32",
    "ramp_high": "#f6dca6",
    "step1": "#7f9be6",
    "step2": "#dba629",
    "step3": "#71cd9b",
    "step4": "#b66ea9",
    "step5": "#97e7ff",
    "step6": "#b5c561",
    "step7": "#c48863",
    "step8": "#e59ec4",
}
STEPS: Final = tuple(f"step{number}" for number in range(1, 9))
MARKERS: Final = ("circle", "square", "triangle", "diamond", "inverted_triangle", "hex", "star", "plus")
DASHES: Final = ("solid", "dashed", "dotted", "dashdot", "solid", "dashed", "dotted", "dashdot")
#: Hatching of what is no physics, by account.
HATCHES: Final[Mapping[str, str]] = {
    "neighbour": "dot",
    "reduction": "horizontal_line",
    "barrier": "right_diagonal_line",
    "transfer": "cross",
    "unemployed": "blank",
    "engine": "blank",
    "stolen": "left_diagonal_line",
}


def step_tokens(parts: list[str]) -> dict[str, str]:
    """A colour's name for each step, in the order given."""
    return {step: STEPS[place % len(STEPS)] for place, step in enumerate(parts)}
