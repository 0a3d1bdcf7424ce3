"""Bytes moved in drawn runs."""

from __future__ import annotations

from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.unit.profile.sketch import draw


def drawn() -> RunRecord:
    """A's fields go to worker 1, where C and D read them; B's go to worker 0, where nobody does.

    0.0 |AAAA.....|
    1.0 |BB..CCDD.|
    """
    record = draw(drawn.__doc__, "A>C, A>D, A>C reduction, B>C", stages={"A": "sweep", "B": "burn"})
    record.transfers.extend(
        [
            (0, "rho", 0, 1, 81, 3, 2, 4, 5),
            (0, "u", 0, 1, 20, 1, 1, 4, 5),
            (1, "rho", 1, 0, 7, 1, 0, 2, 3),
        ]
    )
    return record


def test_sums() -> None:
    traffic = Profile.from_record(drawn()).traffic
    assert (traffic.transfers, traffic.total_bytes) == (3, 108)
    assert traffic.by_stage == {"sweep": 101, "burn": 7}
    assert traffic.by_field == {"rho": 88, "u": 20}
    assert traffic.by_workers == {(0, 1): 101, (1, 0): 7}
    assert (traffic.packed_ns, traffic.unpacked_ns) == (5, 3)


def test_bytes_for_two_tiles_are_shared_and_an_odd_one_is_not_lost() -> None:
    """Tiles are numbered as tasks: A is 0, C is 2, D is 3. 81 bytes are 41 and 40; 20 are 10 and 10."""
    traffic = Profile.from_record(drawn()).traffic
    assert traffic.by_tiles == {(0, 2): 51, (0, 3): 50, (1, -1): 7}


def test_run_on_one_worker_moves_nothing() -> None:
    traffic = Profile.from_record(draw("0.0 |AABB|", "A>B")).traffic
    assert traffic.total_bytes == 0
    assert traffic.by_stage == traffic.by_tiles == traffic.by_workers == {}
