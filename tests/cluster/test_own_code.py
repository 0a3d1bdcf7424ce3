"""Code of the user's on real workers: files that no worker can import by name, and compiled routines."""

from __future__ import annotations

from pathlib import Path

import pytest
from distributed import Client

from breakstep import api
from breakstep.scenario.setup import DispatchName
from tests.cluster.conftest import NOTHING, leftovers
from tests.compilers import example

pytestmark = pytest.mark.cluster

SMALL = ("code.arguments.zones=[32, 32]", "run.cycles=6")


@pytest.mark.parametrize("dispatch", ["resident", "native"])
@pytest.mark.parametrize("name", ["heat_c", "heat_fortran"])
def test_a_compiled_routine_gives_the_same_bits_everywhere(
    client: Client, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str, dispatch: DispatchName
) -> None:
    """Lockstep, tasked, and in one thread of this process."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    monkeypatch.chdir(tmp_path)
    file = example(name)
    alone = api.run(file, overrides=SMALL, dispatch="serial")
    both = api.compare(file, overrides=SMALL, dispatch=dispatch, pairs=1, client=client)
    assert both.identical
    assert both.tasked[0].manifest["digest"] == alone.manifest["digest"]
    assert both.tasked[0].manifest["workers"] == 4
    assert len(set(both.tasked[0].tasks["worker"])) == 4
    assert leftovers(client) == NOTHING
