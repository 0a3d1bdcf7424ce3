"""Reaching a Dask cluster: the user's own, or one made here on the loopback interface."""

from __future__ import annotations

import contextlib
import json
import logging
from collections.abc import Iterator
from pathlib import Path

import dask
from distributed import Client, LocalCluster
from distributed.comm.addressing import parse_address, parse_host_port
from distributed.gc import disable_gc_diagnosis

from breakstep.engine.crowd import CROWDED, crowd_in
from breakstep.engine.interrupts import children_deaf, interrupts_held
from breakstep.errors import ClusterError

CONNECT_SECONDS = 5  # Dask tries again and again until then, in case the scheduler is just being started


@contextlib.contextmanager
def local_cluster(workers: int, threads: int = 1, processes: int | None = None) -> Iterator[Client]:
    """A cluster of worker processes on this machine, gone when the context ends.

    With fewer processes than workers, several workers share a process: for workers that mostly wait.

    Scheduler and workers listen on loopback alone. Each worker's BLAS runs one thread (Dask's own
    default for its worker processes), so that the tasks are the only parallelism. Ctrl-C does not reach the
    workers, which live on to hand over their records; while they start, it waits.

    Raises
    ------
    ClusterError
        They do not start.
    """
    quiet = {
        "distributed.worker.memory.terminate": False,
        "distributed.admin.large-graph-warning-threshold": "100MB",
        # Dask starts a worker that has died anew. But if the new one is gone, too, when this time is over, it
        # starts no more: with the default of 15 s a second death at the wrong moment halves the cluster for good.
        "distributed.deploy.lost-worker-timeout": "1 day",
    }
    apart = min(processes or workers, workers)
    with dask.config.set(quiet | (CROWDED if apart < workers else {})), contextlib.ExitStack() as stack:
        with interrupts_held(), children_deaf():
            client = stack.enter_context(Client(stack.enter_context(_start(apart, threads))))
            # The scheduler times garbage collections of this process, in a callback: Ctrl-C that falls into it is
            # lost (seen while numba compiled), and every later collection then complains of that with a traceback.
            disable_gc_diagnosis()
            if apart < workers:
                stack.enter_context(crowd_in(client, workers, threads))
        yield client


def _start(workers: int, threads: int) -> LocalCluster:
    """Start one, its status page on whichever port is free, and without Dask's own log lines."""
    try:
        return LocalCluster(
            n_workers=workers,
            threads_per_worker=threads,
            processes=True,
            host="127.0.0.1",
            scheduler_kwargs={"dashboard": False, "dashboard_address": "127.0.0.1:0"},
            silence_logs=logging.CRITICAL,
        )
    except (OSError, RuntimeError, TimeoutError) as error:
        raise ClusterError(
            f"this machine does not start {workers} worker processes ({error}); ask for fewer, or free memory"
        ) from error


@contextlib.contextmanager
def existing_cluster(address: str | None = None, scheduler_file: Path | None = None) -> Iterator[Client]:
    """A cluster that the user runs, by address or scheduler file.

    Raises
    ------
    ClusterError
        Nobody answers there.
    """
    with _quiet(), _connect(address, scheduler_file) as client:
        yield client


def _connect(address: str | None, scheduler_file: Path | None) -> Client:
    if scheduler_file is not None:
        address, where = _address_in(scheduler_file), f"at {address}, which scheduler file {scheduler_file} names"
    else:
        where = f"at {address}"
    try:
        _check_address(str(address))
        return Client(address, timeout=CONNECT_SECONDS)
    except (ValueError, TypeError) as error:  # TypeError: a scheme that lacks its library or its certificates
        raise ClusterError(
            f"{address} is no address of a Dask scheduler ({error}); expected one such as tcp://10.0.0.1:8786,"
            " or tls:// with Dask's TLS configuration in place"
        ) from error
    except (OSError, TimeoutError) as error:
        raise ClusterError(
            f"no Dask scheduler answers {where} within {CONNECT_SECONDS} s ({type(error).__name__});"
            " check the address and that the scheduler runs"
        ) from error


def _check_address(address: str) -> None:
    """Raise ValueError for what Dask could not connect to, without starting to try."""
    scheme, place = parse_address(address)
    if scheme in ("tcp", "tls"):
        parse_host_port(place)


def _address_in(scheduler_file: Path) -> str:
    """The address that a scheduler wrote into its file."""
    try:
        return str(json.loads(scheduler_file.read_text(encoding="utf-8"))["address"])
    except FileNotFoundError as error:
        raise ClusterError(f"there is no scheduler file {scheduler_file}; is the scheduler running?") from error
    except (OSError, ValueError, LookupError, TypeError) as error:
        raise ClusterError(
            f"{scheduler_file} is no scheduler file: expected JSON with the key address"
            f" ({type(error).__name__}: {error}); give the file that dask scheduler --scheduler-file wrote"
        ) from error


@contextlib.contextmanager
def _quiet() -> Iterator[None]:
    """Keep Dask's log lines from the terminal: what matters of them comes out as our own errors."""
    logger = logging.getLogger("distributed")
    before = logger.level
    logger.setLevel(logging.CRITICAL)
    try:
        yield
    finally:
        logger.setLevel(before)
