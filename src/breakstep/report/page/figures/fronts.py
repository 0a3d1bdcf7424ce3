"""Step fronts: curves of equal cycle over wall time, with shade before each curve for idle cores."""

from __future__ import annotations

from typing import Any

import numpy as np
from bokeh.models import ColumnDataSource, Span
from bokeh.plotting import figure
from numpy.typing import NDArray

from breakstep.report.page.figures.style import new_figure, words
from breakstep.report.page.palette import LIGHT
from breakstep.report.wording import seconds

HEIGHT = 300
LABELS = 8  # bold curves


def fronts_figure(panel: dict[str, Any], side: str, end_s: float) -> figure:
    """One run's fronts on an axis of time that reaches to ``end_s``, the longer run's end [s]."""
    cells = len(panel["front_s"][0])
    plot = new_figure(HEIGHT, (-0.004 * end_s, 1.004 * end_s), (0, 1.09 * cells), name=f"fronts-{side}")
    plot.ygrid.grid_line_color = None
    plot.xaxis.axis_label = "wall time, s"
    plot.yaxis.axis_label = "tile, along the curve"
    plot.yaxis.ticker = _ticks(cells)
    plot.yaxis.bounds = (0, cells)
    fronts, idle = np.asarray(panel["front_s"]), np.asarray(panel["idle_s"])
    _shade(plot, fronts, idle, LIGHT[f"shade_{side}"])
    _lines(plot, fronts, panel["cycles"], side)
    if panel["span_s"] < 0.97 * end_s:
        _handed_back(plot, panel["span_s"], end_s, cells, side)
    plot.add_layout(
        Span(location=0, dimension="height", line_color=LIGHT["ink"], line_dash="dotted", name=f"moment-{side}")
    )
    return plot


def _ticks(cells: int) -> list[int]:
    step = max(1, cells // 8)
    return list(range(0, cells + 1, step))


def _rows(values: NDArray[np.float64]) -> NDArray[np.float32]:
    """Values of cells at their rows' middles, carried on to the figure's lower and upper edge."""
    return np.concatenate([values[:1], values, values[-1:]]).astype(np.float32)


def _heights(cells: int) -> NDArray[np.float32]:
    return np.concatenate([[0.0], np.arange(cells) + 0.5, [float(cells)]]).astype(np.float32)


def _shade(plot: figure, fronts: NDArray[np.float64], idle: NDArray[np.float64], colour: str) -> None:
    y = _heights(fronts.shape[1])
    shown = [row for row in range(1, len(fronts)) if idle[row].max() > 0]
    xs = [np.concatenate([_rows(fronts[row] - idle[row]), _rows(fronts[row])[::-1]]) for row in shown]
    ys = [np.concatenate([y, y[::-1]]) for _ in shown]
    plot.patches(xs, ys, fill_color=colour, line_color=None)


def _lines(plot: figure, fronts: NDArray[np.float64], cycles: list[int], side: str) -> None:
    """Thin lines, and bold ones with a number every few cycles."""
    y = _heights(fronts.shape[1])
    every = max(1, -(-len(cycles) // LABELS))
    bold = list(range(0, len(cycles), every))
    thin = [row for row in range(len(cycles)) if row not in bold]
    for rows, width in ((thin, 0.9), ([*bold, len(cycles)], 2.0)):
        source = ColumnDataSource({"xs": [_rows(fronts[row]) for row in rows], "ys": [y for _ in rows]})
        plot.multi_line("xs", "ys", source=source, line_color=LIGHT["ink"], line_width=width)
    _numbers(
        plot, [(float(fronts[row][-1]), str(cycles[row])) for row in bold], float(fronts[-1][-1]), fronts.shape[1], side
    )


def _numbers(plot: figure, found: list[tuple[float, str]], end: float, cells: int, side: str) -> None:
    """Cycles above their lines, as far as they stand apart; a phone shows the axis 270 pixels wide."""
    room, top = 0.065 * float(plot.x_range.end), 1.045 * cells
    shown: list[tuple[float, str]] = []
    for x, text in found:
        if (not shown or x - shown[-1][0] > room) and end - x > 1.7 * room:
            shown.append((x, text))
    words(plot, x=[x for x, _ in shown], y=[top] * len(shown), text=[text for _, text in shown], text_align="center")
    words(plot, x=[end], y=[top], text=["end"], text_align="right", text_color=LIGHT[side], text_font_style="bold")


def _handed_back(plot: figure, begin: float, end: float, cells: int, side: str) -> None:
    plot.quad(
        left=[begin], right=[end], bottom=[0], top=[cells],
        fill_color=LIGHT["back"], line_color=LIGHT[side], line_dash="dashed",
    )  # fmt: skip
    handed = seconds(end - begin)
    fits = end - begin > 0.12 * end
    words(
        plot, x=[(begin + end) / 2], y=[cells / 2], text=[f"{handed}\nhanded back" if fits else handed],
        text_align="center", text_color=LIGHT[side], text_font_size="15px", angle=0 if fits else np.pi / 2,
    )  # fmt: skip
