"""What the forecast over tile sizes says in words: which size is best, and whether the scan reached far enough."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from breakstep.report.wording import counted, listed, seconds

_SIDES = ("lockstep", "tasked")


def name_of(tile: Any) -> str:
    """A tile's extent, as a number or as numbers along axes."""
    return " \u00d7 ".join(map(str, _extent(tile))) or "1"


def _extent(tile: Any) -> list[Any]:
    return [n for n in tile if n != 1] if isinstance(tile, list | tuple) else [tile]


def _rows(forecast: Mapping[str, Any]) -> list[dict[str, Any]]:
    """From the smallest tiles to the largest."""
    return sorted((forecast.get("grain") or {}).get("rows") or [], key=lambda row: -int(row["tasks"]))


def _recorded(forecast: Mapping[str, Any]) -> dict[str, Any] | None:
    tile = (forecast.get("grain") or {}).get("recorded_tile")
    return next((row for row in _rows(forecast) if _extent(row["tile"]) == _extent(tile)), None)


def _best(forecast: Mapping[str, Any], side: str) -> dict[str, Any]:
    return min(_rows(forecast), key=lambda row: float(row[f"{side}_s"]))


def larger_is_better(forecast: Mapping[str, Any]) -> bool:
    """Whether larger tiles than the recorded ones are forecast to be the fastest, tasked."""
    recorded = _recorded(forecast)
    return recorded is not None and int(_best(forecast, "tasked")["tasks"]) < int(recorded["tasks"])


def grain_words(forecast: Mapping[str, Any]) -> str:
    """Sentences beside the figure of tile sizes; nothing where there is nothing to warn of."""
    return " ".join([*_instead(forecast), *_edge(forecast)])


def _instead(forecast: Mapping[str, Any]) -> list[str]:
    """That another tile in lockstep would beat tasks on the recorded one, where it would."""
    recorded, best = _recorded(forecast), _best(forecast, "lockstep")
    if recorded is None or best is recorded or best["lockstep_s"] >= recorded["tasked_s"]:
        return []
    return [
        f"By this forecast lockstep with tiles of {name_of(best['tile'])} zones, {seconds(best['lockstep_s'])}, is"
        f" faster than tasked as recorded with {name_of(recorded['tile'])}, {seconds(recorded['tasked_s'])}: the tile"
        " size matters more here than the barriers."
    ]


def _edge(forecast: Mapping[str, Any]) -> list[str]:
    """That the best tile is the largest or smallest of those tried."""
    rows = _rows(forecast)
    found: dict[int, list[str]] = {}
    for side in _SIDES:
        found.setdefault(rows.index(_best(forecast, side)), []).append(side)
    ends = [(place, sides) for place, sides in found.items() if place in (0, len(rows) - 1) and len(rows) > 1]
    return [_edge_words(rows[place], "smallest" if place == 0 else "largest", sides) for place, sides in ends]


def _edge_words(row: Mapping[str, Any], end: str, sides: list[str]) -> str:
    left = f" and leaves {counted(int(row['tiles']), 'tile')}" if "tiles" in row else ""
    share = f" for {counted(int(row['workers']), 'worker')}" if left and "workers" in row else ""
    return (
        f"The best tile ({listed(sides)}), {name_of(row['tile'])}, is the {end} that was tried{left}{share}: the true"
        f" best may lie beyond{', but fewer tiles leave less to share out' if end == 'largest' else ''}."
    )
