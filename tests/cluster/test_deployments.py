"""Clusters as users have them: a scheduler and workers started by command line, with and without TLS, reached by
address and by scheduler file; and whom a cluster of our own listens to."""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import psutil
import pytest
from distributed import Client

from breakstep.profile.store import read_profile

pytestmark = [pytest.mark.cluster, pytest.mark.slow]

TINY = ("quiet_gas", "--set", "mesh.zones=[64, 64]", "--set", "mesh.tile=[16, 32]", "--set", "run.cycles=4")
WORKERS = 2
PATIENCE = 60.0  # seconds for a process to import Dask and answer; 2 to 4 on two quiet cores


# ---- starting one -------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Certificates:
    """An authority of our own and one certificate that it signed, for whoever takes part."""

    authority: Path
    certificate: Path
    key: Path

    @property
    def options(self) -> list[str]:
        """For the commands of Dask."""
        return [f"--tls-ca-file={self.authority}", f"--tls-cert={self.certificate}", f"--tls-key={self.key}"]

    @property
    def environment(self) -> dict[str, str]:
        """Dask's own configuration, for whoever is a client."""
        where = "DASK_DISTRIBUTED__COMM__TLS__"
        return {
            f"{where}CA_FILE": str(self.authority),
            f"{where}CLIENT__CERT": str(self.certificate),
            f"{where}CLIENT__KEY": str(self.key),
            "DASK_DISTRIBUTED__COMM__REQUIRE_ENCRYPTION": "True",
        }


def make_certificates(folder: Path) -> Certificates:
    """Valid for a day, signed by an authority that nobody else has."""
    if shutil.which("openssl") is None:
        pytest.skip("the command openssl, which makes the certificates, is not there")
    names = [folder / name for name in ("authority.pem", "authority.key", "own.pem", "own.key", "own.csr")]
    authority, authority_key, certificate, key, request = map(str, names)
    sign = ["-CA", authority, "-CAkey", authority_key, "-CAcreateserial", "-days", "1"]
    fresh = ["-newkey", "rsa:2048", "-nodes"]
    openssl("req", "-x509", *fresh, "-keyout", authority_key, "-out", authority, "-days", "1", "-subj", "/CN=authority")
    openssl("req", *fresh, "-keyout", key, "-out", request, "-subj", "/CN=cluster")
    openssl("x509", "-req", "-in", request, "-out", certificate, *sign)
    return Certificates(Path(authority), Path(certificate), Path(key))


