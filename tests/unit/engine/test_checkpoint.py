"""Checkpoints on disk: whole or not at all, the same bits back, and damage of any kind told."""

from __future__ import annotations

import json
import shutil
import threading
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from breakstep.engine import checkpoint
from breakstep.engine.checkpoint import (
    KEPT,
    MANIFEST,
    checkpoints,
    complete,
    discard_partial,
    folder_of,
    last_checkpoint,
    load_tiles,
    load_values,
    partial_folder,
    read_manifest,
    save_tiles,
)
from breakstep.engine.program import Program
from breakstep.errors import CheckpointError, OutputError
from breakstep.steps.step import Array
from tests.toys import Toy

PROGRAM = Program(Toy((7, 5)).problem(), (4, 3))  # tiles of four sizes
RUN = "run"
VALUES = {"dt": [[0.1, 2.0 / 3.0]]}
FACTS = {"scenario": {"name": "toy"}}
State = dict[int, dict[str, Array]]


def state_of(seed: int) -> State:
    """Arrays with every kind of double in them."""
    random = np.random.default_rng(seed)
    bits = {
        number: {
            name: random.integers(0, 2**64, PROGRAM.fields[name].shape(tile.shape), dtype=np.uint64).view(np.float64)
            for name in PROGRAM.state_fields
        }
        for number, tile in enumerate(PROGRAM.tiling.tiles)
    }
    bits[0]["u"][0, 0, 0, 0] = -0.0
    return bits


def write(root: Path, cycle: int = 3, seed: int = 0, run: str = RUN) -> Path:
    """A checkpoint that two workers have written."""
    state, digests = state_of(seed), {name: {} for name in PROGRAM.state_fields}  # type: ignore[var-annotated]
    for mine in (range(3), range(3, len(PROGRAM.tiling))):
        share = save_tiles(root, cycle, PROGRAM, {tile: state[tile] for tile in mine}, run)
        for name, tiles in share.items():
            digests[name].update(tiles)
    return complete(root, cycle, PROGRAM, digests, VALUES, FACTS, run)


@settings(max_examples=10, deadline=None)
@given(seed=st.integers(0, 2**32), cycle=st.integers(0, 10**8 - 1))
def test_the_same_bits_come_back(tmp_path_factory: pytest.TempPathFactory, seed: int, cycle: int) -> None:
    root = tmp_path_factory.mktemp("root")
    folder, state = write(root, cycle, seed), state_of(seed)
    assert folder == folder_of(root, cycle) == last_checkpoint(root) == last_checkpoint(folder)
    found = load_tiles(folder, PROGRAM, range(len(PROGRAM.tiling)))
    for tile, arrays in state.items():
        for name, array in arrays.items():
            back = found[tile][name]
            assert back.tobytes() == array.tobytes()
            assert back.shape == array.shape
            assert back.flags.c_contiguous
            assert not back.flags.writeable
    assert [rows.tolist() for rows in load_values(folder, PROGRAM)] == [VALUES["dt"]]
    assert read_manifest(folder)["cycle"] == cycle
    assert read_manifest(folder)["scenario"] == FACTS["scenario"]


def test_some_tiles_are_read_without_the_others(tmp_path: Path) -> None:
    folder = write(tmp_path)
    assert set(load_tiles(folder, PROGRAM, [2, 3])) == {2, 3}


def test_only_whole_checkpoints_count(tmp_path: Path) -> None:
    root = tmp_path / "root"
    assert checkpoints(root) == []
    with pytest.raises(CheckpointError, match="holds no complete checkpoint; run with --checkpoint-every"):
        last_checkpoint(root)
    save_tiles(root, 9, PROGRAM, state_of(1), RUN)
    assert checkpoints(root) == []
    first = write(root, 4)
    partial_folder(root, 8, "other").mkdir()
    (root / "cycle-00000007").mkdir()  # not ours, or without its manifest
    assert checkpoints(root) == [first]
    assert last_checkpoint(root) == first
    discard_partial(root)
    assert sorted(root.iterdir()) == [first, root / "cycle-00000007"]


