"""The chain of causes of a run's longest wait: what went on, tile by tile, read back from the wait's end.

The first moments of a run, before every thread has had a task, are left out: they say how workers start.
"""

from __future__ import annotations

from typing import Any

import pandas as pd

from breakstep.profile.run import Profile
from breakstep.report.page.cells import Cells, tile_labels
from breakstep.report.page.numbers import seconds
from breakstep.report.page.panels.idle import IDLE
from breakstep.report.page.runs import Runs

#: A map with more numbered links cannot be followed by eye; further ones are added up in one line.
MOST_LINKS = 14
_WHAT = {
    "running": "{task} was running",
    "queued": "{task} could have run; its thread was busy with other tasks",
    "under way": "what {task} had made was under way",
    "ready": "the dispatch had not started {task} yet",
}


def chain_panel(runs: Runs, cells: Cells) -> dict[str, Any]:
    """For each run with a wait, that wait and its links; their times add up to it."""
    found = {side: _of(profile, cells) for side, profile in runs.sides.items()}
    return {side: chain for side, chain in found.items() if chain is not None}


def _of(profile: Profile, cells: Cells) -> dict[str, Any] | None:
    gap = _longest(profile)
    if gap is None:
        return None
    origin, tasks = profile.ledger.first_ns, profile.tasks.set_index("task")
    labels = tile_labels(profile.manifest)
    links = _links(profile.ledger.explain(int(gap["task"])), tasks, labels, cells)
    waiting = tasks.loc[int(gap["task"])]
    return {
        "wait_s": seconds(int(gap["end_ns"]) - int(gap["start_ns"])),
        "from_s": seconds(int(gap["start_ns"]) - origin),
        "until_s": seconds(int(gap["end_ns"]) - origin),
        "worker": int(gap["worker"]),
        "thread": int(gap["thread"]),
        "task": _task(waiting, labels),
        "cell": _cell(waiting, cells),
        "links": _shortened(links),
        "command": _command(waiting, labels),
    }


def _longest(profile: Profile) -> pd.Series[Any] | None:
    """The gap with the most waiting that is not the dispatch's."""
    gaps = profile.ledger.gaps
    later = gaps[gaps["start_ns"] > profile.ledger.first_ns]
    gaps = later if len(later) else gaps
    waited = gaps[list(IDLE)].sum(axis=1)
    return gaps.loc[waited.idxmax()] if len(gaps) and waited.max() > 0 else None


def _links(parts: pd.DataFrame, tasks: pd.DataFrame, labels: list[str], cells: Cells) -> list[dict[str, Any]]:
    """Parts with their tasks in words."""
    links = []
    for part in parts.itertuples():
        task = tasks.loc[part.task]
        links.append(
            {
                "ns": int(part.ns),
                "s": seconds(int(part.ns)),
                "account": str(part.account),
                "what": _WHAT[str(part.reason)].format(task=_task(task, labels)),
                "cell": _cell(task, cells),
            }
        )
    return links


def _shortened(links: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """All links, or the longest of them in their order and the sum of the rest."""
    if len(links) <= MOST_LINKS:
        return links
    kept = sorted(sorted(range(len(links)), key=lambda place: -links[place]["ns"])[: MOST_LINKS - 1])
    rest = [links[place] for place in range(len(links)) if place not in set(kept)]
    total = sum(link["ns"] for link in rest)
    what = f"{len(rest)} shorter links, added up"
    return [
        *(links[place] for place in kept),
        {"ns": total, "s": seconds(total), "account": "", "what": what, "cell": -1},
    ]


def _task(task: pd.Series[Any], labels: list[str]) -> str:
    where = f" of tile {labels[int(task['tile'])]}" if int(task["tile"]) >= 0 else ""
    when = f"cycle {int(task['cycle'])}" if int(task["cycle"]) >= 0 else "before the first cycle"
    again = f", iteration {int(task['iteration'])}" if int(task["iteration"]) >= 0 else ""
    kind = "" if str(task["kind"]) == "step" else f" ({task['kind']})"
    return f"{task['stage']}{kind}{where}, {when}{again}, on worker {int(task['worker'])}"


def _cell(task: pd.Series[Any], cells: Cells) -> int:
    return int(cells.of_tile[int(task["tile"])]) if int(task["tile"]) >= 0 else -1


def _command(task: pd.Series[Any], labels: list[str]) -> str:
    """How to ask for the same on the command line."""
    tile = f" --tile {labels[int(task['tile'])]}" if int(task["tile"]) >= 0 else ""
    return f"breakstep why PROFILE{tile} --cycle {int(task['cycle'])} --step {str(task['stage']).split('+')[0]}"
