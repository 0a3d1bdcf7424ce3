"""The splitting: the order in which steps advance a cycle, what repeats, and what is reduced.

The order of the list is the order of a classical code. Which of it must really be kept is for the graph
layer to find from the declared reads and writes.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TypeAlias

from breakstep.errors import DeclarationError
from breakstep.mesh.fields import Field
from breakstep.mesh.shown import columns, listed
from breakstep.steps.reduction import Reduction
from breakstep.steps.step import Array, Read, Step, check_name


@dataclass(frozen=True)
class Repeat:
    """Steps that repeat until a reduction says stop.

    Parameters
    ----------
    name : str
    body : tuple of Step
        Run in order, once an iteration.
    until : Reduction
        Measured at the end of each iteration.
    stop : callable
        ``stop(result) -> bool``; must be False for NaN.
    at_most : int
        Iterations after which the run stops with an error.
    """

    name: str
    body: tuple[Step, ...]
    until: Reduction
    stop: Callable[[Array], bool]
    at_most: int

    def __post_init__(self) -> None:
        check_name("repeat", self.name)
        if not self.body:
            raise DeclarationError(f"repeat {self.name!r} has no steps")
        if self.at_most < 1 + self.until.lag:
            raise DeclarationError(
                f"repeat {self.name!r}: at most {self.at_most} iterations with a lag of {self.until.lag}"
                " can never see its own verdict"
            )


Item: TypeAlias = Step | Repeat


@dataclass(frozen=True)
class Splitting:
    """One or more orders of the same steps, used in turn cycle by cycle.

    Parameters
    ----------
    orders : tuple of tuple of (Step or Repeat)
        Cycle c runs ``orders[c % len(orders)]``.
    reductions : tuple of Reduction
        Measured on the state that each cycle begins with. With lag 0 the cycle uses the value of its own
        beginning; with lag L that of L cycles before (the first cycles share the first value).
    """

    orders: tuple[tuple[Item, ...], ...]
    reductions: tuple[Reduction, ...] = ()

    def __post_init__(self) -> None:
        if not self.orders or not all(self.orders):
            raise DeclarationError("a splitting needs at least one step")
        self._check_names()

    def _check_names(self) -> None:
        named: dict[str, tuple[str, Step | Repeat | Reduction]] = {}
        for kind, thing in self._named():
            other, first = named.setdefault(thing.name, (kind, thing))
            if other != kind:
                raise DeclarationError(f"{thing.name!r} names both a {other} and a {kind}")
            if not _same(first, thing):
                raise DeclarationError(f"two different {kind}s are named {thing.name!r}")
        measured = [reduction.name for reduction in self.reductions]
        for name in sorted({name for name in measured if measured.count(name) > 1}):
            raise DeclarationError(f"reduction {name!r} is listed twice")
        usable = sorted(reduction.name for reduction in self.reductions)
        for step in self.steps():
            for used in step.uses:
                if used not in usable:
                    raise DeclarationError(
                        f"step {step.name!r} uses reduction {used!r}, which the splitting does not declare"
                        f" (it declares: {', '.join(usable) or 'none'})"
                    )

    def _named(self) -> Iterator[tuple[str, Step | Repeat | Reduction]]:
        """Everything that has a name, each time it occurs; the share of dt does not make a step another."""
        yield from (("reduction", reduction) for reduction in self.reductions)
        for item in self.items():
            if isinstance(item, Repeat):
                yield "repeat", item
                yield "reduction", item.until
        yield from (("step", replace(step, fraction=1.0)) for step in self.steps())

    def items(self) -> Iterator[Item]:
        """Every step and repeat of every order."""
        for order in self.orders:
            yield from order

    def steps(self) -> Iterator[Step]:
        """Every step, those inside repeats included."""
        for item in self.items():
            if isinstance(item, Repeat):
                yield from item.body
            else:
                yield item

    def all_reductions(self) -> Iterator[Reduction]:
        """Every reduction, those of repeats included."""
        yield from self.reductions
        seen: set[str] = set()
        for item in self.items():
            if isinstance(item, Repeat) and item.until.name not in seen:
                seen.add(item.until.name)
                yield item.until

    def _repr_html_(self) -> str:
        """Each order's items and what they declare, then the reductions, for notebooks."""
        rows: list[tuple[object, ...]] = []
        for number, order in enumerate(self.orders):
            cycles = "every cycle" if len(self.orders) == 1 else f"cycle {number} of {len(self.orders)}"
            rows += [(cycles, *_described(item)) for item in order]
        rows += [
            ("end of each cycle", f"reduction {r.name} ({r.combine}, lag {r.lag})", listed(r.reads), "", "")
            for r in self.reductions
        ]
        return columns("Splitting", ("when", "what", "reads", "writes", "uses"), rows)

    def check_fields(self, fields: Mapping[str, Field]) -> None:
        """Raise DeclarationError when a step or reduction names a field that does not exist."""
        for owner, names in self._field_names():
            for name in names:
                if name not in fields:
                    raise DeclarationError(f"{owner} names field {name!r}; the fields are {', '.join(sorted(fields))}")

    def _field_names(self) -> Iterator[tuple[str, list[str]]]:
        for step in self.steps():
            yield f"step {step.name!r}", [read.field for read in step.reads] + list(step.writes)
        for reduction in self.all_reductions():
            yield f"reduction {reduction.name!r}", [read.field for read in reduction.reads]

    def halo_reads(self) -> Iterator[tuple[str, Read]]:
        """Every read that reaches beyond a tile, with its owner's name."""
        for step in self.steps():
            for read in step.reads:
                if not read.is_local:
                    yield step.name, read