def test_the_newest_few_are_kept(tmp_path: Path) -> None:
    written = [write(tmp_path, cycle) for cycle in (1, 3, 5, 7)]
    assert checkpoints(tmp_path) == written[-KEPT:] == sorted(tmp_path.iterdir())


def test_a_checkpoint_may_be_written_again(tmp_path: Path) -> None:
    write(tmp_path, 3, seed=1)
    folder = write(tmp_path, 3, seed=2, run="again")
    assert load_tiles(folder, PROGRAM, [0])[0]["u"].tobytes() == state_of(2)[0]["u"].tobytes()
    assert list(tmp_path.iterdir()) == [folder]


@pytest.mark.parametrize("moment", range(3))
def test_a_driver_that_dies_while_it_tidies_up_leaves_no_half_checkpoint(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, moment: int
) -> None:
    """It dies in the course of the removal of the oldest checkpoint: after some of its files, or before any."""
    for cycle in (1, 3):
        write(tmp_path, cycle)

    def die(path: Path) -> None:
        for file in [p for p in sorted(path.rglob("*")) if p.is_file()][:moment]:
            file.unlink()
        raise KeyboardInterrupt

    monkeypatch.setattr(shutil, "rmtree", die)
    with pytest.raises(KeyboardInterrupt):
        write(tmp_path, 5)
    monkeypatch.undo()
    assert [path.name for path in checkpoints(tmp_path)] == ["cycle-00000003", "cycle-00000005"]
    for path in checkpoints(tmp_path):
        load_tiles(path, PROGRAM, range(len(PROGRAM.tiling)))


def test_workers_that_begin_at_once_write_into_one_array(tmp_path: Path) -> None:
    """Sixteen threads stand for as many workers; whoever loses the race to make an array finds it whole."""
    tiles, start, errors = range(len(PROGRAM.tiling)), threading.Barrier(16), []

    def work(number: int) -> None:
        mine = {tile: arrays for tile, arrays in state_of(0).items() if tile % 16 == number}
        start.wait()
        try:
            save_tiles(tmp_path, 0, PROGRAM, mine, RUN)
        except Exception as error:
            errors.append(error)

    threads = [threading.Thread(target=work, args=(number,)) for number in range(16)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert errors == []
    partial = partial_folder(tmp_path, 0, RUN)
    assert sorted(path.name for path in partial.iterdir()) == sorted(PROGRAM.state_fields)
    digests = save_tiles(tmp_path / "other", 0, PROGRAM, state_of(0), RUN)
    folder = complete(tmp_path, 0, PROGRAM, digests, VALUES, FACTS, RUN)
    load_tiles(folder, PROGRAM, tiles)


# ---- damage -----------------------------------------------------------------------------------------


def flip(path: Path) -> None:
    """One bit in the middle of a file."""
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 4
    path.write_bytes(content)


def cut_short(path: Path) -> None:
    """A file without its second half."""
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])


def empty(path: Path) -> None:
    """A file with nothing in it, as after a power cut."""
    path.write_bytes(b"")


@pytest.mark.parametrize("harm", [flip, cut_short, empty, Path.unlink])
@pytest.mark.parametrize("tile", [0, 3])
def test_a_damaged_chunk_is_told_with_field_and_tile(tmp_path: Path, harm: Callable[[Path], None], tile: int) -> None:
    folder = write(tmp_path)
    place = PROGRAM.tiling.tiles[tile].place
    harm(folder / "w" / "c" / "0" / str(place[0]) / str(place[1]) / str(place[2]))
    with pytest.raises(CheckpointError, match=rf"field 'w' of tile {tile} (is not what was written|cannot be read)"):
        load_tiles(folder, PROGRAM, range(len(PROGRAM.tiling)))
    others = [t for t in range(len(PROGRAM.tiling)) if t != tile]
    assert set(load_tiles(folder, PROGRAM, others)) == set(others)


@pytest.mark.parametrize("harm", [cut_short, empty, Path.unlink])
def test_a_damaged_description_of_an_array_is_told(tmp_path: Path, harm: Callable[[Path], None]) -> None:
    folder = write(tmp_path)
    harm(folder / "u" / "zarr.json")
    with pytest.raises(CheckpointError, match="field 'u' of tile 0 cannot be read"):
        load_tiles(folder, PROGRAM, [0])


