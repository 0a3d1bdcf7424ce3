"""From the page's numbers to one file of HTML that needs nothing else.

Whatever comes from a scenario is text: jinja2 escapes it in the markup, and in the embedded JSON no character is
left that could end a script element.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from functools import partial
from typing import Any

from bokeh.embed import json_item
from bokeh.resources import Resources
from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from breakstep.report.page import drawing, formats, tables
from breakstep.report.page.figures.columns import columns_figure, tokens_of
from breakstep.report.page.figures.forecast import barriers_figure, grain_figure, scaling_figure
from breakstep.report.page.figures.fronts import fronts_figure
from breakstep.report.page.figures.lines import kinds_figure, memory_figure, unevenness_figure
from breakstep.report.page.palette import DARK, HATCHES, LIGHT, STEPS
from breakstep.report.page.panels.accounts import FACTORS

#: What ends or opens something inside a script element, as JSON can also write it.
_UNSAFE = {"<": "\\u003c", ">": "\\u003e", "&": "\\u0026", "\u2028": "\\u2028", "\u2029": "\\u2029"}
_DOTS = "radial-gradient(circle at 3px 3px, var(--hatch) 1.3px, transparent 1.6px)"
_HATCH_PICTURES = {
    "blank": "none",
    "dot": _DOTS,
    "horizontal_line": "repeating-linear-gradient(0deg, transparent 0 4px, var(--hatch) 4px 5px)",
    "right_diagonal_line": "repeating-linear-gradient(-45deg, transparent 0 4px, var(--hatch) 4px 5px)",
    "left_diagonal_line": "repeating-linear-gradient(45deg, transparent 0 4px, var(--hatch) 4px 5px)",
    "cross": "repeating-linear-gradient(0deg, transparent 0 4px, var(--hatch) 4px 5px),"
    " repeating-linear-gradient(90deg, transparent 0 4px, var(--hatch) 4px 5px)",
}


def page_html(data: Mapping[str, Any]) -> str:
    """The whole page.

    Parameters
    ----------
    data : mapping
        As :func:`breakstep.report.page.data.page_data` makes it.
    """
    environment = _environment()
    tokens = tokens_of(data["columns"])
    environment.globals.update(
        data=data,
        views=_views(data),
        token_of=lambda name: tokens.get(name, "machine"),
        hatch_of=lambda name: HATCHES.get(name, "blank"),
        box=drawing.box,
        borders=drawing.borders,
        face_lines=partial(drawing.face_lines, data),
        goes_around=partial(drawing.goes_around, data),
        corners=drawing.corners(data["cells"]),
        factor_meanings=FACTORS,
        chain_marks=partial(drawing.chain_marks, data),
        link_number=partial(drawing.link_number, data),
        line_sample=partial(drawing.line_sample, tokens),
        kind_sample=lambda place: drawing.line_sample({"": STEPS[place]}, "", place),
        **tables.helpers(data),
    )
    css = environment.get_template("page.css.j2").render(light=LIGHT, dark=DARK, hatches=_HATCH_PICTURES)
    script = environment.loader.get_source(environment, "page.js")[0]  # type: ignore[union-attr]
    return environment.get_template("page.html.j2").render(
        css=Markup(css),
        script=Markup(script),
        bokeh=Markup(_bokeh()),
        numbers=_embedded(data),
        figures=_embedded({name: json_item(figure) for name, figure in _figures(data, tokens).items()}),
        themes=_embedded({LIGHT[name]: DARK[name] for name in LIGHT}),
    )


def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("breakstep.report.page"), autoescape=True, undefined=StrictUndefined, trim_blocks=False
    )
    environment.filters.update(formats.FILTERS)
    return environment


def _embedded(value: Any) -> Markup:
    """JSON that may stand inside a script element."""
    text = json.dumps(value, separators=(",", ":"), allow_nan=False)
    for character, escaped in _UNSAFE.items():
        text = text.replace(character, escaped)
    return Markup(text)


def _bokeh() -> str:
    """BokehJS itself, without widgets and tables, which no figure uses: 1.3 MB instead of 4.4."""
    return "\n".join(Resources(mode="inline", components=["bokeh"]).js_raw)


def _views(data: Mapping[str, Any]) -> list[tuple[str, str]]:
    forecast = data["forecast"]
    views = [
        ("fronts", "Step fronts", True),
        ("columns", "Core-seconds", True),
        ("costs", "Costs", bool(data["costs"]["steps"] and data["costs"]["cycles"])),
        ("bytes", "Bytes", True),
        ("memory", "Memory", True),
        ("chain", "Causes", bool(data["chain"])),
        ("accounts", "Accounts", True),
        ("barriers", "Barriers", bool((forecast.get("barriers") or {}).get("ranking"))),
        ("scaling", "More workers", bool((forecast.get("scaling") or {}).get("rows"))),
        ("grain", "Tile size", bool((forecast.get("grain") or {}).get("rows"))),
        ("advice", "Advice", bool(forecast.get("advice"))),
        ("measured", "How measured", True),
    ]
    return [(anchor, name) for anchor, name, there in views if there]


def _figures(data: Mapping[str, Any], tokens: dict[str, str]) -> dict[str, Any]:
    """All figures that the numbers allow, by the place they go to."""
    end = max(panel["span_s"] for panel in data["fronts"].values())
    figures: dict[str, Any] = {
        f"fronts-{side}": fronts_figure(panel, side, end) for side, panel in data["fronts"].items()
    }
    figures["columns"] = columns_figure(data["columns"])
    figures["memory"] = memory_figure(data["memory"])
    last = list(data["memory"])[-1]
    if data["memory"][last]["bytes_by_data"]:
        figures["memory-kinds"] = kinds_figure(data["memory"][last], last)
    if data["costs"]["steps"] and data["costs"]["cycles"]:
        figures["unevenness"] = unevenness_figure(data["costs"], tokens)
    return {**figures, **_forecasts(data["forecast"])}


def _forecasts(forecast: Mapping[str, Any]) -> dict[str, Any]:
    figures: dict[str, Any] = {}
    if (forecast.get("scaling") or {}).get("rows"):
        figures["scaling"] = scaling_figure(forecast["scaling"])
    if (forecast.get("barriers") or {}).get("ranking"):
        figures["barriers"] = barriers_figure(forecast["barriers"])
    if (forecast.get("grain") or {}).get("rows"):
        for side in ("lockstep", "tasked"):
            figures[f"grain-{side}"] = grain_figure(forecast["grain"], side)
    return figures
