"""Memory under watch: writes beside arrays, contents of new memory, forbidden pages."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest

from breakstep.audit.memory import Guarded

RUN = """
import ctypes, os, numpy as np
from breakstep.audit.memory import Paged, Watch, fill_heap
watch = Watch()
{body}
os._exit(0)
"""


def alone(body: str) -> subprocess.CompletedProcess[str]:
    """Run lines in a process of their own, which they may spoil."""
    return subprocess.run([sys.executable, "-c", RUN.format(body=body)], capture_output=True, text=True, check=False)


def test_a_guarded_array_is_a_copy_amid_poison() -> None:
    array = np.arange(6.0).reshape(1, 2, 3, 1)
    guarded = Guarded(array, np.nan)
    assert np.array_equal(guarded.array, array)
    assert guarded.array.flags.c_contiguous
    assert np.isnan(guarded.buffer[guarded.inner.start - 1])
    assert np.isnan(guarded.buffer[guarded.inner.stop])
    assert guarded.changed().size == 0


@pytest.mark.parametrize("place", [-1, 0, 5, 6])
def test_a_changed_double_is_named_inside_and_outside(place: int) -> None:
    guarded = Guarded(np.arange(6.0).reshape(1, 2, 3, 1), np.nan)
    guarded.buffer[guarded.inner.start + place] = 17.0
    assert guarded.changed().tolist() == [place]


def test_a_protected_array_refuses_numpy() -> None:
    guarded = Guarded(np.zeros((1, 2, 2, 1)), 1.0)
    guarded.protect()
    with pytest.raises(ValueError, match="read-only"):
        guarded.array[0, 0, 0, 0] = 1.0


def test_new_arrays_hold_the_pattern_and_zeros_hold_zeros() -> None:
    body = "watch.fill = 0xFF\nwith watch.on(): a, b, c = np.empty(40), np.zeros(40), np.ones(4).copy()\n"
    ran = alone(body + "print(np.isnan(a).all(), (b == 0).all(), c.sum(), watch.check())")
    assert ran.stdout.split() == ["True", "True", "4.0", "0"]


@pytest.mark.parametrize(("offset", "bytes_"), [(320, 8), (-8, 8), (328, 16)])
def test_a_write_beside_a_new_array_is_measured(offset: int, bytes_: int) -> None:
    body = f"with watch.on(): a = np.zeros(40)\nctypes.memset(a.ctypes.data + {offset}, 0, 8)\nprint(watch.check())"
    assert alone(body).stdout.split() == [str(bytes_)]


def test_an_array_that_is_gone_is_still_reported() -> None:
    body = "with watch.on():\n    a = np.zeros(40)\n    ctypes.memset(a.ctypes.data + 320, 0, 8)\n    del a\n"
    assert alone(body + "print(watch.check())").stdout.split() == ["8"]


@pytest.mark.parametrize(
    ("body", "dies"),
    [
        ("p = Paged(np.zeros(8), at_end=True, writable=True).array; ctypes.memset(p.ctypes.data, 0, 64)", False),
        ("p = Paged(np.zeros(8), at_end=True, writable=True).array; ctypes.memset(p.ctypes.data + 64, 0, 8)", True),
        ("p = Paged(np.zeros(8), at_end=False, writable=True).array; ctypes.memset(p.ctypes.data - 8, 0, 8)", True),
        ("p = Paged(np.zeros(8), at_end=True, writable=False).array; ctypes.memset(p.ctypes.data, 0, 8)", True),
        ("watch.paged = True\nwith watch.on(): a = np.zeros(8)\nctypes.memset(a.ctypes.data + 64, 0, 8)", True),
        ("watch.paged = True\nwith watch.on():\n    a = np.zeros(8); b = a.copy(); del a", False),
    ],
)
def test_a_touch_of_a_forbidden_page_ends_the_process(body: str, dies: bool) -> None:
    assert (alone(body).returncode != 0) is dies