def openssl(*arguments: str) -> None:
    """The command."""
    done = subprocess.run(["openssl", *arguments], capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == 0, done.stderr


@dataclass
class Deployment:
    """A scheduler and its workers, each a process.

    Attributes
    ----------
    file : Path
        The scheduler file.
    environment : mapping
        What a client must have in its environment.
    """

    file: Path
    environment: Mapping[str, str]
    processes: list[subprocess.Popen[bytes]] = field(default_factory=list)

    @property
    def address(self) -> str:
        """Of the scheduler."""
        return str(json.loads(self.file.read_text())["address"])

    def start(self, *command: str) -> None:
        """One process of Dask's command line."""
        whole = [sys.executable, "-m", "dask", *command, "--host", "127.0.0.1", "--no-dashboard"]
        quiet = subprocess.DEVNULL
        self.processes.append(subprocess.Popen(whole, cwd=self.file.parent, stdout=quiet, stderr=quiet))

    def stop(self) -> None:
        """Workers first."""
        for process in reversed(self.processes):
            process.terminate()
        for process in reversed(self.processes):
            with contextlib.suppress(subprocess.TimeoutExpired):
                process.wait(10.0)
            process.kill()
            process.wait()


@pytest.fixture(scope="module", params=["tcp", "tls"])
def deployment(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Deployment]:
    """As ``dask scheduler`` and ``dask worker`` start it."""
    folder = tmp_path_factory.mktemp(request.param)
    secure = make_certificates(folder) if request.param == "tls" else None
    found = Deployment(folder / "scheduler.json", secure.environment if secure else {})
    options = ["--protocol", request.param, *(secure.options if secure else [])]
    try:
        found.start("scheduler", "--port", "0", "--scheduler-file", str(found.file), *options)
        wait_for(found.file)
        for number in range(WORKERS):
            one = ["--nthreads", "1", "--name", str(number), "--no-nanny"]
            found.start("worker", "--scheduler-file", str(found.file), *one, *options)
        yield found
    finally:
        found.stop()


def wait_for(file: Path) -> None:
    """Until a scheduler has written its file."""
    deadline = time.monotonic() + PATIENCE
    while not file.exists() or not file.read_text().strip():
        assert time.monotonic() < deadline, "the scheduler does not start"
        time.sleep(0.05)


# ---- reaching it --------------------------------------------------------------------------------------


def breakstep(folder: Path, *arguments: object, **more: str) -> subprocess.CompletedProcess[str]:
    """The command, to its end."""
    command = [sys.executable, "-m", "breakstep", *map(str, arguments)]
    return subprocess.run(
        command, cwd=folder, env={**os.environ, **more}, capture_output=True, text=True, timeout=120, check=False
    )


def run_there(deployment: Deployment, folder: Path, *place: object) -> str:
    """One run on all workers of a deployment, as soon as they are all there; its digest."""
    deadline = time.monotonic() + PATIENCE
    while True:
        asked = ("run", *TINY, *place, "--workers", WORKERS, "--placement", "cyclic", "--out", "mine")
        done = breakstep(folder, *asked, **deployment.environment)
        if done.returncode == 0 or time.monotonic() > deadline:
            break
        assert "has no workers" in done.stderr or "but the Dask cluster has 1" in done.stderr, done.stderr
    assert (done.returncode, done.stderr) == (0, "")
    profile = read_profile(folder / "mine")
    assert set(profile.tasks["worker"]) == set(range(WORKERS))
    assert profile.traffic.total_bytes > 0  # from worker to worker
    return str(profile.manifest["digest"])


@pytest.fixture(scope="module")
def expected(tmp_path_factory: pytest.TempPathFactory) -> str:
    """The serial answer."""
    folder = tmp_path_factory.mktemp("serial")
    assert breakstep(folder, "run", *TINY, "--dispatch", "serial", "--out", "mine").returncode == 0
    return str(read_profile(folder / "mine").manifest["digest"])


def test_by_address(deployment: Deployment, tmp_path: Path, expected: str) -> None:
    assert run_there(deployment, tmp_path, "--address", deployment.address) == expected


def test_by_scheduler_file(deployment: Deployment, tmp_path: Path, expected: str) -> None:
    assert run_there(deployment, tmp_path, "--scheduler-file", deployment.file) == expected


def test_without_its_certificates_nobody_is_let_in(deployment: Deployment, tmp_path: Path) -> None:
    """To a cluster with TLS; one without it is what every client reaches."""
    if not deployment.environment:
        pytest.skip("this cluster has no TLS")
    plain = deployment.address.replace("tls://", "tcp://")
    for address in (deployment.address, plain):
        done = breakstep(tmp_path, "run", *TINY, "--address", address, "--out", "mine")
        assert (done.returncode, done.stdout) == (2, "")
        (only,) = done.stderr.splitlines()
        assert address in only
    assert list(tmp_path.iterdir()) == []


def test_workers_of_a_cluster_with_tls_talk_to_each_other_in_tls(deployment: Deployment) -> None:
    """Every address, the workers' own included, is one of TLS: none takes a message that is not encrypted."""
    scheme = "tls://" if deployment.environment else "tcp://"
    ask = (
        "import sys; from distributed import Client\n"
        f"with Client(sys.argv[1]) as client:\n    client.wait_for_workers({WORKERS})\n"
        "    print(*client.scheduler_info(n_workers=-1)['workers'])"
    )
    command = [sys.executable, "-c", ask, deployment.address]
    environment = {**os.environ, **deployment.environment}
    done = subprocess.run(command, env=environment, capture_output=True, text=True, timeout=60, check=True)
    assert len(done.stdout.split()) == WORKERS
    assert all(address.startswith(scheme) for address in done.stdout.split())


# ---- whom a cluster of our own listens to ---------------------------------------------------------------


def listening(pids: Sequence[int]) -> set[str]:
    """Addresses on which these processes take connections, over IPv4 and IPv6."""
    found = set()
    for pid in pids:
        for connection in psutil.Process(pid).net_connections("inet"):
            if connection.status == psutil.CONN_LISTEN or connection.type == socket.SOCK_DGRAM:
                found.add(connection.laddr.ip)
    return found


def test_a_cluster_of_our_own_listens_on_loopback_alone(client: Client) -> None:
    """Scheduler (here), nannies (here) and workers, the page that shows their status included."""
    workers = list(client.run(os.getpid).values())
    assert len(set(workers)) == 4
    assert all(listening([pid]) == {"127.0.0.1"} for pid in workers)
    assert listening([os.getpid()]) == {"127.0.0.1"}


def test_what_listens_elsewhere_would_be_seen() -> None:
    """The test above can fail."""
    with contextlib.closing(socket.socket()) as open_to_all:
        open_to_all.bind(("", 0))
        open_to_all.listen()
        assert "0.0.0.0" in listening([os.getpid()])
