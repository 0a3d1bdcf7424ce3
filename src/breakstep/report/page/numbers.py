"""Numbers as the page keeps them: plain, finite, and with no more digits than were measured."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any


def seconds(ns: float) -> float:
    """Nanoseconds as seconds, to the microsecond: the clocks of workers are not aligned any better."""
    return round(float(ns) * 1e-9, 6)


def all_seconds(ns: Iterable[float]) -> list[float]:
    """Several times at once."""
    return [seconds(one) for one in ns]


def significant(value: float, digits: int = 4) -> float | None:
    """A number cut to some significant digits; None for one that is not finite."""
    value = float(value)
    if not math.isfinite(value):
        return None
    if value == 0.0:
        return 0.0
    return round(value, digits - 1 - math.floor(math.log10(abs(value))))


def share(part: float, whole: float) -> float:
    """A part of a whole, to four digits behind the point; 0 of nothing."""
    return round(part / whole, 4) if whole else 0.0


def plain(value: Any) -> Any:
    """The same value with lists for tuples, text for keys, and None for what JSON cannot hold."""
    if isinstance(value, dict):
        return {str(key): plain(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple):
        return [plain(inner) for inner in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
