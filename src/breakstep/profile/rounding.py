"""Times for people, rounded so that printed parts add up to the printed whole."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

FIGURES = 5  # of the whole: enough to tell a thousandth of a wait
_UNITS = (("s", 9, 10**9), ("ms", 6, 10**5), ("us", 3, 0))  # name, power of ten in ns, from how many ns on


@dataclass(frozen=True)
class Scale:
    """A unit and a number of decimals.

    Attributes
    ----------
    unit : str
    unit_ns : int
        Nanoseconds of the unit.
    decimals : int
    """

    unit: str
    unit_ns: int
    decimals: int

    @classmethod
    def of(cls, whole_ns: int) -> Scale:
        """The scale on which a time has :data:`FIGURES` figures, or fewer where it has no more nanoseconds."""
        size = abs(whole_ns)
        unit, unit_ns, most = (
            ("s", 10**9, 9) if size >= 10**9 else ("ms", 10**6, 6) if size >= 10**5 else ("us", 10**3, 3)
        )
        before = 1 + int(math.log10(max(size / unit_ns, 1.0)))
        return cls(unit, unit_ns, min(most, max(0, FIGURES - before)))

    @property
    def step_ns(self) -> int:
        """What the last printed figure stands for [ns]."""
        return int(self.unit_ns // 10**self.decimals)

    def number(self, ns: int) -> str:
        """A time on this scale, without its unit."""
        return self._printed(_nearest(ns, self.step_ns))

    def text(self, ns: int) -> str:
        """A time on this scale, with its unit."""
        return f"{self.number(ns)} {self.unit}"

    def rounded(self, parts: Sequence[int]) -> list[str]:
        """Parts of a whole as numbers whose sum is the whole's number, by largest remainders.

        Every number is one of the two next to the part; of equal remainders the earlier is rounded up.
        """
        down = [part // self.step_ns for part in parts]
        missing = _nearest(sum(parts), self.step_ns) - sum(down)
        by_remainder = sorted(range(len(parts)), key=lambda i: -(parts[i] % self.step_ns))
        for place in by_remainder[:missing]:
            down[place] += 1
        return [self._printed(steps) for steps in down]

    def _printed(self, steps: int) -> str:
        if self.decimals == 0:
            return str(steps)
        sign, whole = "-" if steps < 0 else "", divmod(abs(steps), 10**self.decimals)
        return f"{sign}{whole[0]}.{whole[1]:0{self.decimals}d}"


def _nearest(ns: int, step: int) -> int:
    """How many steps, rounded half up."""
    return (2 * ns + step) // (2 * step)
