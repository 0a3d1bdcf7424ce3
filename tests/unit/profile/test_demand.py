"""Logical bytes on small meshes that can be counted by hand."""

from __future__ import annotations

from typing import Any

from breakstep.profile.demand import rims
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.unit.profile.sketch import draw, manifest


def tiles(columns: int, rows: int) -> list[dict[str, Any]]:
    """Tiles of 4 x 3 zones."""
    return [{"origin": [4 * i, 3 * j, 0], "shape": [4, 3, 1]} for i in range(columns) for j in range(rows)]


def pairs(*arguments: Any) -> dict[tuple[int, int], int]:
    """Zones read by maker and user, summed over both sides where the mesh goes round."""
    found: dict[tuple[int, int], int] = {}
    for maker, user, zones in zip(*rims(*arguments), strict=True):
        found[int(maker), int(user)] = found.get((int(maker), int(user)), 0) + int(zones)
    return found


def test_faces_of_four_tiles() -> None:
    """Tiles 0 1 (x = 0) and 2 3 (x = 1): along x they meet with 3 zones a layer, along y with 4."""
    flat = tiles(2, 2)
    along_x = {(0, 2): 6, (2, 0): 6, (1, 3): 6, (3, 1): 6}
    along_y = {(0, 1): 4, (1, 0): 4, (2, 3): 4, (3, 2): 4}
    assert pairs(flat, [2, 0, 0], False, [False] * 3) == along_x
    assert pairs(flat, [0, 1, 0], False, [False] * 3) == along_y
    assert pairs(flat, [2, 1, 0], False, [False] * 3) == along_x | along_y
    corners = {(0, 3): 2, (3, 0): 2, (1, 2): 2, (2, 1): 2}
    assert pairs(flat, [2, 1, 0], True, [False] * 3) == along_x | along_y | corners


def test_a_mesh_that_goes_round() -> None:
    """Two tiles in a row meet twice; a tile that meets itself reads no other."""
    assert pairs(tiles(2, 1), [2, 1, 0], False, [True, True, False]) == {(0, 1): 12, (1, 0): 12}
    assert pairs(tiles(3, 1), [1, 0, 0], False, [False] * 3) == {(0, 1): 3, (1, 0): 3, (1, 2): 3, (2, 1): 3}
    assert pairs(tiles(1, 1), [2, 2, 0], True, [True, True, False]) == {}


def record() -> RunRecord:
    """Two sweeps on each of three tiles in a row, the last of which belongs to worker 1; one passes its input on."""
    run = draw("0.0 |AABB....|\n1.0 |CC..DDEE|")
    run.manifest = manifest(2, 2, tiles=3)
    run.manifest["placement"] = [0, 0, 1]
    run.manifest["mesh"] = {"shape": [12, 3, 1], "tile_shape": [4, 3, 1], "tiles": tiles(3, 1)}
    run.manifest["notes"]["data"] = {
        "fields": {"gas": {"components": 5, "per_tile": False, "scratch": False}},
        "stages": {"work": {"reads": {"gas": {"halo": [2, 0, 0], "corners": False}}, "writes": ["gas"]}},
        "periodic": [False, False, False],
    }
    run.tasks._rows = [
        (*row[:3], tile, *row[4:11], skipped)
        for row, (tile, skipped) in zip(
            run.tasks._rows, [(0, False), (1, False), (2, False), (2, False), (2, True)], strict=True
        )
    ]
    return run


def test_bytes_by_stage_face_and_pair_of_workers() -> None:
    """A face is 3 zones high and read 2 deep: 6 zones of 5 numbers of 8 bytes are 240 bytes a read.

    Tile 0 reads 1 once, tile 1 reads 0 and 2 once, tile 2 reads 1 twice.
    """
    demand = Profile.from_record(record()).demand
    by_face = demand.groupby(["maker", "user"])["bytes"].sum().to_dict()
    assert by_face == {(1, 0): 240, (0, 1): 240, (2, 1): 240, (1, 2): 480}
    by_workers = demand.groupby(["from_worker", "to_worker"])["bytes"].sum().to_dict()
    assert by_workers == {(0, 0): 480, (1, 0): 240, (0, 1): 480}
    assert set(demand["stage"]) == {"work"}
    assert set(demand["field"]) == {"gas"}


def test_a_manifest_that_says_nothing_leaves_nothing_to_tell() -> None:
    profile = Profile.from_record(draw("0.0 |AA|"))
    assert profile.demand.empty
    assert profile.demand["bytes"].sum() == 0
    assert profile.live.by_data == {}
