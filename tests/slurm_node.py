"""A Slurm cluster of one node, this machine, for the tests: own folder, ports, key and daemons.

Nothing of an installed Slurm is touched: commands find this cluster by SLURM_CONF. Its daemons are children
of the test process.
"""

from __future__ import annotations

import os
import pwd
import secrets
import shutil
import socket
import subprocess
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path

import psutil
import pytest

ROOT = Path(__file__).parents[1]

PROGRAMS = ("munged", "slurmctld", "slurmd", "sbatch", "squeue", "scontrol", "scancel", "sinfo")

#: Seconds until a daemon must be up, and until a credential ends: a requeued job waits for it.
PATIENCE, CREDENTIAL_SECONDS = 30.0, 5

CONFIGURATION = """\
ClusterName=test
SlurmctldHost={host}(127.0.0.1)
SlurmctldPort={ports[0]}
SlurmdPort={ports[1]}
AuthType=auth/munge
AuthInfo=socket={folder}/munge/socket,cred_expire={expire}
CredType=cred/munge
SlurmUser=root
SlurmdUser=root
StateSaveLocation={folder}/state
SlurmdSpoolDir={folder}/spool
SlurmctldPidFile={folder}/slurmctld.pid
SlurmdPidFile={folder}/slurmd.pid
ProctrackType=proctrack/linuxproc
TaskPlugin=task/none
SelectType=select/cons_tres
SelectTypeParameters=CR_Core
SchedulerParameters=sched_interval=1,bf_interval=1,batch_sched_delay=0
KillWait=20
MinJobAge=300
MaxArraySize={largest_array}
ReturnToService=2
SlurmdParameters=config_overrides
NodeName={host} NodeAddr=127.0.0.1 CPUs={cores} RealMemory=1000 State=UNKNOWN
PartitionName=main Nodes=ALL Default=YES MaxTime=INFINITE State=UP
"""


def missing() -> str:
    """Why no cluster can be started here; empty if one can."""
    paths = f"{os.environ.get('PATH', '')}:/usr/sbin:/sbin"
    if lacking := [name for name in PROGRAMS if shutil.which(name, path=paths) is None]:
        return f"not installed: {', '.join(lacking)} (Debian: slurm-wlm and munge)"
    if os.geteuid() != 0:
        return "a cluster of one node is started by root"
    try:
        pwd.getpwnam("munge")
    except KeyError:
        return "there is no user munge"
    return ""


@dataclass(frozen=True)
class Node:
    """A running cluster: where its files are, and the environment that its commands need."""

    folder: Path
    environment: dict[str, str]

    def found_by(self, monkeypatch: pytest.MonkeyPatch) -> Node:
        """Let commands that this process starts find the cluster, and jobs this checkout."""
        for name, value in {**self.environment, "PYTHONPATH": str(ROOT)}.items():
            monkeypatch.setenv(name, value)
        return self

    def call(self, *words: str) -> str:
        """Carry out a command of Slurm and return its output."""
        done = subprocess.run(
            words, env=self.environment, capture_output=True, text=True, timeout=30, check=False
        )
        assert done.returncode == 0, f"{words}: {done.stderr}"
        return done.stdout


@contextmanager
def slurm_node(*, cores: int, largest_array: int = 1001) -> Iterator[Node]:
    """Yield a cluster of this machine with so many cores; afterwards its jobs and daemons are gone."""
    folder = Path(tempfile.mkdtemp(prefix="slurm-"))
    folder.chmod(0o755)
    environment = {
        **os.environ,
        "PATH": f"{os.environ.get('PATH', '')}:/usr/sbin:/sbin",
        "SLURM_CONF": str(folder / "slurm.conf"),
    }
    daemons: list[subprocess.Popen[bytes]] = []
    node = Node(folder, environment)
    try:
        _write_configuration(folder, cores=cores, largest_array=largest_array)
        daemons.append(_start_munge(folder))
        daemons += [_start(folder, name, environment) for name in ("slurmctld", "slurmd")]
        _await(lambda: "idle" in node.call("sinfo", "--noheader", "--format=%T"), "the node", folder)
        yield node
    finally:
        with suppress(AssertionError, OSError, subprocess.TimeoutExpired):
            node.call("scancel", "--full", "--user=root")
            _await(lambda: not node.call("squeue", "--noheader"), "the end of all jobs", folder)
        for daemon in reversed(daemons):
            _end(daemon)
        shutil.rmtree(folder, ignore_errors=True)


def _write_configuration(folder: Path, *, cores: int, largest_array: int) -> None:
    for name in ("state", "spool"):
        (folder / name).mkdir()
    text = CONFIGURATION.format(
        host=socket.gethostname().partition(".")[0],
        ports=_free_ports(2),
        folder=folder,
        expire=CREDENTIAL_SECONDS,
        cores=cores,
        largest_array=largest_array,
    )
    (folder / "slurm.conf").write_text(text)


def _start_munge(folder: Path) -> subprocess.Popen[bytes]:
    """Start the daemon that vouches for users, with a key of its own."""
    place, user = folder / "munge", pwd.getpwnam("munge")
    place.mkdir(mode=0o755)
    key = place / "key"
    key.write_bytes(secrets.token_bytes(128))
    key.chmod(0o400)
    for path in (place, key):
        os.chown(path, user.pw_uid, user.pw_gid)
    files = {"socket": "socket", "key-file": "key", "pid-file": "pid", "log-file": "log", "seed-file": "seed"}
    words = [
        "/usr/sbin/munged",
        "--foreground",
        *(f"--{name}={place / file}" for name, file in files.items()),
    ]
    daemon = subprocess.Popen(
        words, user="munge", group="munge", stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
    )
    _await((place / "socket").exists, "munged", folder)
    return daemon


def _start(folder: Path, name: str, environment: dict[str, str]) -> subprocess.Popen[bytes]:
    with (folder / f"{name}.log").open("wb") as log:
        return subprocess.Popen([name, "-D"], env=environment, stdout=log, stderr=log)


def _end(daemon: subprocess.Popen[bytes]) -> None:
    """End a daemon and its children."""
    with suppress(psutil.Error):
        children = psutil.Process(daemon.pid).children(recursive=True)
        daemon.terminate()
        try:
            daemon.wait(10)
        except subprocess.TimeoutExpired:
            daemon.kill()
            daemon.wait(10)
        for child in children:
            with suppress(psutil.Error):
                child.kill()


def _free_ports(count: int) -> list[int]:
    sockets = [socket.socket() for _ in range(count)]
    try:
        for each in sockets:
            each.bind(("127.0.0.1", 0))
        return [int(each.getsockname()[1]) for each in sockets]
    finally:
        for each in sockets:
            each.close()


def eventually(happened: Callable[[], object], seconds: float) -> None:
    """Wait until something has happened; fail if it does not within so many seconds."""
    deadline = time.monotonic() + seconds
    while not happened():
        assert time.monotonic() < deadline, "waited in vain"
        time.sleep(0.1)


def _await(happened: Callable[[], bool], what: str, folder: Path) -> None:
    deadline = time.monotonic() + PATIENCE
    while time.monotonic() < deadline:
        with suppress(AssertionError):
            if happened():
                return
        time.sleep(0.2)
    logs = "\n".join(f"{log.name}:\n{log.read_text()[-2000:]}" for log in folder.glob("*.log"))
    message = f"waited {PATIENCE:g} s for {what}\n{logs}"
    raise TimeoutError(message)
