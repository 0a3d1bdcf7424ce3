"""Faults of a scenario, in words: what was expected, what came, where, and what may have been meant.

This module knows how a checked value fails and how to say so. It refuses to know what the keys of a
scenario mean.
"""

from __future__ import annotations

import difflib
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

LONGEST_QUOTE = 60  # characters of a wrong value that a sentence repeats; enough to recognise it
LIKENESS = 0.6  # difflib's usual cut-off: below it a suggestion is more often wrong than right


@dataclass(frozen=True)
class Fault:
    """One thing wrong: the key's path in the file, and a sentence without subject."""

    key: str
    text: str

    def sentence(self, source: str) -> str:
        """The fault with its place, as one sentence."""
        where = f"{source}: {self.key}" if self.key else source
        return f"{where}: {self.text}"


def join(path: str, key: object) -> str:
    """The path of a key inside a table, as ``--set`` takes it."""
    return f"{path}.{key}" if path else str(key)


def likeliest(word: str, known: Iterable[str]) -> str | None:
    """The known word that is most like a word, if any is alike at all."""
    lowered = {one.lower(): one for one in known}
    close = difflib.get_close_matches(word.lower(), list(lowered), n=1, cutoff=LIKENESS)
    return lowered[close[0]] if close else None


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """A clause that names the likeliest known word, or lists the known words when none is likely."""
    words = list(known)
    close = likeliest(word, words)
    if close is not None:
        return f"; did you mean {close}?"
    return f"; known here: {', '.join(words)}" if words else ""


def one_of(known: Iterable[str], came: object) -> str:
    """The fault of a value that is none of the known words."""
    words = list(known)
    close = likeliest(came, words) if isinstance(came, str) else None
    hint = f"; did you mean {close}?" if close is not None else ""
    return f"expected one of {', '.join(words)}, came {in_words(came)}{hint}"


def in_words(value: object) -> str:
    """A value as a TOML file would show it, shortened."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, int) and value.bit_length() > LONGEST_QUOTE * 4:
        return "a number of many digits"
    if isinstance(value, str):
        text = f'"{value}"'
    elif isinstance(value, list | tuple):
        text = "[" + ", ".join(in_words(item) for item in value) + "]"
    else:
        text = str(value)
    return text if len(text) <= LONGEST_QUOTE else f"{text[: LONGEST_QUOTE - 3]}..."


def expected(error: Mapping[str, Any]) -> str:
    """What one of pydantic's errors wanted and what came, in words."""
    kind, facts = str(error["type"]), error.get("ctx", {})
    came = error.get("input")
    if kind == "literal_error":
        words = str(facts["expected"]).replace(" or ", ", ")
        return one_of([word.strip("' ") for word in words.split(",")], came)
    if kind in _LENGTHS:
        return f"expected {_LENGTHS[kind](facts)}, came {facts.get('actual_length', 'more')}"
    if kind == "greater_than_equal" and came is not None and came <= 0.0 < facts["ge"] < 1.0:
        kind, facts = "greater_than", {"gt": 0.0}  # the tiny bound is there for floating point's sake
    return f"expected {_wanted(kind, facts, str(error['msg']))}, came {in_words(came)}"


def _wanted(kind: str, facts: Mapping[str, Any], message: str) -> str:
    if kind in _PLAIN:
        return _PLAIN[kind]
    if kind in _BOUNDS:
        words, key = _BOUNDS[kind]
        return f"a number {words} {facts[key]:g}"
    return message[:1].lower() + message[1:]


_PLAIN = {
    "int_type": "a whole number",
    "float_type": "a number",
    "string_type": "text",
    "bool_type": "true or false",
    "tuple_type": "a list",
    "list_type": "a list",
    "dict_type": "a table",
    "finite_number": "a finite number",
    "string_too_short": "text that is not empty",
    "string_pattern_mismatch": "letters, digits and underscores, beginning with a letter",
}
_BOUNDS = {
    "greater_than": ("above", "gt"),
    "greater_than_equal": ("of at least", "ge"),
    "less_than": ("below", "lt"),
    "less_than_equal": ("of at most", "le"),
}
_LENGTHS: dict[str, Callable[[Mapping[str, Any]], str]] = {
    "too_short": lambda facts: f"at least {_entries(facts['min_length'])}",
    "too_long": lambda facts: f"at most {_entries(facts['max_length'])}",
}


def _entries(count: int) -> str:
    return "1 entry" if count == 1 else f"{count} entries"
