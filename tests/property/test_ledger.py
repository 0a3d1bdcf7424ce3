"""The ledger of random runs: it partitions exactly, and each nanosecond is booked as the rule says.

The rule is stated here a second time, for one nanosecond at a time and in plain Python; the ledger must agree
with it on every thread, and on every gap.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field

from hypothesis import given, settings
from hypothesis import strategies as st

from breakstep.profile.causes import WAITS
from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from breakstep.profile.schema import EDGE_KINDS, TASK_KINDS
from tests.exact import check_exactly
from tests.unit.profile.sketch import manifest


@dataclass
class DrawnTask:
    """A task of a random run, with all that the rule asks about it."""

    number: int
    kind: str
    worker: int
    thread: int
    start: int = 0
    inside: tuple[int, int, int] = (0, 0, 0)  # halo or packing, kernel, neither [ns]
    stolen: int = 0  # of the kernel [ns]
    inputs: list[tuple[DrawnTask, str]] = field(default_factory=list)
    arrivals: dict[int, int] = field(default_factory=dict)  # by receiving worker [ns]

    @property
    def end(self) -> int:
        return self.start + sum(self.inside)

    @property
    def place(self) -> tuple[int, int]:
        return self.worker, self.thread


@dataclass
class DrawnRun:
    """Tasks in an order in which they could have been started, and the threads."""

    tasks: list[DrawnTask]
    threads: list[tuple[int, int]]


def arrival(source: DrawnTask, task: DrawnTask) -> int:
    """When an input could be used [ns]."""
    return source.end if source.worker == task.worker else source.arrivals.get(task.worker, source.end)


@st.composite
def runs(draw: st.DrawFn, skewed: bool = False) -> DrawnRun:
    """A valid schedule of a random graph; if skewed, as seen on clocks that disagree."""
    threads = draw(st.lists(st.tuples(st.integers(0, 2), st.integers(0, 1)), min_size=1, max_size=5, unique=True))
    count = draw(st.integers(0, 14))
    numbers = draw(st.permutations([3 * i + 1 for i in range(count)]))
    free = dict.fromkeys(threads, 0)
    tasks: list[DrawnTask] = []
    for number in numbers:
        worker, thread = draw(st.sampled_from(threads))
        kind = draw(st.sampled_from(("step",) * 4 + TASK_KINDS))
        task = DrawnTask(number, kind, worker, thread)
        if tasks:
            sources = st.tuples(st.sampled_from(range(len(tasks))), st.sampled_from(EDGE_KINDS))
            task.inputs = [(tasks[i], k) for i, k in draw(st.lists(sources, max_size=4, unique=True))]
        for source, _ in task.inputs:
            used = any(s is source for t in tasks if t.worker == worker for s, _ in t.inputs)
            if source.worker != worker and not used and draw(st.booleans()):
                source.arrivals[worker] = source.end + draw(st.integers(0, 5))
        ready = max([free[task.place], *(arrival(source, task) for source, _ in task.inputs)])
        task.start = ready + draw(st.integers(0, 4))
        halo, kernel, rest = draw(st.tuples(*[st.integers(0, 4)] * 3))
        task.inside = {
            "step": (halo, kernel, rest),
            "pack": (halo, 0, rest),
            "combine": (0, kernel, rest),  # a reduction's own function
        }.get(kind, (0, 0, rest))
        task.stolen = draw(st.integers(0, task.inside[1]))
        free[task.place] = task.end
        tasks.append(task)
    if skewed:
        offset = [draw(st.integers(-6, 6)) for _ in range(3)]
        for task in tasks:
            task.start += offset[task.worker]
            task.arrivals = {w: at + offset[w] for w, at in task.arrivals.items()}
    return DrawnRun(tasks, threads)


def record_of(run: DrawnRun) -> RunRecord:
    """What the engine would have recorded of the run."""
    record = RunRecord()
    record.threads.extend(run.threads)
    for t in run.tasks:
        head = (
            t.number,
            t.kind,
            f"stage of {t.kind}",
            -1,
            0,
            -1,
            t.worker,
            t.thread,
            t.start,
            t.end,
            0,
            False,
        )
        record.tasks.append(head)
        halo, kernel, _ = t.inside
        what = "pack" if t.kind == "pack" else "halo"
        record.intervals.append((t.number, what, "s", t.start, t.start + halo, halo))
        if kernel or t.kind == "step":
            end = t.start + halo + kernel
            record.intervals.append((t.number, "kernel", "s", t.start + halo, end, kernel - t.stolen))
        record.edges.extend((source.number, t.number, kind) for source, kind in t.inputs)
        record.transfers.extend((t.number, "f", t.worker, w, 8, 0, 0, t.end, at) for w, at in t.arrivals.items())
    workers = len({worker for worker, _ in run.threads})
    record.manifest = manifest(workers, len(run.threads), tiles=1)
    return record


def cause(run: DrawnRun, task: DrawnTask, moment: int) -> str:
    """The account of the nanosecond that begins at a moment of the idle time before a task."""
    why = ""
    while True:
        arrived = [(arrival(source, task), source, kind) for source, kind in task.inputs]
        ready = max((at for at, _, _ in arrived), default=moment)
        if moment >= ready:
            others = (t for t in run.tasks if t.place == task.place and t.start <= moment < t.end)
            return why if why and any(others) else "engine"
        data = [entry for entry in arrived if entry[2] != "barrier"]
        data_ready = max((at for at, _, _ in data), default=-(10**9))
        by_barrier = ready > data_ready and moment >= data_ready
        if by_barrier:
            candidates = [e for e in arrived if e[2] == "barrier" and e[0] == ready]
        else:
            candidates = [e for e in data if e[0] == data_ready]
        _, source, kind = min(candidates, key=lambda e: (e[1].number, EDGE_KINDS.index(e[2])))
        if kind != "data":
            why = kind
        why = why or "neighbour"
        if moment >= source.end:
            moving = "transfer" if kind == "data" else kind  # a message of a reduction or barrier is its own cost
            return moving if source.worker != task.worker else "engine"
        if moment >= source.start:
            at_work = source.kind == "step" or (source.kind == "combine" and source.inside[1] > 0)
            return why if at_work else "transfer" if source.kind == "pack" else "engine"
        task = source


def expected(run: DrawnRun) -> tuple[dict[tuple[int, int], Counter[str]], dict[int, Counter[str]]]:
    """Accounts of each thread, and the parts of each gap by the number of the task that ends it."""
    threads: dict[tuple[int, int], Counter[str]] = {place: Counter() for place in run.threads}
    gaps: dict[int, Counter[str]] = {}
    first = min((t.start for t in run.tasks), default=0)
    last = max((t.end for t in run.tasks), default=0)
    for place, booked in threads.items():
        own = sorted((t for t in run.tasks if t.place == place), key=lambda t: (t.start, t.end, t.number))
        for t in own:
            halo, kernel, rest = t.inside
            booked.update(transfer=halo, compute=kernel - t.stolen, stolen=t.stolen, engine=rest)
        for moment in range(first, last):
            if any(t.start <= moment < t.end for t in own):
                continue
            following = next((t for t in own if t.start > moment), None)
            if following is None:
                booked["unemployed"] += 1
                continue
            account = cause(run, following, moment)
            booked[account] += 1
            gaps.setdefault(following.number, Counter())[account] += 1
    return threads, gaps


def check(run: DrawnRun) -> None:
    """Compare the ledger with the rule."""
    profile = Profile.from_record(record_of(run))
    check_exactly(profile)
    ledger = profile.ledger
    threads, gaps = expected(run)
    for place, booked in threads.items():
        assert ledger.by_thread.loc[place].to_dict() == {account: booked[account] for account in ACCOUNTS}
    assert set(ledger.gaps["task"]) == set(gaps)
    for gap in ledger.gaps.to_dict("records"):
        assert {a: gap[a] for a in WAITS} == {a: gaps[gap["task"]][a] for a in WAITS}


@settings(max_examples=150, deadline=None)
@given(runs())
def test_every_nanosecond_is_booked_by_the_rule(run: DrawnRun) -> None:
    check(run)


@settings(max_examples=100, deadline=None)
@given(runs(skewed=True))
def test_clocks_that_disagree_lose_no_nanosecond(run: DrawnRun) -> None:
    check(run)
