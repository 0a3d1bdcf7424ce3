"""What the self-check measures with and how it reads its measurements. No speed is asserted here."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import BreakstepError
from breakstep.measure import cost
from breakstep.measure.bench import Machine, Usage, resident_bytes
from breakstep.measure.cost import Case
from breakstep.measure.grain import LIMIT, grain
from breakstep.measure.long_run import Sample, growth_per_task, row_bytes, wall_by_quarter
from breakstep.measure.noop import FIELD, HandOn, Numbered, Pace, Ring
from breakstep.measure.pairs import gain_figures
from breakstep.measure.selfcheck import BUSY, FULL, QUICK, headline, warnings
from breakstep.profile.record import RowBuffer
from breakstep.profile.schema import TASKS
from breakstep.profile.statistics import gain_of_pairs

RINGS = {
    "ring": Ring((6,), 4),
    "sheet": Ring((3, 4), 2, components=3),
    "stages": Ring((5,), 3, stages=4),
    "busy": Ring((4,), 2, kernel=HandOn(turns=10)),
    "lock held": Ring((4,), 2, kernel=HandOn(turns=10, holds_lock=True)),
}


def final_state(ring: Ring) -> list[np.ndarray]:
    result = SerialDispatch().run(Program(ring.problem(), ring.tile_shape), RunOptions())
    assert result.failure is None
    return result.fields[FIELD]


@pytest.mark.parametrize("name", RINGS)
def test_state_travels_round_the_ring(name: str) -> None:
    """Each step moves everything by one tile along the first axis, as numpy's roll does."""
    ring = RINGS[name]
    final = final_state(ring)
    begun = np.arange(ring.tiles).reshape(ring.grid)
    moved = np.roll(begun, ring.cycles * ring.stages, axis=0).ravel()
    assert [int(array[0, 0, 0, 0]) for array in final] == moved.tolist()
    assert all(array.shape == (ring.components, 1, 1, 1) for array in final)
    ring.check(final)


def test_wrong_answers_are_refused() -> None:
    ring = Ring((4,), 3, components=2)
    final = final_state(ring)
    swapped = [final[1], final[0], *final[2:]]
    late = [np.nextafter(array, np.inf) for array in final]
    for wrong in (swapped, late, final[:-1]):
        with pytest.raises(BreakstepError):
            ring.check(wrong)


def test_components_tell_tiles_and_themselves_apart() -> None:
    state = [Numbered(2048).of(number) for number in range(256)]
    assert np.unique(np.concatenate(state)).size == 256 * 2048


def test_busy_kernels_work_for_the_turns_that_were_asked_for() -> None:
    pace = Pace(released=1000.0, held=10.0)
    assert pace.busy(0.5) == HandOn(500, holds_lock=False)
    assert pace.busy(5.0, holds_lock=True) == HandOn(50, holds_lock=True)
    assert pace.busy(0.0, holds_lock=True).turns == 1


def test_cases_hold_the_tasks_asked_for() -> None:
    for case in cost.ALL:
        assert case.ring(1024).tasks == 1024
        assert case.ring(1).cycles == 1
    assert len(set(cost.ALL)) == 9
    assert cost.HEADLINE in QUICK.cases
    assert cost.HEADLINE in FULL.cases
    assert Case((16, 16), components=2048).facts() == {
        "tiles": 256,
        "inputs": 5,
        "placement": "blocks",
        "rim_bytes": 16384,
    }


def test_idle_daemons_are_taken_off_in_proportion_to_the_time() -> None:
    idle = Usage(wall=2.0, client=0.25, workers=0.5)
    used = Usage(wall=4.0, client=1.0, workers=3.0).without_idle(idle)
    assert used == Usage(wall=4.0, client=0.5, workers=2.0)
    assert used.cpu == 2.5
    assert (used - used).cpu == 0.0
    assert used.scaled(0.5) == Usage(2.0, 0.25, 1.0)


def test_other_programs_are_what_the_machine_did_beyond_us() -> None:
    before, after = Machine(wall=0.0, busy=5.0, ours=1.0), Machine(wall=10.0, busy=25.0, ours=6.0)
    assert after.others_since(before) == 1.5
    assert Machine(10.0, None, 6.0).others_since(before) is None
    assert Machine(10.0, 6.0, 9.0).others_since(before) == 0.0


def test_grain_between_two_lengths_follows_a_power_law() -> None:
    """A share that falls as the length to the power -1 is a straight line in both logarithms."""
    points = [(ms, 0.1 / ms) for ms in (0.5, 1.0, 4.0, 8.0)]
    found, outside = grain(points)
    assert found == pytest.approx(0.1 / LIMIT, rel=1e-12)  # rounding of two logarithms and an exponential
    assert not outside


