"""What a kernel reaches: globals, closures, attributes and static variables; not the caches of correct code."""

from __future__ import annotations

import ctypes
import functools
import shutil
import subprocess
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pytest

from breakstep.audit.elf import static_places
from breakstep.audit.reach import reached_state, static_memory

NUMBER = 3
TABLE = np.arange(3.0)
SPACE = {"work": np.zeros(2)}
LEVELS = [1.0, 2.0]


def uses_globals() -> float:
    return NUMBER + TABLE[0] + SPACE["work"][0]


def helper() -> float:
    return LEVELS[0]


def uses_helper() -> float:
    return helper()


def has_default(scale: tuple[float, ...] = (1.0,)) -> float:
    return scale[0]


@dataclass
class Holder:
    space: dict[str, np.ndarray] = field(default_factory=dict)
    count: int = 0

    def __call__(self) -> float:
        return float(TABLE[1])


def changed(kernel: object, change: object) -> set[str]:
    """Paths that differ before and after a change."""
    before = reached_state(kernel)
    change()  # type: ignore[operator]
    return before.differing(reached_state(kernel))


def test_globals_that_a_function_names_are_seen() -> None:
    assert changed(uses_globals, lambda: TABLE.__setitem__(0, TABLE[0] + 1)) == {"TABLE"}
    assert changed(uses_globals, lambda: SPACE["work"].__setitem__(0, 5.0)) == {"SPACE['work']"}
    assert "SPACE['work']" in reached_state(uses_globals).arrays


def test_globals_that_it_does_not_name_are_not() -> None:
    assert changed(has_default, lambda: TABLE.__setitem__(0, TABLE[0] + 1)) == set()


def test_helpers_are_followed() -> None:
    assert changed(uses_helper, lambda: LEVELS.__setitem__(0, LEVELS[0] + 1)) == {"LEVELS[0]"}


def test_attributes_and_methods_are_seen() -> None:
    holder = Holder({"a": np.zeros(2)})
    assert changed(holder, lambda: holder.space["a"].__setitem__(0, 1.0)) == {"Holder.space['a']"}
    assert changed(holder, lambda: setattr(holder, "count", 2)) == {"Holder.count"}
    assert changed(holder, lambda: TABLE.__setitem__(1, TABLE[1] + 1)) == {"TABLE"}


def test_what_is_filled_for_the_first_time_is_a_cache() -> None:
    holder = Holder()
    assert changed(holder, lambda: holder.space.update(a=np.zeros(2))) == {"the length of Holder.space"}


def test_partials_and_closures_are_followed() -> None:
    inner = np.zeros(2)

    def closes() -> float:
        return float(inner[0])

    bound = functools.partial(has_default, np.zeros(1))
    assert changed(closes, lambda: inner.__setitem__(0, 1.0)) == {"inner"}
    assert changed(bound, lambda: bound.args[0].__setitem__(0, 1.0)) != set()


def test_the_generators_belong_to_the_process() -> None:
    assert changed(has_default, np.random.random) == {"NumPy's global generator"}


def test_static_variables_of_a_library_have_names(tmp_path: Path) -> None:
    if shutil.which("gcc") is None:
        pytest.skip("needs gcc")
    source, library = tmp_path / "a.c", tmp_path / "liba.so"
    source.write_text(
        "static double kept[4];\nvoid set(double x) { kept[2] = x; }\ndouble get(int i) { return kept[i]; }\n"
    )
    subprocess.run(["gcc", "-O2", "-shared", "-fPIC", "-o", str(library), str(source)], check=True)
    assert [(title, size) for title, _, size in static_places(str(library))] == [
        ("static variable kept of liba.so", 32)
    ]
    loaded = ctypes.CDLL(str(library))
    loaded.set.argtypes = [ctypes.c_double]
    before = static_memory({str(library)})
    loaded.set(2.5)
    after = static_memory({str(library)})
    title = "static variable kept of liba.so"
    assert before[title] == bytes(32)
    assert np.frombuffer(after[title])[2] == 2.5


def test_a_file_of_another_kind_has_no_static_variables(tmp_path: Path) -> None:
    (tmp_path / "x.so").write_bytes(b"not a library")
    assert static_places(str(tmp_path / "x.so")) == ()
