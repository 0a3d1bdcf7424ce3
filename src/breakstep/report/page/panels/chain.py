"""The chain of causes of a run's longest wait: what went on, tile by tile, read back from the wait's end.

The first moments of a run, before every thread has had a task, are left out: they say how workers start.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from breakstep.profile.frames import integers, positions
from breakstep.profile.run import Profile
from breakstep.profile.why import Why
from breakstep.profile.words import LABELS, task_name, tile_names
from breakstep.report.page.cells import Cells
from breakstep.report.page.numbers import seconds
from breakstep.report.page.panels.idle import IDLE
from breakstep.report.page.runs import Runs

#: Parts below this of the wait are added up in one line: they explain nothing and hide what does.
SMALL = 0.01
MOST_LINKS = 12  # a map with more numbered tiles cannot be followed by eye


def chain_panel(runs: Runs, cells: Cells) -> dict[str, Any]:
    """For each run with a wait, that wait and its links; their times add up to it."""
    found = {side: _of(profile, cells) for side, profile in runs.sides.items()}
    return {side: chain for side, chain in found.items() if chain is not None}


def _of(profile: Profile, cells: Cells) -> dict[str, Any] | None:
    waiting = _longest(profile)
    if waiting is None:
        return None
    names = tile_names(profile.manifest["mesh"]["tiles"])
    stage, tile, cycle = str(waiting["stage"]), int(waiting["tile"]), int(waiting["cycle"])
    wait = profile.why(tile if tile >= 0 else None, cycle, stage)
    worker, thread = wait.thread
    return {
        "wait_ns": wait.wait_ns,
        "wait_s": seconds(wait.wait_ns),
        "from_s": seconds(wait.start_ns),
        "until_s": seconds(wait.end_ns),
        "worker": worker,
        "thread": thread,
        "task": task_name(wait.task, names),
        "cell": _cell(wait.task, cells),
        "links": _links(wait, cells),
        "command": _command(stage, names[tile] if tile >= 0 else None, cycle),
    }


def _longest(profile: Profile) -> pd.Series[Any] | None:
    """The task behind the most waiting that is not the dispatch's."""
    gaps, tasks = profile.ledger.gaps, profile.tasks
    at = positions(integers(tasks, "task"), integers(gaps, "task"))
    later = (integers(gaps, "start_ns") > profile.ledger.first_ns) & (integers(tasks, "cycle")[at] >= 0)
    waited = np.where(later, gaps[list(IDLE)].sum(axis=1).to_numpy(), 0)
    return tasks.iloc[int(at[int(np.argmax(waited))])] if waited.any() else None


def _links(wait: Why, cells: Cells) -> list[dict[str, Any]]:
    """The parts in words, those that explain little added up at the end."""
    parts = wait.parts
    links: list[dict[str, Any]] = [
        {"ns": int(ns), "account": str(account), "what": words, "cell": cells.cell_of(int(tile))}
        for ns, account, tile, words in zip(parts["ns"], parts["account"], parts["tile"], wait.sentences(), strict=True)
    ]
    longest = sorted(range(len(links)), key=lambda place: -links[place]["ns"])[:MOST_LINKS]
    kept = [place for place in sorted(longest) if links[place]["ns"] >= SMALL * wait.wait_ns]
    chosen = [links[place] for place in kept]
    rest = [links[place] for place in range(len(links)) if place not in set(kept)]
    if rest:
        chosen.append({"ns": sum(link["ns"] for link in rest), "account": "", "what": _rest(rest), "cell": -1})
    return [{**link, "s": seconds(link["ns"])} for link in chosen]


def _rest(links: list[dict[str, Any]]) -> str:
    accounts = sorted({LABELS.get(link["account"], link["account"]) for link in links})
    return f"{len(links)} smaller part{'s' if len(links) > 1 else ''}: {', '.join(accounts)}"


def _cell(task: Mapping[str, Any], cells: Cells) -> int:
    return cells.cell_of(int(task["tile"]))


def _command(stage: str, tile: str | None, cycle: int) -> str:
    """How to ask for the same on the command line."""
    return f"breakstep why PROFILE{f' --tile {tile}' if tile else ''} --cycle {cycle} --step {stage}"