def test_grain_beyond_the_lengths_follows_a_fixed_cost() -> None:
    """19 times the cost of a task is where that cost is a twentieth of both together."""
    for lengths in ((10.0, 20.0), (0.1, 0.2)):
        points = [(ms, 0.1 / (0.1 + ms)) for ms in lengths]
        found, outside = grain(points)
        assert found == pytest.approx(1.9, rel=1e-12)
        assert outside


def test_grain_is_where_the_share_stays_below() -> None:
    """A share that dips and rises again has not stayed below."""
    found, outside = grain([(1.0, 0.01), (2.0, 0.10), (4.0, 0.025)])
    assert found == pytest.approx(2.0 * 2.0**0.5, rel=1e-12)
    assert not outside


def test_grain_takes_shares_of_nothing_and_of_everything() -> None:
    for share in (0.0, 1.0):
        found, outside = grain([(1.0, share)])
        assert np.isfinite(found)
        assert outside
    assert grain([(1.0, 0.5), (2.0, 0.0)])[0] < 2.0


def samples_of(bytes_per_task: float, slow_from: int = 100) -> list[Sample]:
    """100 cycles of 8 tasks at 1 ms a cycle, 2 ms from some cycle on."""
    seconds, found = 0.0, []
    for cycle in range(1, 101):
        seconds += 1e-3 if cycle <= slow_from else 2e-3
        found.append(Sample(cycle, seconds, 10**8 + round(8 * cycle * bytes_per_task)))
    return found


def test_growth_is_per_task_between_the_first_and_the_last_quarter() -> None:
    ring = Ring((4,), 100, stages=2)
    assert growth_per_task(samples_of(150.0), ring) == pytest.approx(150.0)
    assert growth_per_task(samples_of(0.0), ring) == 0.0
    assert growth_per_task(samples_of(1.0)[30:60], ring) is None
    assert growth_per_task([Sample(1, 1.0, 0), Sample(99, 2.0, 0)], ring) is None


def test_wall_time_by_quarter_shows_a_run_that_slows_down() -> None:
    ring = Ring((4,), 100, stages=2)
    quarters = wall_by_quarter(samples_of(0.0, slow_from=50), ring)
    assert quarters is not None
    assert quarters[0] == pytest.approx(125.0)  # 1 ms over 8 tasks
    assert quarters[3] == pytest.approx(250.0)
    assert wall_by_quarter(samples_of(0.0)[:7], ring) is None


def test_rows_are_as_wide_as_arrow_makes_them() -> None:
    """Words add their dictionary, a few bytes over ten thousand rows."""
    buffer = RowBuffer(TASKS)
    for number in range(10_000):
        buffer.append((number, "step", "s", 1, 2, -1, 0, 0, 5, 6, 8, False))
    assert buffer.table().nbytes / 10_000 == pytest.approx(row_bytes("tasks"), abs=0.02)


def test_memory_of_this_process_is_found_where_linux_tells() -> None:
    import os

    assert resident_bytes(os.getpid()) > 10_000_000
    assert resident_bytes(-1) == 0


def test_gains_keep_their_interval() -> None:
    figures = gain_figures(gain_of_pairs([2.0, 2.0, 2.0], [1.0, 1.0, 1.0]))
    assert figures == {
        "median": pytest.approx(2.0),
        "low": pytest.approx(2.0),
        "high": pytest.approx(2.0),
        "significant": True,
        "pairs": 3,
    }


def cost_row(case: Case, native: float, resident: float) -> dict[str, object]:
    one = {name: {"cpu_us": {"median": us}} for name, us in (("native", native), ("resident", resident))}
    return {**case.facts(), **one, "ratio": {"median": native / resident}}


def test_headline_is_of_the_large_ring_in_blocks() -> None:
    others = [cost_row(case, 1.0, 1.0) for case in cost.ALL if case != cost.HEADLINE]
    grains = {"native": {"median": 40.0}, "resident": {"median": 1.0}}
    figures = {
        "costs": [*others, cost_row(cost.HEADLINE, 1500.0, 50.0)],
        "grain": grains,
        "recording": {"median": 0.004},
    }
    assert headline(figures) == {
        "native_cpu_us_per_task": 1500.0,
        "resident_cpu_us_per_task": 50.0,
        "ratio": 30.0,
        "grain_ms": {"native": 40.0, "resident": 1.0},
        "recording_cost": 0.004,
    }


def test_what_disturbs_the_figures_is_worth_a_warning() -> None:
    assert warnings(2, 2, BUSY, quick=False) == []
    assert warnings(2, 2, None, quick=False) == []
    assert "1.4 cores busy" in warnings(2, 2, 1.4, quick=False)[0]
    assert "4 workers share 2 cores" in warnings(2, 4, 0.0, quick=False)[0]
    assert len(warnings(2, 2, 0.0, quick=True)) == 1
