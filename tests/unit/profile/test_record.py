"""Recording: rows come in by ones, by threads and by tables, and come out as typed columns."""

from __future__ import annotations

import threading

import numpy as np
import pyarrow as pa
import pytest

from breakstep.errors import ProfileError
from breakstep.profile.record import CHUNK_ROWS, FinalField, RowBuffer, RunRecord
from breakstep.profile.run import Profile
from breakstep.profile.schema import COUNTERS, EDGES, LAYOUTS, THREADS
from tests.unit.profile.sketch import draw, with_fields


def test_rows_come_out_in_order_and_typed() -> None:
    buffer = RowBuffer(EDGES)
    rows = [(i, i + 1, ("data", "reduction", "barrier")[i % 3]) for i in range(2 * CHUNK_ROWS + 5)]
    buffer.extend(rows)
    assert len(buffer) == len(rows)
    table = buffer.table()
    assert table.schema.equals(EDGES.arrow)
    assert list(zip(*(column.to_pylist() for column in table.columns), strict=True)) == rows
    assert table.column("kind").num_chunks == 1
    assert buffer.table().equals(table)  # looking does not consume


def test_packed_rows_are_compact() -> None:
    """Two int64 and an int32 code: 20 bytes a row, and a dictionary of three words."""
    buffer = RowBuffer(EDGES)
    buffer.extend((i, i + 1, "data") for i in range(10 * CHUNK_ROWS))
    assert buffer.table().nbytes < 21 * len(buffer)


def test_threads_append_without_losing_rows() -> None:
    buffer = RowBuffer(COUNTERS)
    each = 3 * CHUNK_ROWS

    def count(first: int) -> None:
        for value in range(each):
            buffer.append((first, "burn", "sub_steps", value))

    threads = [threading.Thread(target=count, args=(first,)) for first in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    table = buffer.table()
    assert table.num_rows == 4 * each
    frame = table.to_pandas()
    for _, rows in frame.groupby("task"):
        assert list(rows["value"]) == list(range(each))


def test_records_of_workers_are_added_up() -> None:
    whole, part = RunRecord(), RunRecord()
    whole.edges.append((0, 1, "data"))
    part.edges.append((1, 2, "barrier"))
    part.threads.append((1, 0))
    whole.add_tables(part.tables())
    tables = whole.tables()
    assert set(tables) == set(LAYOUTS)
    assert tables["edges"].column("kind").to_pylist() == ["barrier", "data"]
    assert tables["threads"].to_pylist() == [{"worker": 1, "thread": 0}]


def test_wrong_rows_are_named() -> None:
    short = RowBuffer(THREADS)
    short.append((1,))
    with pytest.raises(ProfileError, match=r"table threads: expected rows of 2 values \(worker, thread\), not \(1,\)"):
        short.table()
    wrong = RowBuffer(THREADS)
    wrong.append((0, "first"))
    with pytest.raises(ProfileError, match="table threads: column thread takes int32"):
        wrong.table()
    large = RowBuffer(THREADS)
    large.append((0, 2**40))
    with pytest.raises(ProfileError, match="table threads: column thread takes int32"):
        large.table()
    with pytest.raises(ProfileError, match="table threads: expected the columns worker, thread"):
        RowBuffer(THREADS).add_table(pa.table({"worker": [1]}))


def test_manifest_that_json_cannot_hold_is_named() -> None:
    record = draw("0.0 |A|")
    record.manifest["notes"] = {"lock": threading.Lock()}
    with pytest.raises(ProfileError, match="record, manifest: expected what JSON can hold, but found lock"):
        Profile.from_record(record)
    record.manifest["notes"] = {}
    del record.manifest["mode"]
    with pytest.raises(ProfileError, match="record, manifest: key mode is missing"):
        Profile.from_record(record)


def test_fields_that_do_not_fit_are_named() -> None:
    record = with_fields(draw("0.0 |A|"))
    gas = record.fields["gas"]
    record.fields["gas"] = FinalField(gas.values[:, 1:], gas.components, gas.units)
    with pytest.raises(ProfileError, match=r"field gas: expected float64 values of shape \(2, 26, 1, 1\)"):
        Profile.from_record(record)
    record.fields["gas"] = FinalField(gas.values, gas.components, ("g", "K", "K"))
    with pytest.raises(ProfileError, match="field gas: expected one unit or one for each of 2 components, not 3"):
        Profile.from_record(record)


def test_digests_that_the_engine_made_are_kept() -> None:
    record = with_fields(draw("0.0 |A|"))
    made = Profile.from_record(record).manifest["digests"]
    record.manifest["digests"] = {name: list(tiles) for name, tiles in made.items()}
    assert Profile.from_record(record).manifest["digests"] == made
    assert np.all([len(tiles) == 26 for tiles in made.values()])


def test_tables_are_reached_by_name() -> None:
    profile = Profile.from_record(draw("0.0 |AB|", "A>B"))
    for name in LAYOUTS:
        assert getattr(profile, name) is profile.frames[name]
    assert profile.tile_count == 26
