"""Another number of iterations: the last executed iteration of every repeat is copied, or left out."""

from __future__ import annotations

from dataclasses import replace

from breakstep.forecast.program import Phase, Program
from breakstep.forecast.waits import extent, repeats


def repeated(program: Program, stage: str, more: int) -> Program:
    """A program in which every run of a repeat takes so many iterations more, or fewer, but at least one.

    Parameters
    ----------
    stage : str
        The stage that makes the repeat's verdicts.
    """
    for _ in range(abs(more)):
        program = _one_more(program, stage) if more > 0 else _one_fewer(program, stage)
    return program


def _one_more(program: Program, stage: str) -> Program:
    phases: list[Phase] = []
    moved: dict[int, int] = {}  # old number -> number of the newest version of what it wrote
    copies = {_body(program, makers)[-1]: _body(program, makers) for makers in repeats(program, stage)}
    for number, phase in enumerate(program.phases):
        moved[number] = len(phases)
        phases.append(_behind(phase, moved))
        if number in copies:
            _copy(program, copies[number], phases, moved)
    return replace(program, phases=_renumbered(phases, program, stage))


def _body(program: Program, makers: list[int]) -> list[int]:
    """Phases of the last iteration that was executed."""
    executed = [number for number in makers if not program.phases[number].skipped] or makers[:1]
    first, after = extent(program, makers)
    iteration = program.phases[executed[-1]].iteration
    return [number for number in range(first, after) if program.phases[number].iteration == iteration]


def _copy(program: Program, body: list[int], phases: list[Phase], moved: dict[int, int]) -> None:
    """Append the iteration again: what it read of the iteration before, it now reads of itself."""
    length = len(body)
    shift: dict[int, int] = {}
    for number in body:
        phase = program.phases[number]
        reads = tuple((_again(source, body, length, moved, shift), pattern) for source, pattern in phase.reads)
        shift[number] = len(phases)
        phases.append(replace(phase, reads=reads))
    moved.update(shift)


def _again(source: int, body: list[int], length: int, moved: dict[int, int], shift: dict[int, int]) -> int:
    if source in shift:
        return shift[source]  # made earlier in the copy itself
    later = source + length  # the same stage, one iteration on
    return moved[later] if later in body else moved[source]


def _one_fewer(program: Program, stage: str) -> Program:
    dropped: dict[int, int] = {}
    for makers in repeats(program, stage):
        body = _body(program, makers)
        if program.phases[body[0]].iteration > program.phases[makers[0]].iteration:
            dropped.update({number: number - len(body) for number in body})
    phases: list[Phase] = []
    moved: dict[int, int] = {}
    for number, phase in enumerate(program.phases):
        if number in dropped:
            moved[number] = moved[dropped[number]]
            continue
        moved[number] = len(phases)
        phases.append(_behind(phase, moved))
    return replace(program, phases=_renumbered(phases, program, stage))


def _behind(phase: Phase, moved: dict[int, int]) -> Phase:
    return replace(phase, reads=tuple((moved[source], pattern) for source, pattern in phase.reads))


def _renumbered(phases: list[Phase], program: Program, stage: str) -> tuple[Phase, ...]:
    """Iterations counted anew where copies were put in or phases left out."""
    count: dict[tuple[int, str], int] = {}
    found = []
    inside = {p.stage for makers in repeats(program, stage) for n in [makers[0]] for p in _stages_of(program, n)}
    for phase in phases:
        if phase.iteration >= 0 and phase.stage in inside:
            key = (phase.cycle, phase.stage)
            phase = replace(phase, iteration=count.get(key, 0))
            count[key] = phase.iteration + 1
        found.append(phase)
    return tuple(found)


def _stages_of(program: Program, maker: int) -> list[Phase]:
    first, _ = extent(program, [maker])
    return list(program.phases[first : maker + 1])
