"""Stages: consecutive steps that one tile can run back to back, as one task.

Two neighbouring steps of the splitting are fused when the second reads nothing but its tile's own zones
and waits for no reduction that the first does not wait for: then no other tile's task can lie between
them, in lockstep or not. A fused stage is one task, one barrier boundary and, in the accounts, as many
steps as it holds.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TypeAlias

from breakstep.errors import DeclarationError
from breakstep.steps.reduction import Reduction
from breakstep.steps.splitting import Item, Repeat, Splitting
from breakstep.steps.step import Read, Step


@dataclass(frozen=True)
class Stage:
    """Steps, then the partial kernels of reductions, that make one task a tile.

    Attributes
    ----------
    index : int
        Place in :attr:`Template.stages`.
    steps, partials : tuple of Step, tuple of Reduction
    repeat : str
        Name of the repeat it belongs to, or "".
    """

    index: int
    steps: tuple[Step, ...]
    partials: tuple[Reduction, ...]
    repeat: str = ""
    reads: tuple[Read, ...] = field(init=False)
    writes: tuple[str, ...] = field(init=False)
    uses: tuple[str, ...] = field(init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "reads", tuple(self._outside_reads()))
        object.__setattr__(self, "writes", _unique(name for step in self.steps for name in step.writes))
        object.__setattr__(self, "uses", _unique(name for step in self.steps for name in step.uses))

    def _outside_reads(self) -> list[Read]:
        """Reads that no earlier step of the same stage satisfies."""
        made: set[str] = set()
        reads: dict[str, Read] = {}
        parts: tuple[Step | Reduction, ...] = (*self.steps, *self.partials)
        for part in parts:
            for read in part.reads:
                if read.field not in made:
                    reads.setdefault(read.field, read)
            made.update(getattr(part, "writes", ()))
        if self.repeat:  # an iteration after convergence hands its prior fields on
            for step in self.steps:
                for name in step.writes:
                    reads.setdefault(name, Read(name))
        return list(reads.values())

    @property
    def name(self) -> str:
        """Names of its parts, joined by ``+``."""
        return "+".join(self.part_names)

    @property
    def part_names(self) -> tuple[str, ...]:
        """Names of its steps, or of its reductions where it holds no step."""
        parts: tuple[Step, ...] | tuple[Reduction, ...] = self.steps or self.partials
        return tuple(part.name for part in parts)


@dataclass(frozen=True)
class RepeatStages:
    """The stages of one repeat's body."""

    repeat: Repeat
    stages: tuple[Stage, ...]


Node: TypeAlias = Stage | RepeatStages


@dataclass(frozen=True)
class Template:
    """A splitting as stages: one list of nodes for each of its orders, and the stage that starts a run."""

    splitting: Splitting
    orders: tuple[tuple[Node, ...], ...]
    stages: tuple[Stage, ...]
    start: Stage | None

    @cached_property
    def carried(self) -> frozenset[str]:
        """Fields whose version at the beginning of a cycle is read within it."""
        return frozenset(name for order in self.orders for name in _read_first(order, set()))

    @cached_property
    def needed(self) -> frozenset[str]:
        """Fields that a run reads before it has written them: they need an initial state."""
        found = {read.field for read in self.start.reads} if self.start is not None else set()
        made: set[str] = set()
        for order in self.orders:
            found |= _read_first(order, made)
        return frozenset(found)

    def barrier_names(self) -> tuple[str, ...]:
        """Every name by which a barrier can be switched on."""
        return _unique(name for stage in self.stages for name in _boundary_names(stage))

    def stages_with_barrier(self, names: Iterable[str]) -> frozenset[int]:
        """Stages after which the named barriers stand.

        Raises
        ------
        DeclarationError
            A name that no stage answers to.
        """
        wanted = set(names)
        unknown = wanted - set(self.barrier_names())
        if unknown:
            raise DeclarationError(
                f"no barrier is called {', '.join(sorted(unknown))}; choose from"
                f" lockstep, tasked or a list of {', '.join(self.barrier_names())}"
            )
        return frozenset(s.index for s in self.stages if wanted & set(_boundary_names(s)))


