"""A driver that begins a long run on a cluster that others use too, says so, and waits to be killed."""

from __future__ import annotations

import sys
from pathlib import Path

from breakstep.engine.cluster import existing_cluster
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import RunOptions
from tests.cluster.hazards import lasting_program
from tests.toys import Toy


def main() -> None:
    """Arguments: the scheduler's address, the lease in seconds, and a folder for checkpoints."""
    address, lease, checkpoints = sys.argv[1:]
    with existing_cluster(address) as client:
        dispatch = ResidentDispatch(client, lease=float(lease), checkpoints=Path(checkpoints))
        program = lasting_program(Toy((12, 8), cycles=100_000))
        dispatch.run(program, RunOptions(checkpoint_every=5), lambda cycle: print(cycle, flush=True))


if __name__ == "__main__":
    main()
