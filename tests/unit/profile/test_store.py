"""Profiles on disk: what is written comes back, and whatever is damaged is named in one sentence."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import xarray as xr

from breakstep.errors import OutputError, ProfileError
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from breakstep.profile.schema import LAYOUTS, SCHEMA_VERSION
from breakstep.profile.store import profiles_in, read_manifest, read_profile, write_profile
from tests.unit.profile.sketch import draw, with_fields

DRAWING = """
0.0 |AAAAPP....|
1.0 |BB......CC|
1.1 |..........|
"""


def small_record() -> RunRecord:
    """A run with a row in every table, and fields."""
    record = draw(DRAWING, "A>P, P>C, B>C, A>B barrier", kinds={"P": "pack"}, arrivals={("P", 1): 8})
    record.counters.append((0, "work", "sub_steps", 7))
    return with_fields(record)


@pytest.fixture(scope="module")
def stored(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("profiles") / "tasked-1"
    write_profile(small_record(), folder)
    return folder


@pytest.fixture
def copied(stored: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(stored, tmp_path / "copy"))


def test_round_trip(stored: Path) -> None:
    record = small_record()
    made, read = Profile.from_record(record), read_profile(stored)
    assert set(read.frames) == set(LAYOUTS)
    for name, frame in made.frames.items():
        pd.testing.assert_frame_equal(read.frames[name], frame, check_categorical=False)
    assert read.manifest == made.manifest
    assert read.manifest["schema_version"] == SCHEMA_VERSION
    assert read.ledger.accounts_ns == made.ledger.accounts_ns
    assert read.folder == stored
    xr.testing.assert_identical(read.fields.load(), made.fields)
    assert read.fields["gas"].dims == ("gas_component", "x", "y", "z")
    assert list(read.fields["gas_component"].values) == ["density", "temperature"]
    assert read.fields["radiation"].attrs["units"] == ["erg cm^-3"] * 3
    assert read.fields["x"].attrs["units"] == "cm"


def test_what_writing_returns_is_what_reading_gives(tmp_path: Path) -> None:
    written = write_profile(small_record(), tmp_path / "run")
    read = read_profile(tmp_path / "run")
    assert written.manifest == read.manifest
    assert written.ledger.accounts_ns == read.ledger.accounts_ns
    xr.testing.assert_identical(read.fields.load(), written.fields)


def test_xarray_alone_opens_the_fields(stored: Path) -> None:
    dataset = xr.open_zarr(stored / "fields.zarr", consolidated=False, chunks=None)
    np.testing.assert_array_equal(dataset["gas"].values, small_record().fields["gas"].values)


def test_folder_holds_open_formats_only(stored: Path) -> None:
    names = {path.name for path in stored.iterdir()}
    assert names == {"manifest.json", "fields.zarr"} | {f"{table}.parquet" for table in LAYOUTS}


def test_run_without_fields_and_tasks_round_trips(tmp_path: Path) -> None:
    record = draw("0.0 |....|")
    record.manifest |= {"status": "interrupted", "message": "stopped by the user"}
    write_profile(record, tmp_path / "run")
    read = read_profile(tmp_path / "run")
    assert len(read.tasks) == 0
    assert list(read.fields.data_vars) == []
    assert set(read.ledger.accounts_ns.values()) == {0}


def test_interrupted_run_keeps_what_ran(tmp_path: Path) -> None:
    record = draw("0.0 |AABB|", "A>B, B>C")  # C was never run
    record.manifest["status"] = "interrupted"
    write_profile(record, tmp_path / "run")
    read = read_profile(tmp_path / "run")
    assert read.edges[["producer", "consumer"]].values.tolist() == [[0, 1]]


def test_numpy_numbers_and_tuples_in_a_manifest_are_stored_as_plain_ones(tmp_path: Path) -> None:
    record = draw("0.0 |AA|")
    record.manifest["cycles"] = np.int64(3)
    record.manifest["barriers"] = ("sweep", "burn")
    write_profile(record, tmp_path / "run")
    assert read_manifest(tmp_path / "run")["cycles"] == 3
    assert read_manifest(tmp_path / "run")["barriers"] == ["sweep", "burn"]


def test_failed_run_keeps_its_profile_whatever_its_values(tmp_path: Path) -> None:
    record = draw("0.0 |AA|")
    record.manifest |= {"status": "failed", "message": "dt is not finite"}
    record.manifest["notes"] = {"values": {"dt": [np.nan, -np.inf, 1.5]}}
    write_profile(record, tmp_path / "run")
    assert read_manifest(tmp_path / "run")["notes"] == {"values": {"dt": ["NaN", "-Infinity", 1.5]}}


def test_an_existing_profile_is_not_replaced_unasked(tmp_path: Path) -> None:
    write_profile(small_record(), tmp_path)
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(OutputError, match="holds a profile already; choose another folder"):
        write_profile(small_record(), tmp_path)
    write_profile(draw("0.0 |AAAA|"), tmp_path, overwrite=True)
    assert read_profile(tmp_path).ledger.accounts_ns["compute"] == 4
    assert list(read_profile(tmp_path).fields.data_vars) == []
    assert (tmp_path / "notes.txt").read_text() == "mine"


def test_folder_that_cannot_be_made_is_an_output_error(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot be written"):
        write_profile(small_record(), tmp_path / "file" / "run")


def test_contradictory_record_leaves_no_manifest(tmp_path: Path) -> None:
    record = draw("0.0 |AABB|", "A>B, B>C")
    with pytest.raises(ProfileError, match=r"edges\.parquet: column consumer, row 1: expected a number of the"):
        write_profile(record, tmp_path / "run")
    assert not (tmp_path / "run" / "manifest.json").exists()
    with pytest.raises(ProfileError, match=r"not a complete profile, manifest\.json is missing"):
        read_profile(tmp_path / "run")


def test_profiles_in_a_comparison(tmp_path: Path) -> None:
    for name in ("tasked-1", "lockstep-1"):
        write_profile(draw("0.0 |AA|"), tmp_path / name)
    assert [path.name for path in profiles_in(tmp_path)] == ["lockstep-1", "tasked-1"]
    assert profiles_in(tmp_path / "tasked-1") == [tmp_path / "tasked-1"]
    with pytest.raises(ProfileError, match="give one of the 2 profiles in it: lockstep-1, tasked-1"):
        read_profile(tmp_path)


def change_manifest(folder: Path, **changes: Any) -> None:
    manifest = json.loads((folder / "manifest.json").read_text())
    (folder / "manifest.json").write_text(json.dumps(manifest | changes))


def change_table(folder: Path, table: str, change: Callable[[pa.Table], pa.Table]) -> None:
    file = folder / f"{table}.parquet"
    pq.write_table(change(pq.read_table(file)), file)


def set_column(table: pa.Table, column: str, values: list[Any]) -> pa.Table:
    place = table.column_names.index(column)
    return table.set_column(place, column, pa.array(values, type=table.schema.field(column).type))


def cut_short(file: Path) -> None:
    file.write_bytes(file.read_bytes()[: file.stat().st_size // 2])


def chunk_of(folder: Path, field: str) -> Path:
    return next(path for path in sorted((folder / "fields.zarr" / field / "c").rglob("*")) if path.is_file())


def overwrite_field(folder: Path) -> None:
    """Store other numbers, soundly."""
    other = with_fields(small_record(), seed=2)
    write_profile(other, folder / "other")
    shutil.rmtree(folder / "fields.zarr")
    (folder / "other" / "fields.zarr").rename(folder / "fields.zarr")


def change_array(folder: Path, **changes: Any) -> None:
    file = folder / "fields.zarr" / "gas" / "zarr.json"
    file.write_text(json.dumps(json.loads(file.read_text()) | changes))


DAMAGES: dict[str, tuple[Callable[[Path], object], str]] = {
    "no manifest": (
        lambda f: (f / "manifest.json").unlink(),
        r"copy: not a complete profile, manifest\.json is missing; give the folder that a finished run named",
    ),
    "manifest is not JSON": (
        lambda f: (f / "manifest.json").write_text("{'mode':"),
        r"manifest\.json: cannot be read as JSON",
    ),
    "manifest is not text": (
        lambda f: (f / "manifest.json").write_bytes(b"\xff\xfe\x00"),
        r"manifest\.json: cannot be read as JSON",
    ),
    "manifest is nested without end": (
        lambda f: (f / "manifest.json").write_text("[" * 100_000),
        r"manifest\.json: cannot be read as JSON",
    ),
    "manifest with NaN": (
        lambda f: (f / "manifest.json").write_text('{"wall_seconds": NaN}'),
        r"manifest\.json: cannot be read as JSON \(NaN is not JSON\)",
    ),
    "manifest is a list": (
        lambda f: (f / "manifest.json").write_text("[1]"),
        r"manifest\.json: expected a JSON object, not list",
    ),
    "other schema version": (
        lambda f: change_manifest(f, schema_version=SCHEMA_VERSION + 1),
        rf"manifest\.json: schema_version is {SCHEMA_VERSION + 1}, this program reads version",
    ),
    "table is missing": (
        lambda f: (f / "edges.parquet").unlink(),
        r"edges\.parquet: expected the table edges, the file is missing",
    ),
    "table is cut short": (
        lambda f: cut_short(f / "tasks.parquet"),
        r"tasks\.parquet: cannot be read as Parquet .* cut short or damaged",
    ),
    "table is empty": (
        lambda f: (f / "tasks.parquet").write_bytes(b""),
        r"tasks\.parquet: cannot be read as Parquet",
    ),
    "table is something else": (
        lambda f: (f / "threads.parquet").write_text("worker,thread\n0,0\n"),
        r"threads\.parquet: cannot be read as Parquet",
    ),
    "table is a folder": (
        lambda f: ((f / "threads.parquet").unlink(), (f / "threads.parquet").mkdir()),
        r"threads\.parquet: expected the table threads, the file is missing",
    ),
    "column is missing": (
        lambda f: change_table(f, "tasks", lambda t: t.drop_columns(["end_ns"])),
        r"tasks\.parquet: column end_ns: expected it once, found the columns task, kind",
    ),
    "column of another type": (
        lambda f: change_table(f, "counters", lambda t: t.set_column(3, "value", pa.array([1.5]))),
        r"counters\.parquet: column value: expected int64, found double",
    ),
    "rows are missing": (
        lambda f: change_table(f, "edges", lambda t: t.slice(1)),
        r"edges\.parquet: expected 4 rows as the manifest says, found 3",
    ),
    "empty value": (
        lambda f: change_table(f, "counters", lambda t: set_column(t, "value", [None])),
        r"counters\.parquet: column value: expected a value in every row, not 1 empty ones",
    ),
    "unknown word": (
        lambda f: change_table(f, "edges", lambda t: set_column(t, "kind", ["data", "data", "rope", "data"])),
        r"edges\.parquet: column kind, row 2: expected one of data, reduction, barrier, not rope",
    ),
    "edges in a ring": (
        lambda f: change_table(
            f,
            "edges",
            lambda t: set_column(set_column(t, "producer", [0, 1, 2, 2]), "consumer", [1, 2, 1, 15]),
        ),
        r"edges\.parquet: task \d+ waits for itself through a ring of edges",
    ),
    "another number of tiles": (
        lambda f: change_manifest(f, placement=[0]),
        r"manifest\.json: key placement: expected a worker for each of 26 tiles, not 1",
    ),
    "no fields": (
        lambda f: shutil.rmtree(f / "fields.zarr"),
        r"fields\.zarr: expected a Zarr store with the final fields, found none",
    ),
    "field of the manifest is missing": (
        lambda f: shutil.rmtree(f / "fields.zarr" / "gas"),
        r"fields\.zarr: expected the fields gas, radiation of the manifest, found radiation",
    ),
    "chunk is cut short": (
        lambda f: cut_short(chunk_of(f, "gas")),
        r"fields\.zarr: cannot be read as a Zarr store",
    ),
    "chunk is missing": (
        lambda f: chunk_of(f, "gas").unlink(),
        r"fields\.zarr, field gas: the values on tile 0 \(26 of 26 tiles differ\) do not have the digest",
    ),
    "coordinate is missing": (
        lambda f: chunk_of(f, "x").unlink(),
        r"fields\.zarr/x: expected ascending zone centres",
    ),
    "other numbers": (
        overwrite_field,
        r"fields\.zarr, field gas: the values on tile 0 \(26 of 26 tiles differ\) do not have the digest",
    ),
    "overall digest": (
        lambda f: change_manifest(f, digest="0" * 64),
        r"manifest\.json: key digest does not belong to key digests",
    ),
    "array description is damaged": (
        lambda f: (f / "fields.zarr" / "gas" / "zarr.json").write_text("{"),
        r"gas/zarr\.json: cannot be read as the description of an array",
    ),
    "array of objects": (
        lambda f: change_array(f, data_type="object"),
        r"gas/zarr\.json: expected float64 with the codecs bytes, zstd, not object",
    ),
    "foreign codec": (
        lambda f: change_array(f, codecs=[{"name": "numcodecs.pickle", "configuration": {}}]),
        r"gas/zarr\.json: expected float64 with the codecs bytes, zstd, not float64 with .*pickle",
    ),
}


@pytest.mark.parametrize("damage", DAMAGES)
def test_damage_is_named(copied: Path, damage: str) -> None:
    inflict, message = DAMAGES[damage]
    inflict(copied)
    with pytest.raises(ProfileError, match=message) as caught:
        read_profile(copied)
    assert "\n" not in str(caught.value)
    assert str(copied) in str(caught.value)


def test_missing_and_foreign_folders(tmp_path: Path) -> None:
    with pytest.raises(ProfileError, match="nowhere: expected a profile folder, there is none; check the path"):
        read_profile(tmp_path / "nowhere")
    (tmp_path / "data.csv").write_text("1,2\n")
    with pytest.raises(ProfileError, match=r"not a complete profile, manifest\.json is missing"):
        read_profile(tmp_path)


def test_digests_can_be_left_unchecked(copied: Path) -> None:
    overwrite_field(copied)
    assert read_profile(copied, check_digests=False).ledger.accounts_ns["compute"] > 0


def test_one_wrong_bit_in_one_tile_is_found(copied: Path) -> None:
    manifest = json.loads((copied / "manifest.json").read_text())
    manifest["digests"]["radiation"][5] = "f" * 64
    (copied / "manifest.json").write_text(json.dumps(manifest))
    with pytest.raises(ProfileError, match=r"field radiation: the values on tile 5 \(1 of 26 tiles differ\)") as caught:
        read_profile(copied)
    assert caught.value.details["tiles"] == [5]


def test_random_damage_never_raises_anything_else(stored: Path, tmp_path: Path) -> None:
    """Flip a byte or cut a file short somewhere, many times: an answer or a ProfileError, nothing else."""
    numbers = np.random.default_rng(7)
    files = sorted(path.relative_to(stored) for path in stored.rglob("*") if path.is_file())
    folder = Path(shutil.copytree(stored, tmp_path / "copy"))
    refused = 0
    for trial in range(150):
        file = folder / files[int(numbers.integers(len(files)))]
        whole = file.read_bytes()
        place = int(numbers.integers(len(whole)))
        damaged = bytearray(whole)
        damaged[place] ^= int(numbers.integers(1, 256))
        file.write_bytes(whole[:place] if trial % 3 == 0 else bytes(damaged))
        try:
            read_profile(folder).ledger  # noqa: B018
        except ProfileError:
            refused += 1
        file.write_bytes(whole)
    assert refused > 75  # some bytes (names of software, statistics) carry nothing that can be checked
