"""Everything that a page says, as one plain dictionary made from recorded profiles."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from breakstep.report.page.cells import cells_of
from breakstep.report.page.first import marked
from breakstep.report.page.numbers import plain
from breakstep.report.page.panels.accounts import accounts_panel
from breakstep.report.page.panels.chain import chain_panel
from breakstep.report.page.panels.columns import columns_panel
from breakstep.report.page.panels.costs import costs_panel
from breakstep.report.page.panels.fronts import fronts_panel
from breakstep.report.page.panels.headline import headline_panel
from breakstep.report.page.panels.measured import measured_panel
from breakstep.report.page.panels.memory import memory_panel
from breakstep.report.page.panels.traffic import traffic_panel
from breakstep.report.page.runs import Runs
from breakstep.report.page.words import answers


def page_data(runs: Runs, forecast: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """The page's numbers and sentences.

    Parameters
    ----------
    forecast : mapping, optional
        Figures of the forecasts: ``scaling``, ``barriers``, ``grain``, ``advice``, as far as they are there.

    Returns
    -------
    dict
        Plain values that JSON can hold; one key a view, absent where the runs have nothing to show there.
    """
    either = runs.either
    cells = cells_of(either.manifest)
    data: dict[str, Any] = {
        "headline": headline_panel(runs),
        "cells": cells.as_json(),
        "fronts": {side: fronts_panel(profile, cells) for side, profile in runs.sides.items()},
        "columns": columns_panel(runs),
        "costs": costs_panel(either, cells),
        "traffic": traffic_panel(runs, cells),
        "memory": memory_panel(runs),
        "chain": chain_panel(runs, cells),
        "accounts": accounts_panel(runs),
        "measured": measured_panel(runs),
        "forecast": dict(forecast or {}),
    }
    if data["forecast"].get("advice"):
        data["forecast"]["advice"] = marked(runs, data["forecast"]["advice"])
    data["answers"] = answers(runs, data)
    found: dict[str, Any] = plain(data)
    return found
