"""Numbers as the page shows them."""

from __future__ import annotations

from typing import Any

from breakstep.report.wording import ratio, seconds, size

_DASH, _MINUS = "\u2013", "\u2212"
_THIN = "\u202f"  # a narrow space that does not break


def digits(value: float) -> str:
    """Three significant digits without an exponent."""
    value = float(value)
    if value == 0:
        return "0"
    return f"{value:.{max(0, 2 - _power(abs(value)))}f}"


def _power(value: float) -> int:
    power = 0
    while value >= 10:
        value, power = value / 10, power + 1
    while value < 1 and power > -6:
        value, power = value * 10, power - 1
    return power


def core(value: float | None) -> str:
    """Seconds in a table: three decimals below ten, two above; a dash where there is nothing."""
    if value is None:
        return _DASH
    return f"{value:.2f}".replace("-", _MINUS) if abs(value) >= 10 else f"{value:.3f}".replace("-", _MINUS)


def dash(value: float | None) -> str:
    """A ratio, or a dash."""
    return _DASH if value is None else f"{value:.2f}"


def three(value: float | None) -> str:
    """A factor with three decimals, or a dash."""
    return _DASH if value is None else f"{value:.3f}"


def whole(value: int) -> str:
    """A whole number in groups of three."""
    return f"{value:,}".replace(",", _THIN)


def one(value: float) -> str:
    """One decimal."""
    return f"{value:.1f}"


def percent(value: float) -> str:
    """A part as percents: whole ones, tenths below ten."""
    return f"{100 * value:.0f} %" if abs(value) >= 0.095 else f"{100 * value:.1f} %"


def closure(value: float) -> str:
    """Zero as such, anything else with its first digits."""
    return "0" if value == 0 else f"{value:.3g}"


def signed_size(value: float) -> str:
    """A change of bytes."""
    return "the same" if value == 0 else f"{'+' if value > 0 else _MINUS}{size(abs(value))}"


def moment(value: float) -> str:
    """A moment of a run, to the millisecond."""
    return f"{value:.3f} s"


def capital(text: str) -> str:
    """A sentence's first letter as a capital, the others as they are."""
    return text[:1].upper() + text[1:]


FILTERS: dict[str, Any] = {
    "s": seconds,
    "size": size,
    "ratio": ratio,
    "digits": digits,
    "core": core,
    "dash": dash,
    "three": three,
    "whole": whole,
    "one": one,
    "moment": moment,
    "capital": capital,
    "percent": percent,
    "closure": closure,
    "signed_size": signed_size,
}
