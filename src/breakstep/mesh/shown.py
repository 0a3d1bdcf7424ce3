"""How declarations show themselves in a notebook: small tables of HTML without scripts or styles of their own."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape


def facts(title: str, rows: Iterable[tuple[str, object]]) -> str:
    """A table of names and values under a title."""
    lines = "".join(f"<tr><th>{escape(name)}</th><td>{escape(str(value))}</td></tr>" for name, value in rows)
    return f"<table><caption>{escape(title)}</caption><tbody>{lines}</tbody></table>"


def columns(title: str, heads: Sequence[str], rows: Iterable[Sequence[object]]) -> str:
    """A table with heads above its columns."""
    top = "".join(f"<th>{escape(head)}</th>" for head in heads)
    lines = "".join("<tr>" + "".join(f"<td>{escape(str(cell))}</td>" for cell in row) + "</tr>" for row in rows)
    caption = f"<caption>{escape(title)}</caption>"
    return f"<table>{caption}<thead><tr>{top}</tr></thead><tbody>{lines}</tbody></table>"


def listed(words: Iterable[object]) -> str:
    """Words with commas, or a dash for none."""
    return ", ".join(map(str, words)) or "\N{EN DASH}"
