"""Bytes between workers: over which faces of tiles, made by which step, of which field."""

from __future__ import annotations

from typing import Any

from breakstep.profile.run import Profile
from breakstep.report.page.cells import Cells
from breakstep.report.page.numbers import share
from breakstep.report.page.runs import Runs

MOST_FACES = 600  # a line each on a map of at most 400 cells
MOST_PAIRS = 24


def traffic_panel(runs: Runs, cells: Cells) -> dict[str, Any]:
    """What moved, for each run.

    Returns
    -------
    dict
        For each run ``total_bytes``, ``transfers``, ``by_stage``, ``read_by_stage``, ``by_field``, ``by_workers``
        (sender, receiver, bytes; the busiest pairs), ``faces`` (two cells and the bytes both ways between them, the
        largest first), and ``control_bytes`` (what no tile made or used).
    """
    return {side: _of(profile, cells) for side, profile in runs.sides.items()}


def _of(profile: Profile, cells: Cells) -> dict[str, Any]:
    traffic = profile.traffic
    faces, control = _faces(profile, cells)
    pairs = sorted(traffic.by_workers.items(), key=lambda pair: -pair[1])
    return {
        "total_bytes": traffic.total_bytes,
        "transfers": traffic.transfers,
        "by_stage": _largest_first(traffic.by_stage),
        "read_by_stage": _read(profile),
        "by_field": _largest_first(traffic.by_field),
        "by_workers": [[sender, receiver, count] for (sender, receiver), count in pairs[:MOST_PAIRS]],
        "worker_pairs": len(pairs),
        "faces": [[a, b, count] for (a, b), count in faces[:MOST_FACES]],
        "faces_total": len(faces),
        "control_bytes": control,
        "per_core_second_bytes": round(traffic.total_bytes / max(profile.ledger.available_ns * 1e-9, 1e-9)),
    }


def _read(profile: Profile) -> dict[str, int]:
    """Bytes that steps read across tile faces, whoever owns the tiles; empty where the run does not say."""
    read = profile.demand.groupby("stage")["bytes"].sum()
    return _largest_first({str(stage): int(count) for stage, count in read.items()})


def _largest_first(counts: dict[str, int]) -> dict[str, int]:
    return dict(sorted(counts.items(), key=lambda item: -item[1]))


def _faces(profile: Profile, cells: Cells) -> tuple[list[tuple[tuple[int, int], int]], int]:
    """Bytes between each two cells, both ways together, and the bytes that belong to no two tiles."""
    between: dict[tuple[int, int], int] = {}
    control = 0
    for (maker, user), count in profile.traffic.by_tiles.items():
        if maker < 0 or user < 0:
            control += count
            continue
        a, b = int(cells.of_tile[maker]), int(cells.of_tile[user])
        face = (min(a, b), max(a, b))
        between[face] = between.get(face, 0) + count
    return sorted(between.items(), key=lambda item: -item[1]), control


def by_stage_table(panel: dict[str, Any]) -> list[dict[str, Any]]:
    """One row a stage: bytes of each run and the share of the first."""
    sides = list(panel)
    stages = list(dict.fromkeys(stage for side in sides for stage in panel[side]["by_stage"]))
    stages = [stage for stage in stages if any(panel[side]["by_stage"].get(stage) for side in sides)]
    whole = panel[sides[0]]["total_bytes"]
    return [
        {
            "stage": stage,
            "bytes": {side: panel[side]["by_stage"].get(stage, 0) for side in sides},
            "share": share(panel[sides[0]]["by_stage"].get(stage, 0), whole),
        }
        for stage in stages
    ]
