"""What steps demand of their neighbours, against what moved: logical bytes by face, step and pair of workers.

A step that reads a halo reads rims of its neighbour tiles, whoever owns them: these are its logical bytes. Only rims
of tiles of another worker have to move, and a dispatch may move less than is read (a rim that several tiles read goes
once) or more (whole tiles). What moved was recorded; see :mod:`breakstep.profile.traffic`. What is read follows from
the mesh and from what the manifest says of the stages; a manifest that says nothing leaves nothing to tell.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Final

import numpy as np
import pandas as pd

from breakstep.profile.frames import Frames, Integers, codes_of, integers, words_of
from breakstep.profile.schema import TASK_KINDS
from breakstep.profile.words import tile_grid

COLUMNS: Final = ("stage", "field", "maker", "user", "from_worker", "to_worker", "bytes")
NUMBER_BYTES = 8  # fields are float64


def demand_of(frames: Frames, manifest: Mapping[str, Any]) -> pd.DataFrame:
    """Bytes read across tile faces by executed step tasks; iterations after convergence read nothing.

    Returns
    -------
    DataFrame
        One row per stage that reads, field and pair of tiles: ``stage``, ``field``; ``maker`` and ``user``, the tile
        read and the one that reads; ``from_worker`` and ``to_worker``, their owners; ``bytes`` over the whole run.
        Empty if the manifest does not say what stages read.
    """
    data = manifest["notes"].get("data")
    pieces = [] if data is None else list(_pieces(frames, manifest, data))
    if not pieces:
        return pd.DataFrame({name: pd.Series(dtype="str" if name in COLUMNS[:2] else "int64") for name in COLUMNS})
    whole = pd.concat(pieces, ignore_index=True)
    return whole[whole["bytes"] > 0].reset_index(drop=True)


def _pieces(frames: Frames, manifest: Mapping[str, Any], data: Mapping[str, Any]) -> Iterator[pd.DataFrame]:
    mesh, owner = manifest["mesh"], np.asarray(manifest["placement"], dtype=np.int64)
    for stage, count in executed(frames, len(mesh["tiles"])).items():
        for field, read in data["stages"].get(stage, {"reads": {}})["reads"].items():
            if not any(read["halo"]):
                continue
            maker, user, zones = rims(mesh["tiles"], read["halo"], read["corners"], data["periodic"])
            size = count[user] * zones * data["fields"][field]["components"] * NUMBER_BYTES
            names = {"stage": stage, "field": field, "maker": maker, "user": user}
            yield pd.DataFrame({**names, "from_worker": owner[maker], "to_worker": owner[user], "bytes": size})


def executed(frames: Frames, tiles: int) -> dict[str, Integers]:
    """How often each stage's step ran on each tile."""
    tasks = frames["tasks"]
    codes, stages = words_of(tasks, "stage")
    ran = (codes_of(tasks, "kind", TASK_KINDS) == TASK_KINDS.index("step")) & ~tasks["skipped"].to_numpy(dtype=bool)
    tile = integers(tasks, "tile")
    ran &= tile >= 0
    count = np.zeros((len(stages), tiles), dtype=np.int64)
    np.add.at(count, (codes[ran], tile[ran]), 1)
    return {stage: count[code] for code, stage in enumerate(stages)}


def rims(
    tiles: Sequence[Mapping[str, Any]], halo: Sequence[int], corners: bool, periodic: Sequence[bool]
) -> tuple[Integers, Integers, Integers]:
    """Who reads how many zones of whom, for a halo of given widths.

    Parameters
    ----------
    halo : sequence of int
        Widths along x, y and z [zones].
    corners : bool
        Whether tiles that touch at an edge or a corner alone are read too.
    periodic : sequence of bool
        Whether the mesh goes round along each axis.

    Returns
    -------
    maker, user, zones : ndarray of int64, shape (rims,)
    """
    grid = tile_grid(tiles)
    extent = tuple(1 + max((place[axis] for place in grid), default=0) for axis in range(3))
    number = np.zeros(extent, dtype=np.int64)
    for place, tile in grid.items():
        number[place] = tile
    shape = np.asarray([tile["shape"] for tile in tiles], dtype=np.int64).reshape(-1, 3)
    found: list[tuple[Integers, Integers, Integers]] = []
    for offset in itertools.product((-1, 0, 1), repeat=3):
        along = [axis for axis in range(3) if offset[axis]]
        if not along or any(halo[axis] == 0 for axis in along) or (len(along) > 1 and not corners):
            continue
        user, maker = _neighbours(number, offset, periodic)
        zones = np.ones(len(user), dtype=np.int64)
        for axis in range(3):
            zones *= halo[axis] if offset[axis] else shape[user, axis]
        found.append((maker, user, zones))
    if not found:
        none = np.empty(0, dtype=np.int64)
        return none, none, none
    maker, user, zones = (np.concatenate(column) for column in zip(*found, strict=True))
    return maker, user, zones


def _neighbours(number: Integers, offset: tuple[int, ...], periodic: Sequence[bool]) -> tuple[Integers, Integers]:
    """Each tile that has a neighbour at an offset, and that neighbour."""
    there = np.ones(number.shape, dtype=bool)
    for axis, step in enumerate(offset):
        if step and not periodic[axis]:
            beyond = [slice(None)] * 3
            beyond[axis] = slice(-1, None) if step > 0 else slice(0, 1)
            there[tuple(beyond)] = False
    neighbour = np.roll(number, tuple(-step for step in offset), axis=(0, 1, 2))
    there &= neighbour != number  # a tile that meets itself round the mesh reads no other
    return number[there], neighbour[there]
