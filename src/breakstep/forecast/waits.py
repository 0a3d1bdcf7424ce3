"""Which phase waits for which reduction, from the lags: the rules by which a run unrolls, applied again.

- A result made once a cycle, lag L: cycle c uses the one made L + 1 cycles before, and the first L + 1 cycles share the
  first.
  Where the window is narrower than L + 1 cycles, it holds a cycle back until the one that leaves the window is done; as
  if the lag were the window's, and on all workers together, which is a little more than each for itself.
- A verdict, lag L: iteration i goes on when that of iteration i - 1 - L is known.
- What follows a repeat is emitted when the verdict that ended it is known.
"""

from __future__ import annotations

from dataclasses import dataclass

from breakstep.forecast.program import Phase, Program


@dataclass(frozen=True)
class Wait:
    """A phase that needs a reduction's result, and the phase that makes it."""

    name: str
    made_by: int
    used_by: int


def waits(program: Program) -> list[Wait]:
    """All waits for reductions, ordered by the phase that waits."""
    found = _cycle_waits(program)
    for name, stage in program.verdicts.items():
        found += _verdict_waits(program, name, stage)
    return sorted(set(found), key=lambda wait: (wait.used_by, wait.made_by, wait.name))


def _cycle_waits(program: Program) -> list[Wait]:
    start = min((phase.cycle for phase in program.phases if phase.cycle >= 0), default=0)
    made: dict[str, dict[int, int]] = {}
    for number, phase in enumerate(program.phases):
        for name in phase.makes:
            if name not in program.verdicts:
                made.setdefault(name, {})[phase.cycle] = number
    found = []
    for number, phase in enumerate(program.phases):
        for name in program.uses.get(phase.stage, ()):
            if phase.cycle < 0:
                continue
            late = min(program.lags[name], program.window - 1)  # no cycle before the window lets it
            maker = made.get(name, {}).get(max(phase.cycle - late - 1, start - 1))
            if maker is not None and maker < number:
                found.append(Wait(name, maker, number))
    return found


def repeats(program: Program, stage: str) -> list[list[int]]:
    """For each run of a repeat, the phases that make its verdicts, in order."""
    found: list[list[int]] = []
    last: Phase | None = None
    for number, phase in enumerate(program.phases):
        if phase.stage == stage and phase.iteration >= 0:
            begins = last is None or phase.cycle != last.cycle or phase.iteration <= last.iteration
            found.append([]) if begins else None
            found[-1].append(number)
            last = phase
    return found


def _verdict_waits(program: Program, name: str, stage: str) -> list[Wait]:
    lag, found = program.lags[name], []
    for makers in repeats(program, stage):
        first, after = extent(program, makers)
        for number in range(first, after):
            needed = program.phases[number].iteration - 1 - lag
            if 0 <= needed < len(makers) and makers[needed] < number:
                found.append(Wait(name, makers[needed], number))
        executed = sum(not program.phases[number].skipped for number in makers)
        last = makers[max(executed - 1 - lag, 0)]
        if after < len(program.phases):
            found.append(Wait(name, last, after))
    return found


def extent(program: Program, makers: list[int]) -> tuple[int, int]:
    """First phase of a repeat, and the first one behind it."""
    phases, cycle = program.phases, program.phases[makers[0]].cycle

    def inside(number: int) -> bool:
        return 0 <= number < len(phases) and phases[number].iteration >= 0 and phases[number].cycle == cycle

    first, after = makers[0], makers[-1] + 1
    while inside(first - 1) and phases[first - 1].iteration == phases[makers[0]].iteration:
        first -= 1
    while inside(after) and phases[after].iteration == phases[makers[-1]].iteration:
        after += 1
    return first, after