def _described(item: Item) -> tuple[str, str, str, str]:
    if isinstance(item, Repeat):
        steps, until = listed(step.name for step in item.body), item.until
        what = (
            f"repeat {item.name}: {steps}; at most {item.at_most} times, until {until.name} says stop (lag {until.lag})"
        )
        reads = dict.fromkeys(str(read) for step in item.body for read in step.reads)
        writes = dict.fromkeys(name for step in item.body for name in step.writes)
        uses = dict.fromkeys(name for step in item.body for name in step.uses)
        return what, listed(reads), listed(writes), listed(uses)
    share = "" if item.fraction == 1.0 else f", {item.fraction:g} of dt"
    return f"{item.name}{share}", listed(item.reads), listed(item.writes), listed(item.uses)


def _same(first: object, second: object) -> bool:
    """Whether two declarations are one; kernels that hold arrays are one only when they are one object."""
    try:
        return first is second or bool(first == second)
    except ValueError:
        return False


def lie(steps: Sequence[Item], reductions: Sequence[Reduction] = ()) -> Splitting:
    """First-order splitting: each step once a cycle, in the order given."""
    return Splitting((tuple(steps),), tuple(reductions))


def strang(steps: Sequence[Item], reductions: Sequence[Reduction] = ()) -> Splitting:
    """Second-order splitting (Strang 1968): half steps forward, a full last step, half steps back.

    A repeat may stand last only, since its matrix belongs to a full step.
    """
    *outer, last = steps
    halves: list[Item] = []
    for item in outer:
        if isinstance(item, Repeat):
            raise DeclarationError(f"repeat {item.name!r} must stand last in a Strang splitting")
        halves.append(replace(item, fraction=0.5 * item.fraction))
    return Splitting(((*halves, last, *reversed(halves)),), tuple(reductions))


def alternating(
    steps: Sequence[Item],
    reductions: Sequence[Reduction] = (),
    *,
    swap: Callable[[Sequence[Item]], Sequence[Item]] | None = None,
) -> Splitting:
    """Forward and backward orders in turn: second order over a pair of cycles with equal time steps.

    Parameters
    ----------
    swap : callable, optional
        How the second order is made from the first; reversal by default. Steps that must stay in order
        (assemble, solve, exchange) are kept so by a function of the user's.
    """
    backward = tuple(swap(steps)) if swap is not None else tuple(reversed(steps))
    return Splitting((tuple(steps), backward), tuple(reductions))
