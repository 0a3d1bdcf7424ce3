"""Small figures of one run for a notebook: tables with bars, a map of tiles, a curve; HTML and SVG, nothing else.

They need no plotting library and no network. Every text in them is escaped, for a scenario may be called anything.
Every figure has its numbers in it as text; colour says nothing alone.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape
from typing import TYPE_CHECKING, Any

import numpy as np

from breakstep.errors import ChoiceError
from breakstep.profile.chain import CHAIN_ACCOUNTS
from breakstep.profile.frames import integers, positions
from breakstep.profile.words import LABELS, tile_grid, tile_names

if TYPE_CHECKING:
    from breakstep.profile.run import Profile

_BAR = 180  # pixels of a whole bar
_CELL = 44  # pixels of a tile: three digits fit
_CURVE = (480, 120)  # pixels
_POINTS = 480  # of a curve, no more than pixels


@dataclass(frozen=True)
class Figure:
    """A title and HTML that is ready to be shown."""

    title: str
    body: str

    def _repr_html_(self) -> str:
        return f"<figure style='margin:0'><figcaption>{escape(self.title)}</figcaption>{self.body}</figure>"


class Figures:
    """The figures of one run, each made when it is asked for."""

    def __init__(self, profile: Profile) -> None:
        self._profile = profile

    def __repr__(self) -> str:
        return "figures: accounts, chain, live, map(step), steps"

    @property
    def accounts(self) -> Figure:
        """Core-seconds by account."""
        ledger = self._profile.ledger
        whole = max(ledger.available_ns, 1)
        rows = [
            (LABELS[name], f"{ns / 1e9:.4g}", f"{100 * ns / whole:.1f} %", _bar(ns / whole))
            for name, ns in ledger.accounts_ns.items()
        ]
        return Figure(
            f"{self._profile.title}: core-seconds", table(("account", "core-seconds", "share", ""), rows, safe=(3,))
        )

    @property
    def chain(self) -> Figure:
        """What the time along the critical chain was spent on, by step."""
        chain = self._profile.ledger.chain
        rows = [
            (str(step), *(f"{int(ns) / 1e6:.4g}" for ns in row))
            for step, row in zip(chain.by_step.index, chain.by_step.to_numpy(), strict=True)
        ]
        heads = ("step", *(f"{LABELS[name]}, ms" for name in CHAIN_ACCOUNTS))
        return Figure(f"{self._profile.title}: critical chain of {len(chain.tasks)} tasks", table(heads, rows))

    @property
    def steps(self) -> Figure:
        """Kernel time by step, and how uneven it is."""
        work, among = self._profile.work, self._profile.imbalance
        rows = [
            (
                *(str(step), f"{row['compute_seconds']:.4g}", f"{row['cpu_seconds']:.4g}"),
                *(f"{among[column].get(step, np.nan):.2f}" for column in ("workers", "phases_weighted", "tiles")),
            )
            for step, row in work.sort_values("compute_ns", ascending=False).iterrows()
        ]
        heads = ("step", "kernel s", "processor s", "busiest/mean worker", "in its phase", "busiest/mean tile")
        return Figure(f"{self._profile.title}: steps", table(heads, rows))

    @property
    def live(self) -> Figure:
        """Live bytes over time."""
        series = self._profile.live.total
        title = f"{self._profile.title}: live bytes, at most {int(series.max()) if len(series) else 0}"
        return Figure(title, _curve(integers_of(series.index), integers_of(series), title))

    def map(self, step: str) -> Figure:
        """Processor time of a step on each tile, columns of tiles along z added up.

        Raises
        ------
        ChoiceError
            The run has no such step.
        """
        spent = processor_time(self._profile, step)
        tiles = self._profile.manifest["mesh"]["tiles"]
        names = tile_names(tiles)
        columns: dict[tuple[int, int], int] = {}
        for (i, j, _), tile in tile_grid(tiles).items():
            columns[i, j] = columns.get((i, j), 0) + int(spent[tile])
        title = f"{self._profile.title}: processor time of {step} by tile [ms], x to the right, y up"
        return Figure(title, _tiles(columns, title, len(names[0].split(",")) if names else 1))


def processor_time(profile: Profile, step: str) -> np.ndarray[Any, np.dtype[np.int64]]:
    """Processor time of a step on each tile [ns].

    Raises
    ------
    ChoiceError
        The run has no such step.
    """
    intervals, tasks = profile.intervals, profile.tasks
    steps = sorted(map(str, profile.work.index))
    if step not in steps:
        raise ChoiceError(f"step {step}: expected a step of the run, which has {', '.join(steps)}; name one of those")
    chosen = intervals[((intervals["what"] == "kernel") & (intervals["step"] == step)).to_numpy()]
    tile = integers(tasks, "tile")[positions(integers(tasks, "task"), integers(chosen, "task"))]
    spent = np.zeros(profile.tile_count, dtype=np.int64)
    on_tile = tile >= 0
    np.add.at(spent, tile[on_tile], integers(chosen, "cpu_ns")[on_tile])
    return spent


def integers_of(values: Any) -> np.ndarray[Any, np.dtype[np.int64]]:
    """An index or a series as int64."""
    return np.asarray(values, dtype=np.int64)


def table(heads: Sequence[str], rows: Iterable[Sequence[str]], safe: Sequence[int] = ()) -> str:
    """A table whose first column is text and whose others are numbers; cells of the columns in ``safe`` are HTML."""
    top = "".join(f"<th scope='col'>{escape(head)}</th>" for head in heads)
    body = "".join(f"<tr>{''.join(_cells(row, safe))}</tr>" for row in rows)
    return f"<table><thead><tr>{top}</tr></thead><tbody>{body}</tbody></table>"


def _cells(row: Sequence[str], safe: Sequence[int]) -> Iterable[str]:
    for place, cell in enumerate(row):
        align = "left" if place == 0 or place in safe else "right"
        yield f"<td style='text-align:{align}'>{cell if place in safe else escape(cell)}</td>"


def _bar(part: float) -> str:
    width = max(0.0, min(1.0, part)) * _BAR
    return f"<div style='background:currentColor;opacity:.6;height:.8em;width:{width:.1f}px'></div>"


def _tiles(columns: dict[tuple[int, int], int], title: str, axes: int) -> str:
    largest = max(columns.values(), default=0) or 1
    across, up = (1 + max((place[axis] for place in columns), default=0) for axis in (0, 1))
    cells = []
    for (i, j), ns in columns.items():
        x, y = i * _CELL, (up - 1 - j) * _CELL
        name = ",".join(map(str, (i, j)[: min(axes, 2)]))
        cells.append(
            f"<g><title>tile {name}: {ns / 1e6:.4g} ms</title><rect x='{x}' y='{y}' width='{_CELL}' height='{_CELL}'"
            f" fill='#0b4f8a' fill-opacity='{0.05 + 0.45 * ns / largest:.3f}' stroke='currentColor' stroke-width='.5'/>"
            f"<text x='{x + _CELL / 2}' y='{y + _CELL / 2}' font-size='11' text-anchor='middle'"
            f" dominant-baseline='central' fill='currentColor'>{ns / 1e6:.3g}</text></g>"
        )
    return _svg(across * _CELL, up * _CELL, "".join(cells), title)


def _curve(moments: Any, values: Any, title: str) -> str:
    """A curve that keeps every peak: of the points that fall on one pixel the highest."""
    width, height = _CURVE
    if not len(values):
        return "<p>nothing</p>"
    span, top = max(int(moments[-1] - moments[0]), 1), max(int(values.max()), 1)
    pixel = (moments - moments[0]) * (_POINTS - 1) // span
    highest = np.full(_POINTS, -1, dtype=np.int64)
    np.maximum.at(highest, pixel, values)
    points = " ".join(
        f"{x * width / _POINTS:.1f},{height - height * int(level) / top:.1f}"
        for x, level in enumerate(highest)
        if level >= 0
    )
    return _svg(
        width, height, f"<polyline points='{points}' fill='none' stroke='currentColor' stroke-width='1.5'/>", title
    )


def _svg(width: int, height: int, inside: str, title: str) -> str:
    return (
        f"<svg role='img' aria-label='{escape(title)}' width='{width}' height='{height}'"
        f" viewBox='0 0 {width} {height}' xmlns='http://www.w3.org/2000/svg'>{inside}</svg>"
    )


def summary(profile: Profile) -> list[tuple[str, str]]:
    """What a profile is, as pairs of a word and what it is."""
    manifest, ledger = profile.manifest, profile.ledger
    factors = ledger.factors
    longest = profile.why()
    return [
        ("run", f"{profile.title}, {manifest['status']}" + (f": {manifest['message']}" if manifest["message"] else "")),
        ("title", str(manifest["scenario"].get("title", ""))),
        ("on", f"{manifest['workers']} workers with {ledger.threads} threads, {manifest['dispatch']} dispatch"),
        ("did", f"{manifest['cycles']} cycles, {len(profile.tasks)} tasks on {profile.tile_count} tiles"),
        ("took", f"{ledger.span_ns / 1e9:.4g} s, of which {100 * factors.parallel:.1f} % in kernels"),
        ("longest wait", longest.head() if longest.task else "none"),
        ("moved", f"{profile.traffic.total_bytes} bytes between workers; {profile.live.peak_bytes} alive at most"),
        ("fields", ", ".join(map(str, profile.fields.data_vars)) or "none"),
        ("look at", ".ledger, .ledger.chain, .ledger.factors, .why(), .figures, .tasks, .fields"),
    ]


def profile_html(profile: Profile) -> str:
    """A profile as a notebook shows it: what it is, and its accounts."""
    left = "style='text-align:left'"
    facts = "".join(
        f"<tr><th scope='row' {left}>{escape(word)}</th><td {left}>{escape(text)}</td></tr>"
        for word, text in summary(profile)
    )
    return f"<table><tbody>{facts}</tbody></table>{profile.figures.accounts._repr_html_()}"
