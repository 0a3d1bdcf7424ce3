"""Questions: what is to be different from the recorded run, as options on the command line say it.

A question is data. It refuses to know what the answer is; of a program it checks only whether names are there.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

from breakstep.errors import ForecastError
from breakstep.forecast.program import Program
from breakstep.partition import ORDERS

PRIORITIES = ("program", "path")
RUNTIMES = ("native", "resident", "compiled")
#: Times are whole nanoseconds in 64 bits. Figures within these limits keep a run's sums far below 2^63 ns: a run of
#: an hour, made a million times as slow, is 4e18 ns. Nothing that is built lies outside of them.
MOST_TIMES = 1e6  # as often, or as rarely
MOST_MICROSECONDS = 1e9  # a message or a task's overhead of a quarter of an hour
LEAST_GBYTES, MOST_GBYTES = 1e-6, 1e9
MOST_THREADS = 4096  # of one worker

KEYS = {
    "threads": "threads of each worker",
    "tile": "zones of a tile, as 48x48",
    "placement": f"one of {', '.join(ORDERS)}",
    "priority": f"one of {', '.join(PRIORITIES)}",
    "STEP": "what a step costs, as burn=10x",
    "speed": "how fast all kernels are, as 2x; speed.STEP for one step",
    "lag.REDUCTION": "cycles (or iterations) by which its result is used late",
    "iterations.REDUCTION": "iterations more or fewer in each cycle, as +2",
    "overhead": f"per task: {', '.join(RUNTIMES)}, or microseconds",
    "latency": "of the network, one way, microseconds",
    "bandwidth": "into one worker, GB/s",
    "memory": "of one worker, GB",
    "window": "cycles in flight at once",
    "weak": "the mesh grows with the workers, so many tiles for each",
}


@dataclass(frozen=True)
class Question:
    """What is to be different; None or empty for as recorded.

    Attributes
    ----------
    workers : int or None
    threads : int or None
    tile : tuple of int
        Zones of a tile along each axis.
    placement, priority : str
    factors : dict of str to float
        By step, how many times as much it costs.
    lags, iterations : dict of str to int
        By reduction; iterations more than recorded.
    overhead : str or float
        A runtime's name, or [us].
    latency_us, bandwidth_gbytes, memory_gbytes : float or None
    window : int or None
    weak : int
        Tiles for each worker of a mesh that grows; 0 for the mesh as it is.
    """

    workers: int | None = None
    threads: int | None = None
    tile: tuple[int, ...] = ()
    placement: str = ""
    priority: str = "path"
    factors: Mapping[str, float] = field(default_factory=dict)
    lags: Mapping[str, int] = field(default_factory=dict)
    iterations: Mapping[str, int] = field(default_factory=dict)
    overhead: str | float = ""
    latency_us: float | None = None
    bandwidth_gbytes: float | None = None
    memory_gbytes: float | None = None
    window: int | None = None
    weak: int = 0

    @property
    def keeps_program(self) -> bool:
        """Whether the phases and tiles are those recorded."""
        return not (self.tile or self.lags or self.iterations or self.window)


def parse_question(texts: Sequence[str], program: Program) -> Question:
    """Read ``key=value`` texts.

    Raises
    ------
    ForecastError
        All faults together: keys that do not exist, values that make no sense, steps and reductions that the
        profile does not have.
    """
    question, faults = Question(), []
    for text in texts:
        key, sign, value = (part.strip() for part in text.partition("="))
        if not sign or not value:
            faults.append(f"--what-if {text}: expected KEY=VALUE; keys: {', '.join(KEYS)}")
            continue
        try:
            question = _answered(question, key, value, program)
        except ValueError as error:
            faults.append(f"--what-if {text}: {error}")
    if faults:
        raise ForecastError("\n".join(faults), faults=faults)
    return question


def _answered(question: Question, key: str, value: str, program: Program) -> Question:
    head, _, name = key.partition(".")
    if key in _PLAIN:
        attribute, read = _PLAIN[key]
        return replace(question, **{attribute: read(value)})
    if key == "placement":
        return replace(question, placement=_word(value, ORDERS))
    if key == "priority":
        return replace(question, priority=_word(value, PRIORITIES))
    if key == "overhead":
        return replace(question, overhead=value if value in RUNTIMES else _micros(value))
    if head == "lag":
        return replace(question, lags={**question.lags, _known(name, program.lags): _whole(value)})
    if head == "iterations":
        return replace(
            question, iterations={**question.iterations, _known(name, program.verdicts): int(_number(value, True))}
        )
    steps = program.costs.kernel
    if head == "speed":
        chosen = [_known(name, steps)] if name else list(steps)
        return _slower(question, chosen, 1.0 / _times(value))
    if key in steps:
        return _slower(question, [key], _times(value))
    raise ValueError(f"no such key; keys: {', '.join(KEYS)}; steps: {', '.join(steps)}")


def _slower(question: Question, steps: Sequence[str], factor: float) -> Question:
    """Factors of several answers multiply; their product keeps within the limit too."""
    factors = {step: _within(question.factors.get(step, 1.0) * factor, 1.0 / MOST_TIMES, MOST_TIMES) for step in steps}
    return replace(question, factors={**question.factors, **factors})


def _known(name: str, known: Mapping[str, Any]) -> str:
    if name not in known:
        raise ValueError(f"the profile has no {name or 'name behind the point'}; it has {', '.join(known) or 'none'}")
    return name


def _word(value: str, known: Sequence[str]) -> str:
    if value not in known:
        raise ValueError(f"expected one of {', '.join(known)}")
    return value


def _number(value: str, may_be_negative: bool = False) -> float:
    try:
        number = float(value)
    except ValueError:
        raise ValueError(f"expected a number, came {value!r}") from None
    if not math.isfinite(number) or (number < 0.0 and not may_be_negative):
        raise ValueError("expected a number that is not negative" if not may_be_negative else "expected a number")
    return number


def _within(number: float, least: float, most: float) -> float:
    # A product of factors may miss the limit that it reaches by a rounding error.
    if not least * (1.0 - 1e-12) <= number <= most * (1.0 + 1e-12):
        raise ValueError(f"expected a number from {least:g} to {most:g}, came {number:g}")
    return number


def _micros(value: str) -> float:
    return _within(_number(value), 0.0, MOST_MICROSECONDS)


def _gbytes(value: str) -> float:
    return _within(_number(value), LEAST_GBYTES, MOST_GBYTES)


def _whole(value: str) -> int:
    if not re.fullmatch(r"\d{1,9}", value):
        raise ValueError(f"expected a whole number, came {value!r}")
    return int(value)


def _count(value: str) -> int:
    number = _whole(value)
    if number < 1:
        raise ValueError("expected at least 1")
    return number


def _threads(value: str) -> int:
    return int(_within(_count(value), 1, MOST_THREADS))


def _times(value: str) -> float:
    return _within(_number(value.removesuffix("x")), 1.0 / MOST_TIMES, MOST_TIMES)


def _shape(value: str) -> tuple[int, ...]:
    parts = re.split(r"[x,]", value.strip("[]"))
    if not 1 <= len(parts) <= 3:
        raise ValueError("expected one to three numbers of zones, as 48x48")
    return tuple(_count(part.strip()) for part in parts)


_PLAIN: Mapping[str, tuple[str, Callable[[str], Any]]] = {
    "workers": ("workers", _count),
    "threads": ("threads", _threads),
    "tile": ("tile", _shape),
    "latency": ("latency_us", _micros),
    "bandwidth": ("bandwidth_gbytes", _gbytes),
    "memory": ("memory_gbytes", _gbytes),
    "window": ("window", _count),
    "weak": ("weak", _whole),
}
