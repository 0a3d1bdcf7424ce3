"""Numbers and names as the terminal shows them."""

from __future__ import annotations

import math
import re
import textwrap
from collections.abc import Sequence

from breakstep.profile.ledger import Ledger
from breakstep.profile.run import Profile

WIDTH = 80
UNIT = re.compile(r"(\d) (?=(?:%|[kMGT]?B|m?s|times)(?:\W|$))")
FULL_CHOICES = ("lockstep", "tasked")


def counted(count: int, noun: str) -> str:
    """A number with its noun: ``1 pair``, ``3 pairs``."""
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def ratio(value: float) -> str:
    """A ratio of times; with more digits beside 1, so that none is rounded onto it."""
    return f"{value:.2f}" if abs(value - 1.0) >= 0.01 else f"{value:.4f}"


def unevenness(value: float) -> str:
    """A largest over a mean; a dash where there was nothing to compare."""
    return f"{value:.2f}" if math.isfinite(value) else "-"


def seconds(value: float) -> str:
    """A wall time with three digits."""
    if value >= 1.0:
        return f"{value:.{2 if value < 10.0 else 1 if value < 100.0 else 0}f} s"
    return f"{value * 1e3:.3g} ms"


def size(count: float) -> str:
    """A number of bytes in decimal units."""
    for unit in ("B", "kB", "MB", "GB"):
        if count < 1000:
            return f"{count:.0f} {unit}" if unit == "B" else f"{count:.1f} {unit}"
        count /= 1000
    return f"{count:.1f} TB"


def listed(names: Sequence[str]) -> str:
    """Names in a row, the last after ``and``."""
    return " and ".join(part for part in (", ".join(names[:-1]), *names[-1:]) if part)


def barriers_of(profile: Profile) -> str:
    """The barriers of a run that had neither all nor none: ``the barriers burn and solve``."""
    names = profile.manifest["barriers"]
    return f"the {'barrier' if len(names) == 1 else 'barriers'} {listed(names)}"


def column_name(profile: Profile) -> str:
    """The run's choice of barriers in a word or two."""
    mode, names = profile.manifest["mode"], profile.manifest["barriers"]
    return mode if mode in FULL_CHOICES else counted(len(names), "barrier")


def in_mode(profile: Profile) -> str:
    """The run's choice of barriers as an adverb."""
    mode = profile.manifest["mode"]
    return {"lockstep": "in lockstep", "tasked": "tasked"}.get(mode) or f"with {barriers_of(profile)}"


def digits_of(*ledgers: Ledger) -> int:
    """Decimals that leave the largest number of core-seconds with about four digits."""
    largest = max(ledger.available_ns for ledger in ledgers) / 1e9
    return 2 if largest >= 10.0 else 3 if largest >= 1.0 else 4


def wrapped(text: str, bullet: bool = False) -> list[str]:
    """Lines of at most WIDTH; a number stays with its unit."""
    joined = UNIT.sub("\\1\u00a0", text)
    lines = textwrap.wrap(joined, WIDTH, subsequent_indent="  " if bullet else "", break_on_hyphens=False)
    return [line.replace("\u00a0", " ") for line in lines]


def shortened(name: str, width: int) -> str:
    """The two ends of a name that a column does not hold."""
    half = (width - 2) // 2
    return name if len(name) <= width else f"{name[:half]}..{name[-half:]}"
