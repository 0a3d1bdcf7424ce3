"""A profile of a million tasks is read and accounted for in seconds."""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest

from breakstep.profile.frames import Integers
from breakstep.profile.record import RunRecord
from breakstep.profile.schema import LAYOUTS
from breakstep.profile.store import read_profile, write_profile
from tests.exact import check_accounts, check_chain, check_factors, check_recorded
from tests.unit.profile.sketch import manifest

WORKERS, TILES_EACH = 20, 50
TILES = WORKERS * TILES_EACH


def words(codes: Integers, names: list[str]) -> pa.DictionaryArray:
    return pa.DictionaryArray.from_arrays(pa.array(codes.astype(np.int32)), pa.array(names))


def columns(name: str, *values: object) -> pa.Table:
    """A table of a layout from columns, whole numbers cast to its types."""
    layout = LAYOUTS[name]
    cast = [
        v.astype(c.type.to_pandas_dtype()) if isinstance(v, np.ndarray) else v
        for c, v in zip(layout.columns, values, strict=True)
    ]
    return pa.table([pa.array(v) if isinstance(v, np.ndarray) else v for v in cast], schema=layout.arrow)


def ring(phases: int) -> RunRecord:
    """Tiles in a ring, each phase after the one before: every task reads its own tile and both neighbours."""
    count = phases * TILES
    task = np.arange(count)
    tile, zeros = task % TILES, np.zeros(count, dtype=np.int64)
    length = np.random.default_rng(1).integers(10_000, 1_000_000, (phases, WORKERS, TILES_EACH))
    ends = np.cumsum(length, axis=2)
    begin = np.concatenate([[0], np.cumsum(ends[:, :, -1].max(axis=1) + 50_000)[:-1]])
    end = (ends + begin[:, None, None]).reshape(-1)
    start = end - length.reshape(-1)
    worker = tile // TILES_EACH
    record = RunRecord()
    record.tasks.add_table(
        columns(
            *("tasks", task, words(zeros, ["step"]), words(zeros, ["work"]), tile, task // TILES, zeros - 1),
            *(worker, zeros, start, end, zeros + 8, np.zeros(count, dtype=bool)),
        )
    )
    kernel = words(zeros, ["kernel"])
    spent = (end - start) * 9 // 10
    record.intervals.add_table(columns("intervals", task, kernel, words(zeros, ["work"]), start, end, spent))
    later = task[TILES:]
    made = np.concatenate([later - TILES - tile[TILES:] + (tile[TILES:] + d) % TILES for d in (-1, 0, 1)])
    used = np.tile(later, 3)
    record.edges.add_table(columns("edges", made, used, words(np.zeros(len(made), dtype=np.int64), ["data"])))
    apart = worker[made] != worker[used]
    made, used = made[apart], used[apart]
    none = np.zeros(len(made), dtype=np.int64)
    moved = (
        made,
        words(none, ["gas"]),
        worker[made],
        worker[used],
        none + 8,
        none,
        none,
        end[made],
        end[made] + 20_000,
    )
    record.transfers.add_table(columns("transfers", *moved))
    record.threads.add_table(columns("threads", np.arange(WORKERS), np.zeros(WORKERS, dtype=np.int64)))
    record.manifest = manifest(WORKERS, WORKERS, TILES, placement=(np.arange(TILES) // TILES_EACH).tolist())
    return record


@pytest.mark.slow
def test_a_million_tasks(tmp_path: Path) -> None:
    """Measured: 2.3 s of CPU time on one core for reading and all accounts; 10 leave room for a slower one."""
    check_recorded(write_profile(ring(2), tmp_path / "small"))  # compiles
    write_profile(ring(1000), tmp_path / "large")
    began = time.process_time()
    profile = read_profile(tmp_path / "large")
    ledger = profile.ledger
    assert ledger.chain.span_ns == ledger.span_ns >= ledger.factors.ideal_ns
    spent = time.process_time() - began
    assert (len(profile.tasks), len(profile.edges)) == (1_000_000, 2_997_000)
    assert spent < 10.0
    check_accounts(ledger)
    check_chain(ledger.chain, ledger)
    check_factors(ledger.factors)
