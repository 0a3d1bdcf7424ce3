"""Rows of the page's tables, titles of its figures, and what a figure says to somebody who cannot see it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from breakstep.report.page.figures.forecast import in_order
from breakstep.report.page.formats import core, digits, percent
from breakstep.report.page.grain import grain_words, larger_is_better, name_of
from breakstep.report.page.panels.traffic import by_stage_table
from breakstep.report.wording import counted, listed, seconds, size


def helpers(data: Mapping[str, Any]) -> dict[str, Callable[..., Any]]:
    """What the template calls, bound to the page's numbers."""
    return {
        "front_title": lambda side: _front_title(data, side),
        "front_alt": lambda side: _front_alt(data, side),
        "first_moment": lambda: first_moment(data["fronts"]),
        "front_rows": lambda: _front_rows(data),
        "columns_alt": lambda: _columns_alt(data),
        "costliest_bin": lambda: _costliest_bin(data),
        "uneven_alt": lambda: _uneven_alt(data),
        "stage_rows": lambda: by_stage_table(data["traffic"]),
        "memory_words": lambda: _memory_words(data),
        "memory_alt": lambda: f"Lines of live bytes over wall time. {_memory_words(data)}",
        "kinds_alt": lambda side: _kinds_alt(data["memory"][side], side),
        "critical_steps": lambda: _critical_steps(data),
        "waited_steps": lambda: _waited_steps(data),
        "scaling_alt": lambda: _scaling_alt(data["forecast"]["scaling"]),
        "barrier_rows": lambda: in_order(data["forecast"]["barriers"]),
        "barriers_alt": lambda: _barriers_alt(data["forecast"]["barriers"]),
        "grain_alt": lambda side: _grain_alt(data["forecast"]["grain"], side),
        "tile_name": name_of,
        "grain_words": lambda: grain_words(data["forecast"]),
        "larger_is_better": lambda: larger_is_better(data["forecast"]),
        "threads_words": threads_words,
    }


