"""What an audit says: findings, their kinds, and which of them are faults.

Knows words and figures only; it neither calls kernels nor reads memory.
"""

from __future__ import annotations

import dataclasses
import json
from dataclasses import asdict, dataclass
from typing import Any, Final

FAULT: Final = "fault"
NOTE: Final = "note"

KINDS: Final[dict[str, str]] = {
    "undeclared field": "reads a field it does not declare",
    "undeclared halo": "reads farther than the declared halo",
    "undeclared corners": "reads diagonal ghost zones without corners=True",
    "undeclared reduction": "uses a reduction that is not in uses",
    "unused read": "declares a field that was not seen to matter",
    "unused halo": "declares ghost zones that were not seen to matter",
    "unused corners": "declares corners that were not seen to matter",
    "unused reduction": "declares a reduction that was not seen to matter",
    "wrong writes": "returns something else than it declares",
    "changed input": "changes what it was given",
    "outside memory": "reads or writes outside of the arrays it has",
    "uninitialised": "uses or returns memory that it never set",
    "hidden state": "keeps something between calls",
    "shared result": "returns an array that is not its own",
    "call order": "gives other bits in another process or order",
    "not repeatable": "gives other bits for the same input",
    "tile number": "depends on the number of its tile",
    "tiling": "depends on how the mesh is cut",
    "threads": "is disturbed by a second thread",
    "side effect": "acts on something outside",
    "raises": "raises with what it declares",
    "crash": "ends the process",
    "timeout": "does not return",
    "position": "depends on where or when it is called, as it may",
}
"""Kinds of finding; the last is never a fault."""


@dataclass(frozen=True)
class Finding:
    """One thing found.

    Attributes
    ----------
    part : str
        Step or reduction.
    kind : str
        One of ``KINDS``.
    text : str
        A sentence with its evidence.
    severity : str
        ``fault`` or ``note``.
    field : str
        Field or reduction concerned, or "".
    change : dict
        What the declaration of ``field`` should be, as far as known: ``halo``, ``corners``, or ``drop``.
    cost : str
        What the falsehood costs, or what would go; filled in by the process that knows the graph.
    """

    part: str
    kind: str
    text: str
    severity: str = FAULT
    field: str = ""
    change: dict[str, Any] = dataclasses.field(default_factory=dict)
    cost: str = ""

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise ValueError(f"unknown kind of finding: {self.kind}")

    @property
    def is_fault(self) -> bool:
        """Whether the declaration or the kernel has to change."""
        return self.severity == FAULT

    def line(self) -> str:
        """The finding as one line of JSON."""
        return json.dumps(asdict(self))

    @classmethod
    def of_line(cls, line: str) -> Finding:
        """The finding of a line made by :meth:`line`."""
        return cls(**json.loads(line))
