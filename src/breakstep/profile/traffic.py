"""Bytes moved between workers: by stage, worker pair, field, and pair of tiles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from breakstep.profile.causes import BARRIER
from breakstep.profile.frames import Frames, codes_of, integers, positions, summed, words_of
from breakstep.profile.schema import EDGE_KINDS


@dataclass(frozen=True)
class Traffic:
    """Bytes that crossed workers.

    Attributes
    ----------
    transfers : int
        How many transfers.
    total_bytes : int
    by_stage : dict of str to int
        By the stage whose output moved [bytes].
    by_field : dict of str to int
        [bytes]
    by_workers : dict of (int, int) to int
        By sender and receiver [bytes].
    by_tiles : dict of (int, int) to int
        By the tile that made them and the tile that used them, hence by tile face [bytes]; -1 for what no
        tile's task made or used. Bytes that serve several tiles of one worker move once and are shared out
        evenly.
    packed_ns, unpacked_ns : int
        Time spent on serialisation at the senders, and on its reverse at the receivers [ns].
    """

    transfers: int
    total_bytes: int
    by_stage: dict[str, int]
    by_field: dict[str, int]
    by_workers: dict[tuple[int, int], int]
    by_tiles: dict[tuple[int, int], int]
    packed_ns: int
    unpacked_ns: int


def traffic_of(frames: Frames) -> Traffic:
    """Add up the transfers of a run whose tables are sound."""
    moved, tasks = frames["transfers"], frames["tasks"]
    sender = positions(integers(tasks, "task"), integers(moved, "producer"))
    codes, stages = words_of(tasks, "stage")
    by_stage = summed(pd.DataFrame({"stage": codes[sender], "bytes": integers(moved, "bytes")}), "stage", "bytes")
    return Traffic(
        transfers=len(moved),
        total_bytes=int(integers(moved, "bytes").sum()),
        by_stage={stages[code]: total for code, total in by_stage.items()},
        by_field=summed(moved, "field", "bytes"),
        by_workers=summed(moved, ["from_worker", "to_worker"], "bytes"),
        by_tiles=_by_tiles(frames),
        packed_ns=int(integers(moved, "packed_ns").sum()),
        unpacked_ns=int(integers(moved, "unpacked_ns").sum()),
    )


def _by_tiles(frames: Frames) -> dict[tuple[int, int], int]:
    """Share each transfer out over the tiles at its receiver that use it."""
    moved = frames["transfers"][["producer", "to_worker", "bytes"]].reset_index(names="transfer")
    shares = moved.merge(_users(frames), how="left", on=["producer", "to_worker"])
    shares["user"] = shares["user"].fillna(-1).astype("int64")
    group = shares.groupby("transfer")["user"]
    users, rank = group.transform("size").to_numpy(), group.cumcount().to_numpy()
    whole = integers(shares, "bytes")
    # the remainder goes to the first users, a byte each, so that the shares sum to the whole
    shares["share"] = whole // users + (rank < whole % users)
    tasks = frames["tasks"]
    made_by = positions(integers(tasks, "task"), integers(shares, "producer"))
    shares["maker"] = integers(tasks, "tile")[made_by]
    return summed(shares, ["maker", "user"], "share")


def _users(frames: Frames) -> pd.DataFrame:
    """For each task and worker, the tiles there whose tasks read it: one row each, in the order of tiles."""
    tasks, edges = frames["tasks"], frames["edges"]
    carries = codes_of(edges, "kind", EDGE_KINDS) != BARRIER
    consumer = positions(integers(tasks, "task"), integers(edges, "consumer")[carries])
    users = pd.DataFrame(
        {
            "producer": integers(edges, "producer")[carries],
            "to_worker": integers(tasks, "worker")[consumer],
            "user": integers(tasks, "tile")[consumer],
        }
    )
    sent = np.isin(users["producer"].to_numpy(), integers(frames["transfers"], "producer"))
    return users[sent].drop_duplicates().sort_values(["producer", "to_worker", "user"], ignore_index=True)
