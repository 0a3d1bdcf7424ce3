"""Comparisons of runs that were drawn by hand: one character is a millisecond."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc

from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from breakstep.report.comparison import Comparison, Difference
from tests.unit.profile.sketch import draw, with_fields

MILLISECOND = 1_000_000  # ns
_TIMES = {
    "tasks": ("start_ns", "end_ns"),
    "intervals": ("start_ns", "end_ns", "cpu_ns"),
    "transfers": ("packed_ns", "unpacked_ns", "sent_ns", "arrived_ns"),
}


def slowed(record: RunRecord, factor: float) -> RunRecord:
    """The same run, every moment a multiple of what it was."""
    slow = RunRecord(manifest=dict(record.manifest))
    slow.add_tables({name: _slowed(table, _TIMES.get(name, ()), factor) for name, table in record.tables().items()})
    return slow


def _slowed(table: pa.Table, columns: tuple[str, ...], factor: float) -> pa.Table:
    for column in columns:
        moments = pc.round(pc.multiply(pc.cast(table[column], pa.float64()), factor)).cast(pa.int64())
        table = table.set_column(table.column_names.index(column), table.schema.field(column), moments)
    return table


@dataclass(frozen=True)
class Drawn:
    """A drawing with what :func:`draw` takes beside it, and what to put into the manifest."""

    text: str
    edges: str = ""
    extra: Mapping[str, Any] = field(default_factory=dict)
    facts: Mapping[str, Any] = field(default_factory=dict)

    def saying(self, **facts: Any) -> Drawn:
        """The same with other facts in the manifest."""
        return replace(self, facts={**self.facts, **facts})

    def profile(self, factor: float = 1.0, seed: int = 1) -> Profile:
        """The profile, slowed down by a factor; equal seeds give equal final fields."""
        record = slowed(draw(self.text, self.edges, **self.extra), factor * MILLISECOND)
        record.manifest.update(self.facts)
        return Profile.from_record(with_fields(record, seed))


STAGES = {"A": "burn", "C": "burn", "B": "sweep_x", "D": "sweep_x", "R": "burn", "S": "dt"}
BARRED = Drawn(
    """
    0.0 |AAAAAAAArBBBB|
    1.0 |CC.......DDDD|
    """,
    "A>R barrier, C>R barrier, R>B barrier, R>D barrier, A>B, C>D",
    {"stages": STAGES, "kinds": {"R": "release"}},
    {"mode": "lockstep", "barriers": ["burn", "sweep_x", "dt"], "cycles": 1},
)
FREE = Drawn(
    """
    0.0 |AAAAAAAABBBB|
    1.0 |CCDDDD......|
    """,
    "A>B, C>D",
    {"stages": STAGES},
)
EVEN = Drawn(
    """
    0.0 |AAAAAAAABBBB|
    1.0 |CCCCCCCCDDDD|
    """,
    "A>B, C>D",
    {"stages": STAGES},
)
EVEN_BARRED = EVEN.saying(mode="lockstep", barriers=["burn", "sweep_x", "dt"])
REDUCED = Drawn(
    """
    0.0 |AAAAAAAAsBBBB|
    1.0 |CC.......DDDD|
    """,
    "A>S reduction, C>S reduction, S>B reduction, S>D reduction, A>B, C>D",
    {"stages": STAGES, "kinds": {"S": "combine"}},
    {"notes": {"lags": {"dt": 0}}},
)
NEIGHBOURS = Drawn(
    """
    0.0 |AAAAAAAABBBB|
    1.0 |CC......DDDD|
    """,
    "A>B, A>D, C>D",
    {"stages": STAGES},
)


def compared(
    left: Drawn, right: Drawn, factors: tuple[float, ...] = (1.0, 1.0, 1.0), difference: Difference | None = None
) -> Comparison:
    """Pairs of the same two drawings, the left ones slowed down by these factors."""
    lefts = [left.profile(factor) for factor in factors]
    rights = [right.profile() for _ in factors]
    return Comparison(lefts, rights, difference)
