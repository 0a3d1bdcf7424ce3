"""Memory that arrays give back: kept while a run lasts, handed back afterwards.

Each case runs in a process of its own, started as Dask starts its workers, since the settings are a process's.
"""

from __future__ import annotations

import ctypes
import os
import subprocess
import sys

import pytest

pytestmark = pytest.mark.skipif(
    not hasattr(ctypes.CDLL(None), "mallopt"), reason="this machine's C library has no settings for its allocator"
)

# Arrays of 400 kB, made and dropped again and again: each is about 100 pages.
PROGRAM = """
import resource, numpy as np
from breakstep.engine.allocator import keep_memory, release_memory

def faults():
    before = resource.getrusage(resource.RUSAGE_SELF).ru_minflt
    for _ in range(200):
        np.ones(50_000)
    return resource.getrusage(resource.RUSAGE_SELF).ru_minflt - before

default = faults()
keep_memory("first"); keep_memory("second"); faults()
kept = faults()
release_memory("first"); release_memory("first")
still = faults()
release_memory("second")
print(default, kept, still, faults())
"""


@pytest.fixture(scope="module")
def faults() -> tuple[int, ...]:
    as_dask_does = {**os.environ, "MALLOC_TRIM_THRESHOLD_": "65536"}
    done = subprocess.run([sys.executable, "-c", PROGRAM], env=as_dask_does, capture_output=True, text=True, check=True)
    return tuple(int(word) for word in done.stdout.split())


def test_memory_is_kept_while_any_run_lasts(faults: tuple[int, ...]) -> None:
    default, kept, still, _ = faults
    assert default > 200 * 50  # nearly all pages of every array were cleared anew
    assert kept < default / 20
    assert still < default / 20


def test_the_environments_settings_return_with_the_last_run(faults: tuple[int, ...]) -> None:
    default, _, _, after = faults
    assert after > default / 2
