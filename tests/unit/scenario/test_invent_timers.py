"""Invented timer records: the same for the same seed, sound, and with hot ranks that move."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from breakstep.scenario.find import library
from breakstep.scenario.invent_timers import Invention, invent, main
from breakstep.scenario.timers import read_records
from tests.records import STEPS, by_step


@pytest.mark.parametrize("ranks", [(5,), (4, 3), (2, 3, 2)])
def test_records_are_sound_and_repeat(tmp_path: Path, ranks: tuple[int, ...]) -> None:
    option = ",".join(map(str, ranks))
    for name in ("a.csv", "b.parquet"):
        done = CliRunner().invoke(main, [str(tmp_path / name), "--ranks", option, "--cycles", "3", "--iterations", "3"])
        assert done.exit_code == 0, done.output
    one, two = (read_records(tmp_path / name, STEPS, int(np.prod(ranks))) for name in ("a.csv", "b.parquet"))
    assert one[1] == two[1] == ()
    assert one[0] is not None
    assert two[0] is not None
    for step in STEPS:
        np.testing.assert_array_equal(one[0].seconds[step], two[0].seconds[step])
    assert not np.array_equal(invent(Invention(ranks, 3, 1))["seconds"], invent(Invention(ranks, 3, 2))["seconds"])


def test_hot_ranks_move() -> None:
    burn = by_step(invent(Invention((16, 16), 40, seed=1, noise=0.0)), "burn")
    assert len(set(burn.argmax(axis=1))) > 10
    of_a_cycle, of_all = (burn.max(axis=1) / burn.mean(axis=1)).mean(), burn.sum(axis=0).max() / burn.sum(axis=0).mean()
    assert of_a_cycle > 4.0 > 3.0 > of_all  # uneven in every cycle, much less so over the run


def test_bad_options_are_sentences(tmp_path: Path) -> None:
    for path, ranks, said in (("r.csv", "0", "one to three whole numbers"), ("r.txt", "2", "ends in .parquet or .csv")):
        done = CliRunner().invoke(main, [str(tmp_path / path), "--ranks", ranks])
        assert done.exit_code != 0
        assert said in done.output


def test_the_shipped_records_are_what_their_heading_says(tmp_path: Path) -> None:
    heading = (library() / "moving_hot_ranks.toml").read_text("utf-8").split("\nname = ")[0].replace("\n#", " ")
    command = heading.split("invent_timers moving_hot_ranks.csv ")[1].split("  Shows")[0].split("\n")[0]
    options = command.split(" Shows:")[0].split()
    assert CliRunner().invoke(main, [str(tmp_path / "r.csv"), *options]).exit_code == 0
    shipped = (library() / "moving_hot_ranks.csv").read_bytes()
    assert shipped == (tmp_path / "r.csv").read_bytes()
    assert len(shipped) < 50_000
