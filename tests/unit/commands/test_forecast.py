"""``forecast`` and ``advise`` on a recorded profile: figures, refusals, and commands that the program understands."""

from __future__ import annotations

import json
import shlex
from pathlib import Path
from typing import Any

import click
import pytest

from breakstep.cli import cli
from breakstep.commands.session import Session
from breakstep.forecast.figures import page_forecast
from breakstep.profile.store import read_profile
from tests.unit.commands.conftest import Shell, refused

SHIPPED = Path(__file__).parents[3] / "profiles" / "single_spark"
ROW = {"workers", "lockstep_s", "tasked_s", "area_bound_s", "path_bound_s"}


def figures(breakstep: Shell, *arguments: object) -> dict[str, Any]:
    """What a call writes as JSON; it must succeed."""
    answer = breakstep(*arguments, "--json", "figures.json")
    assert answer.code == 0, answer.err
    found: dict[str, Any] = json.loads(Path("figures.json").read_text(encoding="utf-8"))
    return found


def test_forecast_of_both_modes(breakstep: Shell) -> None:
    found = figures(breakstep, "forecast", SHIPPED)
    assert set(found["recorded"]) == {"lockstep", "tasked"}
    for facts in found["recorded"].values():
        assert facts["error"] == pytest.approx(facts["forecast_s"] / facts["measured_s"] - 1.0)
    assert [row["workers"] for row in found["rows"]] == [1, 2]
    assert all(set(row) >= ROW for row in found["rows"])


def test_the_error_stands_beside_every_row(breakstep: Shell) -> None:
    recorded = figures(breakstep, "forecast", SHIPPED)["recorded"]
    worst = 100.0 * max(abs(facts["error"]) for facts in recorded.values())
    answer = breakstep("forecast", SHIPPED, "--machine", "office_cluster", "--workers", "1,2,4")
    assert answer.out.count(f"{worst:.1f} %") >= 3


def test_one_mode_alone_forecasts_both(breakstep: Shell) -> None:
    """How near it comes is a matter of the machine, and printed; here only that it is no nonsense."""
    found = figures(breakstep, "forecast", SHIPPED / "lockstep", "--check", SHIPPED / "tasked")
    assert set(found["recorded"]) == {"lockstep"}
    (check,) = found["checked"]
    assert set(check["recorded"]) == {"tasked"}
    assert 0.4 < check["recorded"]["tasked"]["forecast_s"] / check["recorded"]["tasked"]["measured_s"] < 2.5


def test_what_ifs_change_the_answer(breakstep: Shell) -> None:
    def tasked(*asked: str) -> float:
        options = [part for text in asked for part in ("--what-if", text)]
        row = figures(breakstep, "forecast", SHIPPED, "--workers", "2", *options)["rows"][0]
        return float(row["tasked_s"])

    plain = tasked()
    assert tasked("burn=10x") > 3 * plain
    assert tasked("speed=2x") < plain
    assert tasked("overhead=native") > plain > tasked("overhead=compiled")
    assert tasked("latency=100000") > plain
    assert tasked("tile=16x16") != plain
    assert tasked("placement=cyclic") != plain


@pytest.mark.parametrize("machine", ["laptop", "office_cluster", "fast_cluster", "very_large"])
def test_machines_that_come_with_it(breakstep: Shell, machine: str) -> None:
    answer = breakstep("forecast", SHIPPED, "--machine", machine, "--workers", "4,64")
    assert answer.code == 0
    assert "Common practice rather than measured" in " ".join(answer.out.split())
    assert "There are 4 tiles" in answer.out


