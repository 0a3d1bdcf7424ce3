"""The text of ``breakstep selfcheck``: what the tool costs here, and whether its statistics see gains in noise."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

WIDTH = 80
_LABEL = 24  # first column of the tables of percentages
_GROUP = 32  # columns for one size of rims
_AHEAD = 3.0  # percentage points of all cores by which threads or processes must lead to be called better

Figures = Mapping[str, Any]


def selfcheck_lines(figures: Figures) -> list[str]:
    """The whole text, from plain figures as the JSON file holds them."""
    lines = [*_wrap(_setting(figures)), "", *_costs(figures), *_wrap(_headline(figures)), ""]
    lines += [*_grain(figures), *_wrap(_grain_sentence(figures)), "", *_pairs(figures)]
    lines += [*_wrap(_long(figures)), "", *_sharing(figures), *_wrap(_advice(figures))]
    for warning in figures["warnings"]:
        lines += _wrap(f"Warning: {warning}")
    return lines


def _wrap(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent="  ")


def _setting(figures: Figures) -> str:
    idle = {who: f"{100 * share:.1f} %" for who, share in figures["idle_cores"].items()}
    others = figures["others_cores"]
    load = "" if others is None else f", of which other programs kept {others:.1f} busy"
    return (
        f"{figures['workers']} workers of one thread on {figures['cores']} cores{load}; medians of"
        f" {figures['rounds']} rounds. CPU time is that of all processes, less that of idle Dask"
        f" ({idle['client']} of a core for scheduler and client, {idle['workers']} for workers)."
    )


# ---- what a task costs -------------------------------------------------------------------------------


def _costs(figures: Figures) -> Iterator[str]:
    rows: dict[str, dict[int, Figures]] = {}
    for row in (*figures["costs"], figures["threads_cost"]):
        rows.setdefault(_graph(row), {})[row["rim_bytes"]] = row
    sizes = sorted({size for found in rows.values() for size in found})
    yield f"{'No-op tasks, us':<16}" + "".join(f"{f'rims of {_bytes(size)}':>{_GROUP}}" for size in sizes)
    groups = f"{'native (wall)':>14}{'resident':>11}{'ratio':>7}" * len(sizes)
    yield f"{'tiles':>5} {'placement':<10}{groups}"
    for label, found in rows.items():
        yield (f"{label:<16}" + "".join(_cost(found.get(size)) for size in sizes)).rstrip()


def _graph(row: Figures) -> str:
    """Tiles and where they lie."""
    sheet = " 2-D" if row["inputs"] > 3 else ""
    where = f"{row['threads']} threads" if row["threads"] > 1 else f"{row['placement']}{sheet}"
    return f"{row['tiles']:>5} {where}"


def _cost(row: Figures | None) -> str:
    if row is None:
        return " " * _GROUP
    ratio = "" if row["ratio"] is None else f"{row['ratio']['median']:.1f}"
    return f"{_pair(row.get('native')):>14}{_pair(row['resident']):>11}{ratio:>7}"


def _pair(found: Figures | None) -> str:
    if found is None:
        return ""
    return f"{found['cpu_us']['median']:.0f} ({found['wall_us']['median']:.0f})"


def _bytes(count: int) -> str:
    return f"{count} B" if count < 1024 else f"{count / 1024:.0f} KB"


def _headline(figures: Figures) -> str:
    """The row that stands for all, with the middle half of its rounds."""
    row = next(
        row for row in figures["costs"] if row["native"]["cpu_us"]["median"] == figures["native_cpu_us_per_task"]
    )
    native, resident = _middle(row["native"]["cpu_us"]), _middle(row["resident"]["cpu_us"])
    return (
        f"{row['tiles']} tiles in {row['placement']}, {_bytes(row['rim_bytes'])}: {native} us of CPU time natively,"
        f" {resident} resident: {figures['ratio']:.0f} times less."
    )


def _middle(found: Figures) -> str:
    return f"{found['median']:.0f} ({found['low']:.0f} to {found['high']:.0f})"


# ---- the grain ---------------------------------------------------------------------------------------


def _grain(figures: Figures) -> Iterator[str]:
    lengths = sorted({p["nominal_ms"] for g in figures["grain"].values() for p in g["points"]})
    yield f"{'% taken from tasks of':<{_LABEL}}" + "".join(f"{length:>6g}" for length in lengths) + " ms"
    for name in ("resident", "native"):
        points = {p["nominal_ms"]: p for p in figures["grain"][name]["points"]}
        yield _percents(f"{name}: core-seconds", [points.get(ms, {}).get("dispatch") for ms in lengths])
        yield _percents(f"{name}: CPU time", [points.get(ms, {}).get("cpu") for ms in lengths])


def _percents(label: str, shares: Sequence[Figures | None]) -> str:
    cells = ["" if share is None else f"{100 * share['median']:.1f}" for share in shares]
    return (f"{label:<{_LABEL}}" + "".join(f"{cell:>6}" for cell in cells)).rstrip()


def _grain_sentence(figures: Figures) -> str:
    limit = 100 * figures["grain"]["resident"]["limit"]
    grains = ", ".join(f"{_grain_of(figures['grain'][name])} {name}" for name in ("resident", "native"))
    return f"The dispatch takes less than {limit:.0f} % of the core-seconds from {grains}."


def _grain_of(found: Figures) -> str:
    outside = ", extrapolated" if found["extrapolated"] else ""
    return f"{_short(found['median'])} ms ({_short(found['low'])}-{_short(found['high'])}{outside})"


# ---- runs side by side, and a long one ---------------------------------------------------------------


def _pairs(figures: Figures) -> Iterator[str]:
    recording, null, balanced = (figures[name] for name in ("recording", "null_gain", "balanced_gain"))
    wrongly = "called a difference, WRONGLY" if null["significant"] else "no gain, as it must be"
    yield f"{null['pairs']} pairs of runs with {null['task_ms']:g} ms tasks, with 95 % intervals:"
    yield f"  recording: wall {_percent(recording)}, CPU {_percent(recording['cpu'])}"
    yield f"  lockstep against itself: {_interval(null)}: {wrongly}"
    yield f"  balanced work, lockstep over tasked: {_interval(balanced)}"
    yield from _wrap(_recording(recording))


def _recording(found: Figures) -> str:
    """What recording costs a task, against what it may cost."""
    share, limit = found["share"], 100 * found["limit"]
    median, low, high = (100 * share[name] for name in ("median", "low", "high"))
    verdict = f"below the {limit:.0f} % allowed" if median < limit else f"ABOVE the {limit:.0f} % allowed"
    return (
        f"Recording takes {_short(found['calls_cpu_us']['median'])} us of CPU time a task, {median:.2f} % ({low:.2f} to"
        f" {high:.2f}) of {found['task_ms']:g} ms, {verdict}; a task that does nothing takes"
        f" {_middle(found['noop_cpu_us'])} us more."
    )


def _percent(found: Figures) -> str:
    median, low, high = (100 * found[name] for name in ("median", "low", "high"))
    return f"{median:+.1f} % ({low:+.1f} to {high:+.1f})"


def _interval(found: Figures) -> str:
    return f"{found['median']:.3f} ({found['low']:.3f} to {found['high']:.3f})"


def _long(figures: Figures) -> str:
    found = figures["long_run"]
    if found is None:
        return "No long run was made."
    return (
        f"{found['tasks']:,} tasks with {found['edges']:,} edges, recorded, in one go: {found['seconds']:.0f} s,"
        f" {found['cpu_us_per_task']:.0f} us of CPU time a task{_quarters(found['wall_us_by_quarter'])};"
        f" profile in {found['profile_seconds']:.0f} s. {_memory(found)}"
    )


def _quarters(wall: Sequence[float] | None) -> str:
    if wall is None:
        return ""
    return f" (wall by quarter: {', '.join(f'{us:.0f}' for us in wall)})"


def _memory(found: Figures) -> str:
    if found["worker_bytes_per_task"] is None:
        return "How memory grew cannot be told."
    bare = found["unrecorded_worker_bytes_per_task"]
    without = "" if bare is None else f"; without recording {bare:.0f}"
    return (
        f"Workers grew by {found['worker_bytes_per_task']:.0f} bytes a task, {found['record_bytes_per_task']:.0f} of"
        f" them the record{without}."
    )


# ---- threads or processes ----------------------------------------------------------------------------


def _sharing(figures: Figures) -> Iterator[str]:
    rows, workers = figures["sharing"], figures["workers"]
    halves = [[row for row in rows if row["holds_lock"] is held] for held in (False, True)]
    heads = [
        f"lock {word}: {_listed([row['task_ms'] for row in half])} ms"
        for word, half in zip(("released", "held"), halves, strict=True)
    ]
    yield f"{'% of time in kernels':<{_LABEL}}" + "".join(f"{head:>28}" for head in heads)
    for crew, label in {"threads": f"1 process, {workers} threads", "processes": f"{workers} processes"}.items():
        cells = ["".join(f"{row[crew]['median']:>6.0f}" for row in half) for half in halves]
        yield f"{label:<{_LABEL}}" + "".join(f"{cell:>28}" for cell in cells)


def _listed(lengths: Sequence[float]) -> str:
    return ", ".join(f"{length:g}" for length in lengths)


def _advice(figures: Figures) -> str:
    words = []
    for held, kind in ((False, "release the lock"), (True, "hold it")):
        rows = [row for row in figures["sharing"] if row["holds_lock"] is held]
        words.append(f"where kernels {kind}, {_winner(rows)}")
    return f"Better: {'; '.join(words)}."


def _winner(rows: Sequence[Figures]) -> str:
    """Who keeps more of the cores in kernels; length by length where that is not always the same."""
    found = [_leader(row) for row in rows]
    if len(set(found)) == 1:
        return found[0]
    return ", ".join(f"{who} at {row['task_ms']:g} ms" for who, row in zip(found, rows, strict=True))


def _leader(row: Figures) -> str:
    lead = row["threads"]["median"] - row["processes"]["median"]
    if abs(lead) <= _AHEAD:
        return "either"
    return "threads" if lead > 0 else "processes"


def _short(value: float) -> str:
    """Two or three significant digits without an exponent."""
    return f"{value:.{0 if value >= 100 else 1 if value >= 10 else 2}f}"
