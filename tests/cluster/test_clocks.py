"""Clocks of real workers: they share this machine's, so the true offset is 0 also when we pretend not to know."""

from __future__ import annotations

import pytest
from distributed import Client

from breakstep.engine import clocks
from breakstep.engine.clocks import read_clocks
from breakstep.engine.resident import adapter

pytestmark = pytest.mark.cluster

# Round trips on one host take 0.2 ms, through the scheduler 0.8; 50 ms leaves room for a machine that is busy
# elsewhere, and would still be found out if a unit were wrong.
MOST_NS = 50_000_000


def addresses_of(client: Client) -> list[str]:
    """Two workers."""
    return sorted(client.scheduler_info(n_workers=-1)["workers"])[:2]


def test_workers_on_this_machine_share_its_clock(client: Client) -> None:
    for reading in read_clocks(client, addresses_of(client)):
        assert (reading.offset, reading.residual) == (0, 0)
        assert reading.cpu > 0


@pytest.mark.parametrize("reachable", [True, False])
def test_workers_elsewhere_are_aligned(client: Client, monkeypatch: pytest.MonkeyPatch, reachable: bool) -> None:
    """Over a connection of our own or, where a firewall forbids that, through the scheduler."""
    monkeypatch.setattr(clocks, "_boot", lambda: "another machine")
    if not reachable:
        monkeypatch.setattr(adapter, "exchange", _no_route)
    for reading in read_clocks(client, addresses_of(client)):
        assert 0 < reading.residual < MOST_NS
        assert abs(reading.offset) <= reading.residual


async def _no_route(*_: object) -> object:
    raise OSError("no route to host")