def test_a_mesh_that_grows_with_the_workers(breakstep: Shell) -> None:
    rows = figures(
        breakstep, "forecast", SHIPPED, "--machine", "very_large", "--what-if", "weak=1", "--workers", "4,1024,65536"
    )["rows"]
    assert rows[0]["lockstep_s"] < rows[1]["lockstep_s"] <= rows[2]["lockstep_s"]
    assert all(row["tasked_s"] <= row["lockstep_s"] for row in rows)
    several = figures(
        breakstep, "forecast", SHIPPED, "--machine", "fast_cluster", "--what-if", "weak=4", "--workers", "2,64"
    )["rows"]
    assert several[1]["lockstep_s"] > several[0]["lockstep_s"]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("forecast", "nowhere"), "there is none"),
        (("forecast", SHIPPED, "--machine", "toaster"), "no machine is named"),
        (("forecast", SHIPPED, "--workers", "2,x"), "--workers 2,x: expected whole numbers"),
        (("forecast", SHIPPED, "--workers", "2,,3"), "--workers 2,,3: expected whole numbers"),
        (("forecast", SHIPPED, "--workers", "2", "--what-if", "workers=4"), "give one of them"),
        (("forecast", SHIPPED, "--what-if", "tile=1000x8"), "do not fit"),
        (("forecast", SHIPPED, "--what-if", "weak=100000", "--workers", "100000"), "ask for fewer workers"),
        (("advise", SHIPPED, "--workers", "9"), "9 workers for 4 tiles"),
        (("advise", SHIPPED, "--workers", "9", "--what-if", "tile=64x32"), "9 workers for 2 tiles"),
        (("advise", SHIPPED, "--verify", "--machine", "laptop"), "--verify runs on this machine"),
    ],
)
def test_what_cannot_be_answered_is_refused(breakstep: Shell, arguments: tuple[object, ...], words: str) -> None:
    refused(breakstep(*arguments), words)


def test_all_faults_of_a_machine_and_of_what_ifs_are_told(breakstep: Shell) -> None:
    Path("bad.toml").write_text('name = "bad"\ntitle = "Bad"\ncores = 0\nmemory = 3\n', encoding="utf-8")
    answer = breakstep("forecast", SHIPPED, "--machine", "./bad.toml")
    assert (answer.code, len(answer.complaints)) == (2, 3)  # cores, memory, network
    answer = breakstep("forecast", SHIPPED, "--what-if", "a=1", "--what-if", "tile=x")
    assert (answer.code, len(answer.complaints)) == (2, 2)


def test_advice_has_its_figures_and_sums(breakstep: Shell) -> None:
    found = figures(breakstep, "advise", SHIPPED)
    assert all(set(row) >= {"what", "alone_s", "in_order_s", "share_s"} for row in found["ranking"])
    assert isinstance(found["tie"]["reductions_limit_gain"], bool)
    whole = sum(row["share_s"] for row in found["ranking"])
    assert whole == pytest.approx(sum(row["in_order_s"] for row in found["ranking"]))
    assert whole == pytest.approx(found["tie"]["all_gain_s"])
    assert found["advice"]
    for advice in found["advice"]:
        assert set(advice) >= {"do", "gain_s", "bytes", "memory_bytes", "command"}
        assert advice["low_s"] <= advice["gain_s"] <= advice["high_s"]


def test_commands_of_advice_are_understood(breakstep: Shell) -> None:
    """Parsed by the program itself, and the scenario built as the command would build it."""
    for advice in figures(breakstep, "advise", SHIPPED)["advice"]:
        program, name, *rest = shlex.split(advice["command"])
        assert (program, name) == ("breakstep", "run")
        command = cli.get_command(None, name)  # type: ignore[arg-type]
        assert command is not None
        options = command.make_context(name, list(rest), parent=click.Context(cli, **cli.context_settings)).params
        session = Session.load(options["scenario"], options["overrides"], options["placement"])
        session.barriers(options["barriers"])
        assert session.scenario.run.cycles == 3  # the shipped profile's own, not the scenario's


def test_commands_of_advice_keep_the_tiles_and_the_window_that_were_asked_for(breakstep: Shell) -> None:
    asked = ("--what-if", "tile=16x16", "--what-if", "window=3")
    for advice in figures(breakstep, "advise", SHIPPED, *asked)["advice"]:
        assert advice["command"].count("mesh.tile=") == 1
        assert "run.window=" in advice["command"]
        assert "tiles of" in advice["do"] or "mesh.tile=[16, 16]" in advice["command"]


def test_the_text_says_that_gains_do_not_add(breakstep: Shell) -> None:
    assert "Gains do not add" in breakstep("advise", SHIPPED).out


def test_figures_for_the_page() -> None:
    lockstep, tasked = (read_profile(SHIPPED / mode) for mode in ("lockstep", "tasked"))
    for found in (page_forecast(lockstep, tasked), page_forecast(lockstep, None), page_forecast(None, tasked)):
        assert set(found) == {"scaling", "barriers", "grain", "advice"}
        assert [row["workers"] for row in found["scaling"]["rows"]] == [1, 2, 4]
        assert found["grain"]["recorded_tile"] == [32, 32, 1]
        assert {"tile", "tasks", "lockstep_s", "tasked_s", "compute_s", "engine_s", "wait_s"} <= set(
            found["grain"]["rows"][0]
        )
        json.dumps(found, allow_nan=False)
