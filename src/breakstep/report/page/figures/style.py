"""What all figures have in common."""

from __future__ import annotations

from typing import Any

from bokeh.core.properties import value
from bokeh.models import HoverTool, Range1d
from bokeh.plotting import figure

from breakstep.report.page.palette import LIGHT

FONT = "system-ui, -apple-system, 'Segoe UI', Roboto, 'Noto Sans', sans-serif"
TEXT = "13px"


def new_figure(height: int, x: tuple[float, float], y: tuple[float, float], **options: Any) -> figure:
    """An empty figure as wide as its place: no tools, thin axes, no outline."""
    plot = figure(
        height=height,
        sizing_mode="stretch_width",
        x_range=Range1d(*x),
        y_range=Range1d(*y),
        toolbar_location=None,
        tools="",
        min_border=2,
        background_fill_color=None,
        border_fill_color=None,
        outline_line_color=None,
        **options,
    )
    for axis in plot.axis:
        _style_axis(axis)
    plot.grid.grid_line_color = LIGHT["grid"]
    plot.title.text_font = FONT
    plot.title.text_font_size = "14px"
    plot.title.standoff = 6
    return plot


def _style_axis(axis: Any) -> None:
    axis.axis_line_color = axis.major_tick_line_color = LIGHT["axis"]
    axis.minor_tick_line_color = None
    axis.major_tick_in = 0
    axis.major_tick_out = 4
    axis.major_label_text_color = axis.axis_label_text_color = LIGHT["ink"]
    axis.major_label_text_font = axis.axis_label_text_font = FONT
    axis.major_label_text_font_size = axis.axis_label_text_font_size = TEXT
    axis.axis_label_text_font_style = "normal"


def words(plot: figure, **options: Any) -> Any:
    """Text in the figure; ``x``, ``y`` and ``text`` as in :meth:`bokeh.plotting.figure.text`."""
    defaults: dict[str, Any] = {
        "text_font": value(FONT),
        "text_font_size": TEXT,
        "text_color": LIGHT["ink"],
        "text_baseline": "middle",
    }
    return plot.text(**{**defaults, **options})


def on_paper() -> dict[str, Any]:
    """Options of text that has to be read across lines: paper behind it."""
    return {"background_fill_color": LIGHT["paper"], "background_fill_alpha": 0.85, "padding": 1}


def hover(plot: figure, renderers: list[Any], rows: list[tuple[str, str]], **options: Any) -> None:
    """Show some columns of what the pointer is at; ``rows`` are labels and columns."""
    body = "".join(f"<div>{label} <b>@{{{column}}}</b></div>" for label, column in rows)
    style = f"font:13px {FONT};color:#1b2330;background:#ffffff;max-width:260px"
    text = f'<div class="tip" style="{style}">{body}</div>'.replace("'", "&#39;")
    plot.add_tools(HoverTool(renderers=renderers, tooltips=text, visible=False, **options))
