"""The text of ``breakstep selfcheck``: what the tool costs here, and whether its statistics see ghosts."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

WIDTH = 80

Figures = Mapping[str, Any]


def selfcheck_lines(figures: Figures) -> list[str]:
    return []
