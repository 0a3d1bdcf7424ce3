"""Lifting: what is left of a recorded run when the machine is stripped off it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from breakstep.errors import ProfileError
from breakstep.forecast.basis import basis_of
from breakstep.forecast.lift import lift, lift_all
from breakstep.forecast.program import Program, program_of
from breakstep.forecast.waits import waits
from breakstep.profile.run import Profile
from breakstep.profile.store import read_profile
from tests.unit.commands.conftest import Shell
from tests.unit.forecast.recorded import HALO, MS, REST, Ring, Stage, even, hot

SHIPPED = Path(__file__).parents[3] / "profiles" / "single_spark"


def program(profile: Profile) -> Program:
    """The program of one run."""
    return basis_of([profile]).program


def test_phases_tiles_and_costs_come_out_as_drawn() -> None:
    lifted = lift(Ring(hot()).profile())
    assert (lifted.phases, lifted.tiles, lifted.mode) == (6, 8, "lockstep")
    assert lifted.phase_names() == ["s0", "s1", "s2"] * 2
    assert lifted.cycle.tolist() == [0, 0, 0, 1, 1, 1]
    kernels = sum(lifted.costs.kernel.values())
    assert np.array_equal(kernels, [phase.costs for phase in hot()])
    assert np.all(lifted.costs.halo == HALO)
    assert np.all(lifted.costs.rest == REST)


def test_each_tile_reads_itself_and_its_neighbours() -> None:
    lifted = lift(Ring(even(2)).profile())
    pairs = {(int(p), int(c)) for p, c in zip(lifted.producer, lifted.consumer, strict=True)}
    assert pairs == {((tile + step) % 8, 8 + tile) for tile in range(8) for step in (-1, 0, 1)}


@pytest.mark.parametrize("lockstep", [True, False])
def test_pack_tasks_collapse(lockstep: bool) -> None:
    direct = lift(Ring(hot(), lockstep=lockstep).profile())
    packed = lift(Ring(hot(), lockstep=lockstep, packed=True).profile())
    assert np.array_equal(direct.producer, packed.producer)
    assert np.array_equal(direct.consumer, packed.consumer)


def test_a_run_of_no_tasks_is_refused_for_what_it_is() -> None:
    """As when it was resumed with no cycle left: it lost no worker."""
    profile = Ring(even()).profile()
    profile.frames["tasks"] = profile.tasks.iloc[:0]
    with pytest.raises(ProfileError, match="needs tasks, this run has none"):
        lift(profile)


def test_trees_collapse_to_instances() -> None:
    phases = [
        Stage("m", [MS] * 4, -1, makes="dt"),
        Stage("a", [MS] * 4, 0, makes="dt", uses=(("dt", 0),)),
        Stage("a", [MS] * 4, 1, makes="dt", uses=(("dt", 1),)),
    ]
    reductions = lift(Ring(phases, lags={"dt": 0}).profile()).reductions
    assert (reductions.names, reductions.lags, reductions.repeated) == (("dt",), {"dt": 0}, {"dt": False})
    assert reductions.made_by.tolist() == [0, 1, 2]
    assert list(zip(reductions.instance.tolist(), reductions.used_by.tolist(), strict=True)) == [(0, 1), (1, 2)]


def repeat(executed: int, emitted: int, lag: int) -> list[Stage]:
    """A repeat of two stages an iteration, and what follows it."""
    phases = [Stage("head", [MS] * 4)]
    for iteration in range(emitted):
        gate = iteration - 1 - lag
        verdict = (("err", 2 + 2 * gate),) if gate >= 0 else ()
        passed = iteration >= executed
        phases.append(Stage("relax", [MS] * 4, 0, iteration, uses=verdict, skipped=passed))
        phases.append(Stage("judge", [MS] * 4, 0, iteration, makes="err", uses=verdict, skipped=passed))
    return [*phases, Stage("tail", [MS] * 4)]


@pytest.mark.parametrize(("executed", "emitted", "lag"), [(3, 3, 0), (3, 3, 1), (2, 4, 0), (4, 5, 1), (3, 3, 2)])
def test_what_follows_a_repeat_waits_for_the_verdict_that_ended_it(executed: int, emitted: int, lag: int) -> None:
    lifted = lift(Ring(repeat(executed, emitted, lag), lags={"err": lag}).profile())
    made = lifted.reductions.made_by[lifted.reductions.instance]
    behind = [int(m) for m, used in zip(made, lifted.reductions.used_by, strict=True) if used == lifted.phases - 1]
    assert behind == [2 + 2 * (executed - 1 - lag)]


@pytest.mark.parametrize(("executed", "emitted", "lag"), [(3, 3, 0), (3, 3, 1), (2, 4, 0), (4, 5, 1)])
def test_rules_give_the_recorded_waits_of_a_repeat(executed: int, emitted: int, lag: int) -> None:
    same_waits(Ring(repeat(executed, emitted, lag), lags={"err": lag}).profile())


def same_waits(profile: Profile) -> None:
    """The rules of lags, applied to the program, give the waits of the record."""
    basis = basis_of([profile])
    reductions = basis.first.reductions
    recorded = {
        (reductions.names[reductions.name[i]], int(reductions.made_by[i]), int(used))
        for i, used in zip(reductions.instance, reductions.used_by, strict=True)
    }
    assert {(w.name, w.made_by, w.used_by) for w in waits(basis.program)} == recorded
    assert recorded


@pytest.mark.parametrize("mode", ["lockstep", "tasked"])
def test_rules_give_the_recorded_waits_of_a_shipped_profile(mode: str) -> None:
    same_waits(read_profile(SHIPPED / mode))


@pytest.mark.parametrize("lags", [(0, 0), (1, 1), (2, 0), (0, 2)])
def test_rules_give_the_recorded_waits_of_transport(breakstep: Shell, lags: tuple[int, int]) -> None:
    sizes = (
        "--set",
        "mesh.zones=[16, 4]",
        "--set",
        "mesh.tile=[4, 4]",
        "--set",
        "run.cycles=4",
        "--dispatch",
        "serial",
    )
    chosen = ("--set", f"time_step.lag={lags[0]}", "--set", f"transport.lag={lags[1]}")
    answer = breakstep("run", "radiation_wave", *sizes, *chosen, "--out", "here")
    assert answer.code == 0, answer.err
    same_waits(read_profile(Path("here")))


def test_both_modes_are_one_program() -> None:
    lifted = lift_all([read_profile(SHIPPED / "lockstep"), read_profile(SHIPPED / "tasked")])
    assert [run.mode for run in lifted] == ["lockstep", "tasked"]


def test_runs_of_other_programs_are_refused() -> None:
    with pytest.raises(ProfileError, match="not the program"):
        lift_all([Ring(even(3)).profile(), Ring(even(4)).profile()])


def test_an_unfinished_run_is_refused() -> None:
    record = Ring(even()).record()
    record.manifest["status"] = "interrupted"
    with pytest.raises(ProfileError, match="complete run"):
        lift(Profile.from_record(record))


def test_a_run_that_lost_tasks_is_refused() -> None:
    whole = Ring(even()).profile()
    frames = {**whole.frames, "tasks": whole.tasks.drop(whole.tasks.index[3]).reset_index(drop=True)}
    with pytest.raises(ProfileError, match="whole phases"):
        lift(Profile(whole.manifest, frames, whole.fields))


def test_a_program_keeps_patterns_once() -> None:
    lifted = lift(Ring(hot(12)).profile())
    assert len(program_of(lifted, program(Ring(hot(12)).profile()).costs).patterns) == 1