def threads_words(workers: int, threads: int) -> str:
    """Workers, and the threads of each: ``2 workers, 1 thread each``."""
    each = counted(threads // workers, "thread") + " each" if threads % workers == 0 else f"{threads} threads in all"
    return f"{counted(workers, 'worker')}, {each}"


def _front_title(data: Mapping[str, Any], side: str) -> str:
    panel = data["fronts"][side]
    bend, cycle = panel["bend_s"], panel["span_s"] / max(len(panel["cycles"]), 1)
    apart = f"the first tile may begin a cycle {seconds(bend)} before the last, on average"
    if bend < 0.02 * cycle:
        return f"{side.capitalize()}, {seconds(panel['span_s'])}: fronts are straight, all tiles begin together"
    return f"{side.capitalize()}, {seconds(panel['span_s'])}: fronts bend; {apart}"


def _front_alt(data: Mapping[str, Any], side: str) -> str:
    panel = data["fronts"][side]
    idle = sum(sum(row) / len(row) for row in panel["idle_s"])
    return (
        f"Curves of equal cycle over wall time and tiles, {side}: {len(panel['cycles'])} cycles in"
        f" {seconds(panel['span_s'])}; the tiles' cores stood idle for {seconds(idle)} of it, on average. The"
        " numbers are in the table below."
    )


def first_moment(fronts: Mapping[str, Any], most: int = 1000) -> int:
    """The slider's first place: off the first run's fronts, where tiles are spread over most cycles."""
    end = max(panel["span_s"] for panel in fronts.values())
    panel = list(fronts.values())[-1]
    moments = np.linspace(0.0, end, most + 1)
    lines = np.asarray(panel["front_s"][1:-1])
    if not len(lines):
        return most // 3
    on_front = _on_front(next(iter(fronts.values())), moments, 0.012 * end)
    under_way = ((lines.min(axis=1)[:, None] <= moments) & (moments < lines.max(axis=1)[:, None])).sum(axis=0)
    ahead = np.abs((lines <= moments[:, None, None]).mean(axis=2) % 1.0 - 0.5).min(axis=1)
    return int(np.lexsort((moments, ahead, -under_way, on_front))[0])


def _on_front(panel: Mapping[str, Any], moments: NDArray[np.float64], room: float) -> NDArray[np.bool_]:
    """Whether moments lie on a front, or so close that the eye cannot tell on which side."""
    lines = np.asarray(panel["front_s"])
    return np.asarray((np.abs(lines.reshape(1, -1) - moments[:, None]) < room).any(axis=1), dtype=np.bool_)


def _front_rows(data: Mapping[str, Any]) -> list[list[str]]:
    sides = list(data["fronts"])
    cycles = sorted({cycle for side in sides for cycle in data["fronts"][side]["cycles"]})
    rows = []
    for cycle in [*cycles, "end"]:
        row = [str(cycle)]
        for side in sides:
            row += _front_cells(data["fronts"][side], cycle)
        rows.append(row)
    return rows


def _front_cells(panel: Mapping[str, Any], cycle: int | str) -> list[str]:
    if cycle != "end" and cycle not in panel["cycles"]:
        return ["\u2013"] * 3
    at = len(panel["cycles"]) if cycle == "end" else panel["cycles"].index(cycle)
    front, idle = panel["front_s"][at], panel["idle_s"][at]
    return [core(min(front)), core(max(front)), core(sum(idle) / len(idle))]


def _columns_alt(data: Mapping[str, Any]) -> str:
    panel = data["columns"]
    totals = [f"{side} {digits(total)} core-seconds" for side, total in panel["total_core_s"].items()]
    side = next(iter(panel["total_core_s"]))
    largest = sorted(panel["parts"], key=lambda part: -part["share"][side])[:4]
    parts = listed([f"{part['words']} {percent(part['share'][side])}" for part in largest])
    return f"Stacked columns: {listed(totals)}. Most of {side}: {parts}. The table beside it has all numbers."


def _costliest_bin(data: Mapping[str, Any]) -> int:
    """The cycle in which the workers' loads are most uneven, weighted by what they cost."""
    panel = data["costs"]
    excess = [
        sum(cpu[at] * ((uneven[at] or 1.0) - 1.0) for cpu, uneven in _by_step(panel))
        for at in range(len(panel["cycles"]))
    ]
    return excess.index(max(excess)) if excess else 0


def _by_step(panel: Mapping[str, Any]) -> list[tuple[list[float], list[float | None]]]:
    return list(zip(panel["cpu_s"], panel["busiest_over_mean"], strict=True))


def _uneven_alt(data: Mapping[str, Any]) -> str:
    panel = data["costs"]
    parts = []
    for step, row in zip(panel["steps"], panel["busiest_over_mean"], strict=True):
        found = [value for value in row if value is not None]
        if found:
            parts.append(f"{step} {min(found):.2f} to {max(found):.2f}")
    return f"Lines of busiest over mean worker by cycle: {listed(parts)}."


def _memory_words(data: Mapping[str, Any]) -> str:
    parts = [
        f"{side} at most {size(found['peak_bytes'])} at {seconds(found['peak_s'])}"
        for side, found in data["memory"].items()
    ]
    return f"Arrays that tasks made and that somebody may still read: {listed(parts)}."


def _kinds_alt(found: Mapping[str, Any], side: str) -> str:
    parts = [f"{name} at most {size(max(counts))}" for name, counts in found["bytes_by_data"].items()]
    return f"Lines of live bytes by kind of data over wall time, {side}: {listed(parts)}."


def _waited_steps(data: Mapping[str, Any]) -> list[str]:
    """Steps that waits are for, those with most waiting first."""
    total: dict[str, int] = {}
    for run in data["accounts"].values():
        for waits in run["waits_for"].values():
            for step, ns in waits.items():
                total[step] = total.get(step, 0) + ns
    return [step for step in sorted(total, key=lambda name: -total[name]) if total[step]]


def _critical_steps(data: Mapping[str, Any]) -> list[str]:
    """Steps on the critical chains, those with most time first."""
    total: dict[str, int] = {}
    for run in data["accounts"].values():
        for step, ns in run["critical"]["by_step_ns"].items():
            total[step] = total.get(step, 0) + ns
    return [step for step in sorted(total, key=lambda name: -total[name]) if total[step]]


def _scaling_alt(panel: Mapping[str, Any]) -> str:
    first, last = panel["rows"][0], panel["rows"][-1]
    parts = [f"{side} {seconds(first[f'{side}_s'])} to {seconds(last[f'{side}_s'])}" for side in ("lockstep", "tasked")]
    return f"Forecast run time from {first['workers']} to {last['workers']} workers: {listed(parts)}."


def _barriers_alt(panel: Mapping[str, Any]) -> str:
    parts = [f"{row['what']} {row['in_order_s']:.3g} s" for row in in_order(dict(panel))]
    return f"Forecast seconds handed back as barriers go in this order: {listed(parts)}."


def _grain_alt(panel: Mapping[str, Any], side: str) -> str:
    best = min(panel["rows"], key=lambda row: float(row[f"{side}_s"]))
    least = seconds(best[f"{side}_s"])
    return f"Forecast run time over tile size, {side}: least {least} with tiles of {name_of(best['tile'])}."
