"""Lines over cycles and over time: unevenness by step, and live memory."""

from __future__ import annotations

from typing import Any

from bokeh.models import ColumnDataSource, Span
from bokeh.plotting import figure

from breakstep.report.page.figures.style import hover, new_figure, words
from breakstep.report.page.palette import DASHES, LIGHT, MARKERS, STEPS
from breakstep.report.wording import size


def unevenness_figure(panel: dict[str, Any], tokens: dict[str, str]) -> figure:
    """Busiest worker over mean worker, a line a step."""
    cycles = panel["cycles"]
    highest = max((v for row in panel["busiest_over_mean"] for v in row if v is not None), default=1.0)
    edge = max(0.5, 0.02 * (cycles[-1] - cycles[0]))
    plot = new_figure(
        230, (cycles[0] - edge, cycles[-1] + edge), (0.97 - 0.03 * highest, 1.0 + 1.12 * (highest - 1.0) + 0.02),
        name="unevenness",
    )  # fmt: skip
    plot.xaxis.axis_label = "cycle" if panel["cycles_per_bin"] == 1 else f"cycle, {panel['cycles_per_bin']} a point"
    plot.yaxis.axis_label = "busiest ÷ mean worker"
    plot.xgrid.grid_line_color = None
    drawn = []
    for place, step in enumerate(panel["steps"]):
        drawn.append(_uneven_line(plot, panel, place, step, LIGHT[tokens.get(step, "machine")]))
    hover(plot, drawn, [("", "step"), ("cycle", "cycle"), ("busiest ÷ mean", "shown")])
    plot.add_layout(
        Span(location=cycles[0], dimension="height", line_color=LIGHT["ink"], line_dash="dotted", name="cycle")
    )
    return plot


def _uneven_line(plot: figure, panel: dict[str, Any], place: int, step: str, colour: str) -> Any:
    found = [(c, v) for c, v in zip(panel["cycles"], panel["busiest_over_mean"][place], strict=True) if v is not None]
    source = ColumnDataSource(
        {
            "cycle": [c for c, _ in found],
            "value": [v for _, v in found],
            "shown": [f"{v:g}" for _, v in found],
            "step": [step for _ in found],
        }
    )
    width = 2.5 if place < 2 else 1.5
    plot.line("cycle", "value", source=source, line_color=colour, line_width=width, line_dash=DASHES[place % 8])
    marker = MARKERS[place % len(MARKERS)]
    return plot.scatter(
        "cycle", "value", source=source, marker=marker, size=7, fill_color=colour, line_color=LIGHT["paper"],
        name=f"uneven-{step}",
    )  # fmt: skip


def memory_figure(panel: dict[str, Any]) -> figure:
    """Live bytes of both runs, each with its high-water mark."""
    end = max(side["edges_s"][-1] for side in panel.values())
    top = max(side["peak_bytes"] for side in panel.values()) or 1
    unit, factor = _unit(top)
    plot = new_figure(230, (0, end), (0, 1.32 * top / factor), name="memory")
    plot.xaxis.axis_label, plot.yaxis.axis_label = "wall time, s", f"live, {unit}"
    plot.xgrid.grid_line_color = None
    drawn = []
    for side, found in panel.items():
        drawn.append(_memory_line(plot, found, side, factor))
        _peak(plot, found, side, factor, end)
    hover(plot, drawn, [("", "side"), ("from", "when"), ("live, at most", "shown")], mode="vline")
    return plot


def _memory_line(plot: figure, found: dict[str, Any], side: str, factor: float) -> Any:
    """The line, and bins under it that cannot be seen and that the pointer meets at any height."""
    edges, counts = found["edges_s"], found["bytes"]
    heights = [count / factor for count in counts]
    dash = "solid" if side == "tasked" else "dashed"
    plot.step(edges, [*heights, *heights[-1:]], mode="after", line_color=LIGHT[side], line_width=2, line_dash=dash)
    source = ColumnDataSource(
        {
            "left": edges[:-1], "right": edges[1:], "top": heights, "shown": [size(count) for count in counts],
            "when": [f"{moment:.3f} s" for moment in edges[:-1]], "side": [side] * len(counts),
        }
    )  # fmt: skip
    return plot.quad(
        source=source, left="left", right="right", top="top", bottom=0, fill_alpha=0, line_alpha=0,
        name=f"memory-{side}",
    )  # fmt: skip


def kinds_figure(found: dict[str, Any], side: str) -> figure:
    """Live bytes of one run by kind of data, a line a kind."""
    edges, kinds = found["edges_s"], found["bytes_by_data"]
    unit, factor = _unit(max(max(counts) for counts in kinds.values()) or 1)
    top = max(max(counts) for counts in kinds.values()) / factor
    plot = new_figure(200, (0, edges[-1]), (0, 1.08 * top or 1), name="memory-kinds")
    plot.xaxis.axis_label, plot.yaxis.axis_label = f"wall time, s, {side}", f"live, {unit}"
    plot.xgrid.grid_line_color = None
    drawn = []
    for place, (data, counts) in enumerate(kinds.items()):
        heights = [count / factor for count in counts]
        colour, dash = LIGHT[STEPS[place]], DASHES[place]
        plot.step(edges, [*heights, *heights[-1:]], mode="after", line_color=colour, line_width=2, line_dash=dash)
        source = ColumnDataSource(
            {
                "left": edges[:-1], "right": edges[1:], "top": heights, "shown": [size(count) for count in counts],
                "data": [data] * len(counts),
            }
        )  # fmt: skip
        drawn.append(
            plot.quad(source=source, left="left", right="right", top="top", bottom=0, fill_alpha=0, line_alpha=0)
        )
    hover(plot, drawn, [("", "data"), ("live, at most", "shown")], mode="vline")
    return plot


def _peak(plot: figure, found: dict[str, Any], side: str, factor: float, end: float) -> None:
    x, y = found["peak_s"], found["peak_bytes"] / factor
    plot.scatter([x], [y], marker="circle", size=9, fill_color=LIGHT["paper"], line_color=LIGHT[side], line_width=2)
    offset = -14 if side == "tasked" else -30
    words(
        plot, x=[x], y=[y], text=[f"{side}: {size(found['peak_bytes'])}"], text_color=LIGHT[side], y_offset=offset,
        text_align="left" if x < 0.35 * end else "right" if x > 0.65 * end else "center", text_font_style="bold",
    )  # fmt: skip


def _unit(top: float) -> tuple[str, float]:
    for unit, factor in (("GB", 1e9), ("MB", 1e6), ("kB", 1e3)):
        if top >= factor:
            return unit, factor
    return "bytes", 1.0
