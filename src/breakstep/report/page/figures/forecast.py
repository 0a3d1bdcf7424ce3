"""Forecasts: run time against workers, barriers in the order of their value, run time against tile size."""

from __future__ import annotations

import math
from typing import Any

from bokeh.models import ColumnDataSource, FixedTicker, Span
from bokeh.plotting import figure

from breakstep.report.page.figures.style import hover, new_figure, on_paper, words
from breakstep.report.page.palette import LIGHT
from breakstep.report.wording import seconds

_SIDES = ("lockstep", "tasked")
_LAYERS = {"compute_s": "wait", "engine_s": "machine", "wait_s": "shade_tasked"}  # and their colours


def scaling_figure(panel: dict[str, Any]) -> figure:
    """Forecast run time over workers, both axes logarithmic, with what no schedule can beat."""
    rows = panel["rows"]
    workers = [row["workers"] for row in rows]
    times = [row[f"{side}_{end}_s"] for row in rows for side in _SIDES for end in ("low", "high")]
    bound = [row["least_s"] for row in rows]
    low, high = min(*times, *bound) * 0.8, max(times) * 1.25
    plot = new_figure(
        340, (workers[0] * 0.85, workers[-1] * 1.18), (low, high), x_axis_type="log", y_axis_type="log", name="scaling",
    )  # fmt: skip
    plot.xaxis.axis_label, plot.yaxis.axis_label = "workers of the machine", "forecast run time, s"
    plot.xaxis.ticker = FixedTicker(ticks=workers)
    plot.xaxis.major_label_overrides = {count: str(count) for count in workers}
    plot.yaxis.ticker = FixedTicker(ticks=_round_values(low, high))
    plot.yaxis.major_label_overrides = {value: f"{value:g}" for value in _round_values(low, high)}
    plot.varea(x=workers, y1=[low] * len(rows), y2=bound, fill_color=LIGHT["raised"])
    plot.line(workers, bound, line_color=LIGHT["axis"], line_width=1.2)
    words(plot, x=[workers[0]], y=[low * 1.12], text=[" out of reach on any schedule"], text_color=LIGHT["soft"],
          text_font_style="italic")  # fmt: skip
    drawn = [_scaling_line(plot, rows, workers, side) for side in _SIDES]
    _gains(plot, rows[:-1])
    hover(plot, drawn, [("", "side"), ("workers", "workers"), ("forecast", "shown"), ("between", "range")])
    return plot


def _scaling_line(plot: figure, rows: list[dict[str, Any]], workers: list[int], side: str) -> Any:
    times = [row[f"{side}_s"] for row in rows]
    lows, highs = ([row[f"{side}_{end}_s"] for row in rows] for end in ("low", "high"))
    plot.varea(x=workers, y1=lows, y2=highs, fill_color=LIGHT[f"shade_{side}"], fill_alpha=0.6)
    source = ColumnDataSource(
        {
            "workers": workers, "time": times, "side": [side] * len(rows), "shown": [seconds(t) for t in times],
            "range": [f"{seconds(a)} and {seconds(b)}" for a, b in zip(lows, highs, strict=True)],
        }
    )  # fmt: skip
    dash, marker = ("dashed", "square") if side == "lockstep" else ("solid", "circle")
    plot.line("workers", "time", source=source, line_color=LIGHT[side], line_width=2.4, line_dash=dash)
    last = times[-1]
    words(plot, x=[workers[-1]], y=[last], text=[f"{side} {seconds(last)}"], text_color=LIGHT[side], text_align="right",
          text_font_style="bold", y_offset=-24 if side == "lockstep" else 24, **on_paper())  # fmt: skip
    return plot.scatter("workers", "time", source=source, marker=marker, size=8, fill_color=LIGHT[side],
                        line_color=LIGHT["paper"], name=f"scaling-{side}")  # fmt: skip