def _read_first(order: Sequence[Node], made: set[str]) -> set[str]:
    """Fields that an order reads before it writes them; adds what it writes to ``made``."""
    found: set[str] = set()
    for node in order:
        for stage in node.stages if isinstance(node, RepeatStages) else (node,):
            found |= {read.field for read in stage.reads} - made
            made |= set(stage.writes)
    return found


def _boundary_names(stage: Stage) -> tuple[str, ...]:
    extra = (stage.repeat,) if stage.repeat else ()
    return (*stage.part_names, *extra)


def build_template(splitting: Splitting, *, fuse: bool = True) -> Template:
    """Group a splitting's steps into stages.

    Parameters
    ----------
    fuse : bool
        Whether steps that need no halo between them share a task.
    """
    numbering = _Numbering(fuse)
    reductions = splitting.reductions
    start = numbering.add(_Group(None, [], list(reductions))) if reductions else None
    orders = tuple(tuple(_nodes(order, reductions, numbering)) for order in splitting.orders)
    return Template(splitting, orders, tuple(numbering.stages), start)


@dataclass
class _Group:
    """A stage being put together."""

    repeat: Repeat | None
    steps: list[Step]
    partials: list[Reduction] = field(default_factory=list)


class _Numbering:
    """Hands out stage numbers."""

    def __init__(self, fuse: bool) -> None:
        self.fuse = fuse
        self.stages: list[Stage] = []

    def add(self, group: _Group) -> Stage:
        name = group.repeat.name if group.repeat else ""
        stage = Stage(len(self.stages), tuple(group.steps), tuple(group.partials), name)
        self.stages.append(stage)
        return stage

    def stage_groups(self, steps: Sequence[Step], tail: Sequence[Reduction], repeat: Repeat | None) -> list[_Group]:
        groups: list[_Group] = []
        for step in steps:
            if groups and self.fuse and can_follow(groups[-1].steps, step):
                groups[-1].steps.append(step)
            else:
                groups.append(_Group(repeat, [step]))
        if tail and groups and self.fuse:
            groups[-1].partials.extend(tail)
        elif tail:
            groups.append(_Group(repeat, [], list(tail)))
        return groups


def can_follow(before: Sequence[Step], step: Step) -> bool:
    """Whether a step may share a task with the steps before it."""
    waited_for = {name for earlier in before for name in earlier.uses}
    return bool(before) and step.is_local and set(step.uses) <= waited_for


def _nodes(order: tuple[Item, ...], reductions: tuple[Reduction, ...], numbering: _Numbering) -> list[Node]:
    nodes: list[Node] = []
    run: list[Step] = []

    def close(tail: Sequence[Reduction] = ()) -> None:
        nodes.extend(numbering.add(group) for group in numbering.stage_groups(run, tail, None))
        run.clear()

    for item in order:
        if isinstance(item, Repeat):
            close()
            groups = numbering.stage_groups(item.body, [item.until], item)
            nodes.append(RepeatStages(item, tuple(numbering.add(group) for group in groups)))
        else:
            run.append(item)
    close(reductions)
    return nodes


def _unique(names: Iterable[str]) -> tuple[str, ...]:
    return tuple(dict.fromkeys(names))


def parse_barriers(template: Template, choice: str) -> tuple[str, ...]:
    """Barrier names from ``lockstep`` (all), ``tasked`` (none) or a comma-separated list.

    Raises
    ------
    DeclarationError
        An unknown name.
    """
    if choice == "lockstep":
        return template.barrier_names()
    names = tuple(name.strip() for name in choice.split(",") if name.strip()) if choice != "tasked" else ()
    template.stages_with_barrier(names)
    if choice != "tasked" and not names:
        raise DeclarationError(f"barriers: expected lockstep, tasked or a list of names, not {choice!r}")
    return names