def test_a_field_that_is_missing_is_told(tmp_path: Path) -> None:
    folder = write(tmp_path)
    shutil.rmtree(folder / "v")
    with pytest.raises(CheckpointError, match="field 'v' of tile 0 cannot be read"):
        load_tiles(folder, PROGRAM, [0])


def without_digest(manifest: dict[str, Any]) -> None:
    del manifest["digest"]


def without_values(manifest: dict[str, Any]) -> None:
    del manifest["values"]


def another_version(manifest: dict[str, Any]) -> None:
    manifest["version"] += 1


def another_cycle(manifest: dict[str, Any]) -> None:
    manifest["cycle"] += 1


def another_step(manifest: dict[str, Any]) -> None:
    manifest["values"]["dt"][0][0] *= 1.0 + 2.0**-52


@pytest.mark.parametrize("change", [without_digest, without_values, another_version, another_cycle, another_step])
def test_a_changed_manifest_is_told(tmp_path: Path, change: Callable[[dict[str, Any]], None]) -> None:
    folder = write(tmp_path)
    manifest = json.loads((folder / MANIFEST).read_text())
    change(manifest)
    (folder / MANIFEST).write_text(json.dumps(manifest))
    with pytest.raises(CheckpointError, match=r"checkpoint\.json: .*resume from another"):
        read_manifest(folder)


@pytest.mark.parametrize("content", ["", "{", "[]", "null", "\x00\xff"])
def test_a_manifest_that_is_none_is_told(tmp_path: Path, content: str) -> None:
    folder = write(tmp_path)
    (folder / MANIFEST).write_text(content, encoding="latin-1")
    with pytest.raises(CheckpointError, match=r"checkpoint\.json: .*resume from another"):
        read_manifest(folder)


@pytest.mark.parametrize(
    ("program", "message"),
    [
        (Program(Toy((7, 6)).problem(), (4, 3)), r"its mesh has \[7, 5, 1\] zones, the problem's \[7, 6, 1\]"),
        (Program(Toy((7, 5)).problem(), (4, 5)), r"its tile has \[4, 3\] zones, the problem's \[4, 5\]"),
    ],
)
def test_another_mesh_or_tiling_is_refused(tmp_path: Path, program: Program, message: str) -> None:
    folder = write(tmp_path)
    with pytest.raises(CheckpointError, match=message):
        load_tiles(folder, program, [0])


def test_other_reductions_or_lags_are_refused(tmp_path: Path) -> None:
    folder = write(tmp_path)
    lagging = Program(Toy((7, 5), dt_lag=2).problem(), (4, 3))
    with pytest.raises(CheckpointError, match=r"lags \{'dt': 0\}, the problem has \{'dt': 2\}"):
        load_values(folder, lagging)
    problem = Toy((7, 5)).problem()
    none = Program(replace(problem, splitting=replace(problem.splitting, reductions=(), orders=_no_dt())), (4, 3))
    with pytest.raises(CheckpointError, match=r"the problem has \{\}"):
        load_values(folder, none)


def _no_dt() -> Any:
    (order,) = Toy((7, 5)).problem().splitting.orders
    return (tuple(item for item in order if getattr(item, "name", "") != "grow"),)


def test_a_disk_that_is_full_is_one_sentence(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*arguments: object, **options: object) -> object:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(checkpoint.zarr, "create_array", full)
    with pytest.raises(OutputError, match=r"checkpoint of cycle 3 cannot be written to .* \(No space left on device\)"):
        save_tiles(tmp_path, 3, PROGRAM, state_of(0), RUN)
    monkeypatch.undo()
    digests = save_tiles(tmp_path, 3, PROGRAM, state_of(0), RUN)
    monkeypatch.setattr(Path, "write_text", full)
    with pytest.raises(OutputError, match=r"cannot be completed in .* \(No space left on device\)"):
        complete(tmp_path, 3, PROGRAM, digests, VALUES, FACTS, RUN)
    assert checkpoints(tmp_path) == []