def _gains(plot: figure, rows: list[dict[str, Any]]) -> None:
    """How many times as fast tasks are, between the two lines where there is room."""
    apart = [row for row in rows if row["lockstep_s"] > 1.15 * row["tasked_s"]]
    words(
        plot, x=[row["workers"] for row in apart], y=[math.sqrt(row["lockstep_s"] * row["tasked_s"]) for row in apart],
        text=[f"{row['lockstep_s'] / row['tasked_s']:.2f}\u00d7" for row in apart], text_align="right", x_offset=-6,
        text_font_style="bold", **on_paper(),
    )  # fmt: skip


def _round_values(low: float, high: float) -> list[float]:
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    values = [digit * 10.0**power for power in decades for digit in (1, 2, 3, 5, 7)]
    return [float(f"{value:.3g}") for value in values if low <= value <= high]


def in_order(panel: dict[str, Any]) -> list[dict[str, Any]]:
    """The ranking in the order of removal, each row with what is handed back before (``from_s``) and with it."""
    ranking = sorted(panel["ranking"], key=lambda row: row.get("place_in_order", 0))  # stable: else as given
    rows, reached = [], 0.0
    for row in ranking:
        rows.append({**row, "from_s": reached, "until_s": reached + row["in_order_s"]})
        reached += row["in_order_s"]
    return rows


def barriers_figure(panel: dict[str, Any]) -> figure:
    """Seconds handed back as barriers go one after another, best next one first; diamonds: each alone."""
    rows = in_order(panel)
    count = len(rows)
    places = [-place for place in range(count)]
    ends = [row[key] for row in rows for key in ("from_s", "until_s", "alone_s")]
    left, right = min(0.0, *ends), max(*ends, 1e-9)
    reach = right - left
    plot = new_figure(
        70 + 46 * count, (left - 0.06 * reach, right + 0.3 * reach), (-count + 0.4, 0.75), name="barriers"
    )
    plot.xaxis.axis_label = "wall time handed back of the lockstep run, s"
    plot.yaxis.visible = False
    plot.ygrid.grid_line_color = None
    source = ColumnDataSource(
        {
            "y": places, "left": [row["from_s"] for row in rows], "right": [row["until_s"] for row in rows],
            "what": [row["what"] for row in rows], "alone": [row["alone_s"] for row in rows],
            "alone_shown": [_minus(f"{row['alone_s']:.4g}") for row in rows],
            "step_shown": [_minus(f"{row['in_order_s']:.4g}") for row in rows],
        }
    )  # fmt: skip
    plot.segment([0.0] * count, places, [row["alone_s"] for row in rows], places, line_color=LIGHT["axis"])
    plot.add_layout(Span(location=0, dimension="height", line_color=LIGHT["axis"]))
    bars = plot.hbar(y="y", left="left", right="right", height=0.22, source=source, fill_color=LIGHT["tasked"],
                     line_color=None, name="barrier-bars")  # fmt: skip
    plot.scatter("right", "y", source=source, size=11, fill_color=LIGHT["tasked"], line_color=LIGHT["paper"])
    diamonds = plot.scatter("alone", "y", source=source, size=9, marker="diamond", fill_color=LIGHT["paper"],
                            line_color=LIGHT["ink"], line_width=1.5)  # fmt: skip
    names = [f"{place + 1}. {row['what']}" for place, row in enumerate(rows)]
    words(plot, x=[left - 0.02 * reach] * count, y=[0.4 + y for y in places], text=names)
    words(plot, x=[max(row["from_s"], row["until_s"], row["alone_s"]) for row in rows], y=places,
          text=[f"{_signed(row['in_order_s'])} s" for row in rows], text_color=LIGHT["tasked"], text_font_style="bold",
          x_offset=12)  # fmt: skip
    hover(plot, [bars, diamonds], [("", "what"), ("in this order, s", "step_shown"), ("alone, s", "alone_shown")])
    return plot


def _minus(text: str) -> str:
    return text.replace("-", "\u2212")


def _signed(value: float) -> str:
    """With its sign, unless it is nothing."""
    return _minus(f"{value:+.2g}") if value else "0"


