"""Reading timer records, and everything that can be wrong with them."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from breakstep.scenario.timers import read_records
from tests.records import saved, table


def faults(frame: pd.DataFrame, folder: Path, steps: tuple[str, ...] = ("burn",), ranks: int = 4) -> list[str]:
    records, found = read_records(saved(frame, folder / "r.csv"), steps, ranks)
    assert (records is None) == bool(found)
    return list(found)


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
@pytest.mark.parametrize("first", [0, 1, 700])
def test_sound_records_come_back_by_place(tmp_path: Path, suffix: str, first: int) -> None:
    frame = table(4, 3, ("sweep", "burn"), first).sample(frac=1.0, random_state=1)
    records, found = read_records(saved(frame, tmp_path / f"r{suffix}"), ("sweep", "burn"), 4)
    assert found == ()
    assert records is not None
    assert records.cycles == 3
    assert records.sent == {}
    expected = 0.001 * (1 + np.arange(4)) + 0.1 + np.arange(3)[:, None]
    assert records.seconds["burn"].shape == (3, 1, 4)
    np.testing.assert_allclose(records.seconds["burn"][:, 0], expected, rtol=1e-12)  # decimal and back


def test_bytes_are_averaged_by_step(tmp_path: Path) -> None:
    frame = table(4, 2, ("sweep", "burn")).assign(bytes=lambda f: np.where(f["step"] == "sweep", 100 + f["rank"], 0))
    records, _ = read_records(saved(frame, tmp_path / "r.parquet"), ("sweep", "burn"), 4)
    assert records is not None
    assert records.sent == {"sweep": 101.5, "burn": 0.0}


def test_iterations_may_differ_between_cycles(tmp_path: Path) -> None:
    parts = [table(2, 2).assign(iteration=i) for i in range(3)]
    frame = pd.concat(parts)
    frame = frame[~((frame["cycle"] == 0) & (frame["iteration"] > 0))]
    records, found = read_records(saved(frame, tmp_path / "r.csv"), ("burn",), 2)
    assert found == ()
    assert records is not None
    assert np.isfinite(records.seconds["burn"]).sum(axis=(1, 2)).tolist() == [2, 6]


def put(column: str, row: int, value: object) -> Callable[[pd.DataFrame], pd.DataFrame]:
    def spoil(frame: pd.DataFrame) -> pd.DataFrame:
        frame = frame.astype({column: object})
        frame.loc[row, column] = value
        return frame

    return spoil


@pytest.mark.parametrize(
    ("spoil", "sentence"),
    [
        (put("seconds", 2, -0.5), "seconds: expected numbers from 0 to 1e+06, came -0.5 in line 4"),
        (put("seconds", 2, float("nan")), "seconds: expected numbers from 0 to 1e+06, came nan in line 4"),
        (put("seconds", 2, "inf"), "came inf in line 4"),
        (put("seconds", 2, "fast"), "came fast in line 4"),
        (put("rank", 5, 9), "rank: expected 0 to 3, one for each tile of the mesh, came 9 in line 7"),
        (put("rank", 5, 1.5), "rank: expected whole numbers from 0, came 1.5 in line 7"),
        (put("rank", 5, -1), "rank: expected whole numbers from 0, came -1 in line 7"),
        (put("cycle", 0, "one"), "cycle: expected whole numbers from 0, came one in line 2"),
        (put("step", 1, "brun"), "step: expected burn, came brun in line 3; did you mean burn?"),
        (put("step", 1, "x"), "step: expected burn, came x in line 3; list every step in timers.steps"),
        (put("rank", 5, 0), "expected one record for each rank, step and cycle, but line 7 repeats line 6"),
        (lambda f: f.drop(index=6), "there is no record of rank 2, step burn, cycle 1"),
        (lambda f: f.rename(columns={"seconds": "second"}), "the column seconds is missing; did you mean second"),
        (lambda f: f.drop(columns="rank"), "the column tile or rank is missing"),
        (lambda f: f.assign(tile=f["rank"]), "expected a column tile or a column rank, came both"),
        (lambda f: f.assign(seconds=True), "seconds: expected numbers from 0 to 1e+06, came True in line 2"),
        (lambda f: f[:0], "there are no records in it"),
        (put("cycle", 7, 10**12), "there are gaps: 8 records cannot fill 1 steps, 1000000000001 cycles"),
    ],
)
def test_a_fault_is_said_with_its_line(
    tmp_path: Path, spoil: Callable[[pd.DataFrame], pd.DataFrame], sentence: str
) -> None:
    assert any(sentence in fault for fault in faults(spoil(table(4, 2)), tmp_path))


@pytest.mark.parametrize(
    ("spoil", "sentence"),
    [
        (lambda f: f.assign(seconds=pd.to_timedelta(f["seconds"], unit="s")), "seconds: expected numbers from 0"),
        (lambda f: f.assign(cycle=pd.to_datetime(f["cycle"])), "cycle: expected whole numbers from 0"),
        (lambda f: f.assign(rank=f["rank"].astype("u8") + np.uint64(2**63)), "rank: expected whole numbers from 0"),
    ],
)
def test_columns_of_another_kind_are_no_numbers(
    tmp_path: Path, spoil: Callable[[pd.DataFrame], pd.DataFrame], sentence: str
) -> None:
    """pandas would count durations in nanoseconds, and whole numbers of 64 bits without a sign turn negative."""
    _, found = read_records(saved(spoil(table(4, 2)), tmp_path / "r.parquet"), ("burn",), 4)
    assert sentence in found[0]


@pytest.mark.parametrize("column", ["rank", "step", "seconds", "bytes"])
def test_a_column_that_is_there_twice(tmp_path: Path, column: str) -> None:
    path = saved(table(4, 2).assign(bytes=1, again=2), tmp_path / "r.csv")
    path.write_text(path.read_text().replace("again", column, 1))
    assert f"r.csv: there are 2 columns {column}" in read_records(path, ("burn",), 4)[1]


def test_all_faults_are_said_together(tmp_path: Path) -> None:
    frame = pd.concat([table(4, 3), table(1, 1)], ignore_index=True)
    frame.loc[1, "seconds"] = -1.0
    found = faults(frame.drop(index=6), tmp_path)
    assert [fault.split(": ", 1)[1].split(" ", 1)[0] for fault in found] == ["seconds:", "expected", "there"]


def test_many_faults_of_a_kind_are_counted(tmp_path: Path) -> None:
    frame = table(4, 5).assign(seconds=-1.0)
    (found,) = faults(frame, tmp_path)
    assert found.endswith("came -1.0 in line 2, -1.0 in line 3, -1.0 in line 4 and 17 more")


def test_what_is_no_file_of_records(tmp_path: Path) -> None:
    (tmp_path / "r.parquet").write_text("rank,step")
    assert "is no file of timer records" in read_records(tmp_path / "r.parquet", ("burn",), 4)[1][0]
    assert "cannot be read" in read_records(tmp_path / "absent.csv", ("burn",), 4)[1][0]


@pytest.mark.slow
def test_ten_million_records_take_seconds(tmp_path: Path) -> None:
    ranks, cycles = 10_000, 500
    frame = pd.DataFrame(
        {
            "rank": np.tile(np.arange(ranks), 2 * cycles),
            "step": pd.Categorical.from_codes(np.tile(np.repeat([0, 1], ranks), cycles), ["burn", "sweep"]),
            "cycle": np.repeat(np.arange(cycles), 2 * ranks),
            "seconds": np.full(2 * ranks * cycles, 0.25),
        }
    )
    path = saved(frame, tmp_path / "r.parquet")
    began = time.process_time()
    records, found = read_records(path, ("burn", "sweep"), ranks)
    spent = time.process_time() - began
    assert found == ()
    assert records is not None
    assert records.seconds["sweep"].shape == (cycles, 1, ranks)
    assert spent < 15.0  # CPU time; measured 3 s, and test machines differ by less than this factor
