"""A manifest is checked key by key."""

from __future__ import annotations

import copy
from typing import Any

import pytest

from breakstep.profile.manifest import _CHECKS, Manifest, first_fault
from breakstep.profile.schema import LAYOUTS, SCHEMA_VERSION
from tests.unit.profile.sketch import manifest


def sound() -> dict[str, Any]:
    stored = {
        "schema_version": SCHEMA_VERSION,
        "rows": dict.fromkeys(LAYOUTS, 0),
        "digests": {},
        "digest": "",
    }
    return manifest(2, 4, 3) | stored


def test_sound_manifest() -> None:
    assert first_fault(sound()) is None


def test_each_declared_key_is_checked_and_required() -> None:
    assert set(_CHECKS) == set(Manifest.__annotations__)
    for key in set(_CHECKS) - {"schema_version"}:
        broken = sound()
        del broken[key]
        assert first_fault(broken) == f"key {key} is missing"


@pytest.mark.parametrize(
    ("path", "value", "fault"),
    [
        ("schema_version", "1", "schema_version is '1', this program reads version 1"),
        ("workers", True, "key workers: expected a whole number, not True"),
        ("cycles", -1, "key cycles: expected a whole number, not -1"),
        ("wall_seconds", "long", "key wall_seconds: expected a number of seconds, not 'long'"),
        ("wall_seconds", -1.0, "key wall_seconds: expected a number of seconds, not -1.0"),
        ("status", "done", "key status: expected one of complete, interrupted, failed, not 'done'"),
        ("status", [], "key status: expected one of complete, interrupted, failed, not []"),
        ("software", {"numpy": 2}, "key software: expected names with versions as text, not {'numpy': 2}"),
        ("barriers", "all", "key barriers: expected a list of names, not 'all'"),
        ("rows", {"tasks": 1}, f"key rows: expected the tables {', '.join(LAYOUTS)}, not tasks"),
        ("placement", [0, 1, 2], "key placement: worker 2 does not exist, the run had 2"),
        ("digests", {"u": ["ab"]}, "key digests: field u has 1 digests for 3 tiles"),
        ("mesh.shape", [3, 1], "key mesh.shape: expected three positive whole numbers, not [3, 1]"),
        (
            "mesh.tile_shape",
            [1, 0, 1],
            "key mesh.tile_shape: expected three positive whole numbers, not [1, 0, 1]",
        ),
        ("mesh.tiles", 3, "key mesh.tiles: expected a list of tiles, not 3"),
        ("mesh.shape", [4, 1, 1], "key mesh.tiles: the tiles hold 3 zones, the mesh 4"),
    ],
)
def test_fault(path: str, value: Any, fault: str) -> None:
    broken = copy.deepcopy(sound())
    *above, key = path.split(".")
    place = broken[above[0]] if above else broken
    place[key] = value
    assert first_fault(broken) == fault


@pytest.mark.parametrize("tile", [{"origin": [3, 0, 0], "shape": [1, 1, 1]}, {"origin": [0, 0, 0]}, 7])
def test_tile_outside_of_the_mesh(tile: Any) -> None:
    broken = copy.deepcopy(sound())
    broken["mesh"]["tiles"][1] = tile
    assert str(first_fault(broken)).startswith("key mesh.tiles: tile 1 needs an origin and a shape of three zones")


def test_long_values_are_shortened() -> None:
    assert len(str(first_fault(sound() | {"mode": ["x"] * 1000}))) < 120