def grain_figure(panel: dict[str, Any], side: str) -> figure:
    """Run time over tile size; the lowest point is marked."""
    rows = sorted(panel["rows"], key=lambda row: row["tile"] if isinstance(row["tile"], int | float) else -row["tasks"])
    names = [_tile_name(row["tile"]) for row in rows]
    times = [row[f"{side}_s"] for row in rows]
    top = 1.25 * max(max(row[f"{s}_s"] for s in _SIDES) for row in rows)
    plot = new_figure(260, (-0.4, len(rows) - 0.6), (0, top), name=f"grain-{side}")
    plot.xaxis.ticker = FixedTicker(ticks=list(range(len(rows))))
    plot.xaxis.major_label_overrides = dict(enumerate(names))
    plot.xaxis.axis_label, plot.yaxis.axis_label = "zones of a tile", "run time, s"
    plot.title.text, plot.title.text_color = side, LIGHT[side]
    places = list(range(len(rows)))
    source = ColumnDataSource(
        {"x": places, "y": times, "tile": names, "shown": [seconds(t) for t in times],
         "tasks": [str(row["tasks"]) for row in rows]}
    )  # fmt: skip
    if all(_adds_up(row, side) for row in rows):
        _layers(plot, rows, places)
    plot.line("x", "y", source=source, line_color=LIGHT[side], line_width=2.4)
    dots = plot.scatter("x", "y", source=source, size=9, fill_color=LIGHT[side], line_color=LIGHT["paper"],
                        name=f"grain-dots-{side}")  # fmt: skip
    best = times.index(min(times))
    align = "left" if best == 0 else "right" if best == len(times) - 1 else "center"
    plot.segment([best], [times[best]], [best], [0.89 * top], line_color=LIGHT[side], line_dash="dotted")
    words(plot, x=[best], y=[0.94 * top], text=[f"best: {names[best]}, {seconds(times[best])}"], text_align=align,
          text_color=LIGHT[side], text_font_style="bold", **on_paper())  # fmt: skip
    hover(plot, [dots], [("tile", "tile"), ("tasks", "tasks"), ("run time", "shown")])
    return plot


def _adds_up(row: dict[str, Any], side: str) -> bool:
    """Whether a row's parts are those of this side's run time, to 5 %: they are given for one side only.

    What they leave out, bytes under way and threads out of work, was up to 3 % in the runs tried.
    """
    if any(row.get(key) is None for key in _LAYERS):
        return False
    whole = float(row[f"{side}_s"])
    return abs(sum(_per_worker(row, key) for key in _LAYERS) - whole) <= 0.05 * whole


def _per_worker(row: dict[str, Any], key: str) -> float:
    """A row's core-seconds as seconds of run time."""
    return float(row[key]) / float(row.get("workers", 1))


def _layers(plot: figure, rows: list[dict[str, Any]], places: list[int]) -> None:
    """What the run time is made of: kernels, dispatch, waits."""
    base = [0.0] * len(rows)
    for key, token in _LAYERS.items():
        top = [b + _per_worker(row, key) for b, row in zip(base, rows, strict=True)]
        plot.varea(x=places, y1=base, y2=top, fill_color=LIGHT[token], fill_alpha=0.8)
        _layer_name(plot, key, base, top)
        base = top


def _layer_name(plot: figure, key: str, base: list[float], top: list[float]) -> None:
    """What a layer is, where it is thickest, if that is thick enough for a word."""
    thickness = [high - low for low, high in zip(base, top, strict=True)]
    place = thickness.index(max(thickness))
    if thickness[place] < 0.09 * float(plot.y_range.end):
        return
    align = "left" if place == 0 else "right" if place == len(top) - 1 else "center"
    words(
        plot, x=[place], y=[(base[place] + top[place]) / 2], text_align=align,
        text=[{"compute_s": " kernels", "engine_s": " dispatch ", "wait_s": "waits "}[key]], **on_paper(),
    )  # fmt: skip


def _tile_name(tile: Any) -> str:
    return " x ".join(str(n) for n in tile if n != 1) or "1" if isinstance(tile, list | tuple) else str(tile)
