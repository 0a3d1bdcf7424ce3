"""What Breakstep raises on purpose.

Every class here stands for one situation that somebody handles. The message says what was expected,
what came, where, and what to do; the command line prints it as one sentence and exits with code 2.
Anything else that escapes is a defect of ours and keeps its traceback.
"""

from __future__ import annotations

from typing import Any


class BreakstepError(Exception):
    """Base of all errors raised on purpose; ``details`` holds the facts as plain data."""

    def __init__(self, message: str, **details: Any) -> None:
        super().__init__(message)
        self.message = message
        self.details = details

    def __reduce__(self) -> tuple[Any, ...]:
        return _rebuild, (type(self), self.message, self.details)


def _rebuild(kind: type[BreakstepError], message: str, details: dict[str, Any]) -> BreakstepError:
    return kind(message, **details)


class ScenarioError(BreakstepError):
    """A scenario cannot be used; ``details["faults"]`` lists every fault found, one sentence each."""


class DeclarationError(BreakstepError):
    """A step, reduction, repeat or splitting is declared inconsistently."""


class TilingError(BreakstepError):
    """The mesh cannot be cut into tiles as asked."""


class KernelError(BreakstepError):
    """A kernel yielded a state that cannot be used: not finite, not positive, or wrongly shaped."""


class CourantError(KernelError):
    """The time step in use is larger than the state it is applied to allows."""


class OverdueError(BreakstepError):
    """A kernel does not return within the time that the user allows."""


class ConvergenceError(BreakstepError):
    """A repeated step did not satisfy its residual within the iterations allowed."""


class ClusterError(BreakstepError):
    """The Dask cluster cannot be reached, or lost what the run needed."""


class OutputError(BreakstepError):
    """An output folder or file cannot be written."""


class CheckpointError(BreakstepError):
    """A checkpoint cannot be read, or does not hold what was written."""


class ProfileError(BreakstepError):
    """A profile folder cannot be read as what it claims to be."""


class PairsError(BreakstepError):
    """Repeated runs cannot be compared pair by pair."""


class ChoiceError(BreakstepError):
    """Something was asked about that a recorded run does not have."""


class ForecastError(BreakstepError):
    """A graph, machine or question cannot be played; ``details["faults"]`` lists what is wrong."""


class MachineError(BreakstepError):
    """A described machine cannot be used; ``details["faults"]`` lists every fault found, one sentence each."""
