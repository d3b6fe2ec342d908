"""A small real Slurm on this machine, for tests and for trying the Slurm profile.

    python tests/cluster/slurm.py up FOLDER [--nodes 2] [--processors 2]
    python tests/cluster/slurm.py down FOLDER

`up` starts a controller and nodes that listen on the loopback address only, and prints the line that makes
a shell use them; `down` cancels their jobs and ends them. It needs root and the Debian packages slurmctld,
slurmd, slurm-client and munge. Nodes claim memory and processors that need not exist. What Slurm writes lies
in FOLDER; besides it there is the link /etc/slurm/slurm.conf while the cluster is up, since jobs look for
their configuration there.
"""

from __future__ import annotations

import argparse
import contextlib
import os
import shutil
import signal
import socket
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path

PROGRAMS = ("munged", "slurmctld", "slurmd", "sbatch", "squeue", "scontrol", "scancel", "sinfo")
LINK = Path("/etc/slurm/slurm.conf")
HOSTS = Path("/etc/hosts")
#: What a Slurm needs that has no systemd, no control groups and no accounting. A job that takes more memory
#: than it asked for is killed; a node that does not answer is given up after ten seconds, a controller keeps
#: what it knows of finished jobs for an hour.
CONFIGURATION = """\
ClusterName=bench
SlurmctldHost={host}(127.0.0.1)
SlurmctldPort={port}
SlurmUser=root
SlurmdUser=root
AuthType=auth/munge
AuthInfo=socket={folder}/munge.socket
CommunicationParameters=NoCtldInAddrAny,NoInAddrAny
ProctrackType=proctrack/linuxproc
TaskPlugin=task/none
JobAcctGatherType=jobacct_gather/linux
JobAcctGatherFrequency=task=1
JobAcctGatherParams=OverMemoryKill
MpiDefault=none
AccountingStorageType=accounting_storage/none
MinJobAge=3600
SlurmdParameters=config_overrides
SelectType=select/cons_tres
SelectTypeParameters=CR_Core_Memory
DefMemPerCPU=100
SchedulerParameters=sched_interval=2,batch_sched_delay=0,sched_min_interval=0
SlurmctldTimeout=10
SlurmdTimeout=10
KillWait=2
ReturnToService=2
JobRequeue=0
StateSaveLocation={folder}/state
SlurmctldPidFile={folder}/slurmctld.pid
SlurmctldLogFile={folder}/slurmctld.log
SlurmdPidFile={folder}/slurmd.%n.pid
SlurmdLogFile={folder}/slurmd.%n.log
SlurmdSpoolDir={folder}/spool.%n
"""
NODE = (
    "NodeName={name} NodeHostname={host} NodeAddr=127.0.0.1 Port={port} CPUs={processors} Sockets=1 "
    "CoresPerSocket={processors} ThreadsPerCore=1 RealMemory={memory_mb} State=UNKNOWN\n"
)


class NoClusterError(Exception):
    """Slurm cannot be had on this machine; the text says why."""


@dataclass(frozen=True)
class Cluster:
    """A cluster in a folder.

    Parameters
    ----------
    folder : Path
        Absolute, short (sockets lie in it), and made by `start`.
    nodes, processors, memory_mb : int
        How many nodes, and what each of them claims to have.
    port : int
        Of the controller; the nodes take the next ones.
    """

    folder: Path
    nodes: int = 2
    processors: int = 2
    memory_mb: int = 16_000
    port: int = 26_817

    @property
    def names(self) -> list[str]:
        """The nodes."""
        return [f"node{number}" for number in range(1, self.nodes + 1)]

    @property
    def environment(self) -> dict[str, str]:
        """The variables of a process that uses the cluster."""
        return {**os.environ, "SLURM_CONF": str(self.folder / "slurm.conf")}

    def ask(self, *command: str, seconds: float = 20) -> str:
        """Run a program of Slurm and return what it prints; empty when it fails."""
        with contextlib.suppress(subprocess.SubprocessError):
            return subprocess.run(
                command, env=self.environment, capture_output=True, text=True, timeout=seconds, check=True
            ).stdout.strip()
        return ""

    # Start

    def start(self) -> None:
        """Start what does not run yet, and wait until every node takes jobs.

        Raises
        ------
        NoClusterError
            It cannot be started here.
        """
        why_not(self.folder)
        for name in ("state", *(f"spool.{node}" for node in self.names)):
            (self.folder / name).mkdir(parents=True, exist_ok=True)
        self.folder.chmod(0o755)
        name_leads_to_this_machine()
        self._write_configuration()
        LINK.parent.mkdir(exist_ok=True)
        LINK.unlink(missing_ok=True)
        LINK.symlink_to(self.folder / "slurm.conf")
        self._start_munge()
        if not self._pid("slurmctld"):
            self._run("slurmctld", "-f", str(self.folder / "slurm.conf"))
        for node in self.names:
            self.start_node(node)
        self._wait_for_nodes()

    def start_node(self, node: str) -> None:
        """Start one node's daemon unless it runs."""
        if not self._pid(f"slurmd.{node}"):
            self._run("slurmd", "-N", node, "-f", str(self.folder / "slurm.conf"))

    def _write_configuration(self) -> None:
        host = socket.gethostname().split(".")[0]
        text = CONFIGURATION.format(host=host, port=self.port, folder=self.folder)
        for number, name in enumerate(self.names, 1):
            text += NODE.format(
                name=name,
                host=host,
                port=self.port + number,
                processors=self.processors,
                memory_mb=self.memory_mb,
            )
        text += f"PartitionName=main Nodes={','.join(self.names)} Default=YES MaxTime=INFINITE State=UP\n"
        (self.folder / "slurm.conf").write_text(text)

    def _start_munge(self) -> None:
        if self._pid("munged"):
            return
        key = self.folder / "munge.key"
        if not key.exists():
            key.touch(mode=0o600)
            key.write_bytes(os.urandom(1024))
        for left in self.folder.glob("munge.socket*"):
            left.unlink()
        options = {
            "key-file": key,
            "socket": self.folder / "munge.socket",
            "pid-file": self.folder / "munged.pid",
        }
        options |= {"log-file": self.folder / "munged.log", "seed-file": self.folder / "munged.seed"}
        self._run("munged", *(f"--{name}={value}" for name, value in options.items()))

    def _run(self, *command: str) -> None:
        done = subprocess.run(
            command,
            env=self.environment,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            check=False,
        )
        if done.returncode:
            raise NoClusterError(f"{command[0]} does not start: {done.stderr.strip()}")

    def _wait_for_nodes(self, seconds: float = 60) -> None:
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            states = self.ask("sinfo", "-h", "-N", "-o", "%N %T").splitlines()
            if sum(state.split()[1] in ("idle", "mixed", "allocated") for state in states) == self.nodes:
                return
            down = [state.split()[0] for state in states if state.split()[1].startswith(("down", "drain"))]
            if down:
                self.ask("scontrol", "update", f"nodename={','.join(down)}", "state=resume")
            time.sleep(0.2)
        raise NoClusterError(
            f"not every node takes jobs ({'; '.join(states) or 'no answer'}); see {self.folder}"
        )

    # Stop

    def stop(self) -> None:
        """Cancel all jobs, end the daemons and take the link away."""
        if self._pid("slurmctld"):
            jobs = self.ask("squeue", "-h", "-o", "%A").split()
            if jobs:
                self.ask("scancel", *jobs)
            end = time.monotonic() + 15
            while self.ask("squeue", "-h") and time.monotonic() < end:
                time.sleep(0.2)
        for name in (*(f"slurmd.{node}" for node in self.names), "slurmctld", "munged"):
            self.stop_daemon(name)
        if LINK.is_symlink() and LINK.readlink() == self.folder / "slurm.conf":
            LINK.unlink()

    def stop_daemon(self, name: str, how: int = signal.SIGTERM) -> None:
        """End one daemon: `slurmctld`, `munged` or `slurmd.NODE`."""
        pid = self._pid(name)
        if not pid:
            return
        os.kill(pid, how)
        end = time.monotonic() + 5
        while self._pid(name):
            if time.monotonic() > end:
                with contextlib.suppress(ProcessLookupError):
                    os.kill(pid, signal.SIGKILL)
            time.sleep(0.05)

    def _pid(self, name: str) -> int | None:
        """The process of a daemon of this cluster, if it lives."""
        try:
            pid = int((self.folder / f"{name}.pid").read_text())
            command = Path(f"/proc/{pid}/cmdline").read_bytes()
            state = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0]
        except (OSError, ValueError):
            return None
        return pid if name.split(".")[0].encode() in command and state != "Z" else None


def why_not(folder: Path) -> None:
    """Say why there can be no cluster in a folder.

    Raises
    ------
    NoClusterError
        Always when there cannot.
    """
    missing = [name for name in PROGRAMS if shutil.which(name) is None]
    if missing:
        raise NoClusterError(
            f"Slurm is not installed ({', '.join(missing)} missing); on Debian, as root: "
            "apt-get install slurmctld slurmd slurm-client munge"
        )
    if os.geteuid() != 0:
        raise NoClusterError("a cluster for tests needs root")
    if LINK.exists() and not LINK.is_symlink():
        raise NoClusterError(f"{LINK} is there already: this machine belongs to a cluster")
    if LINK.is_symlink() and (other := LINK.readlink().parent) != folder and Cluster(other)._pid("slurmctld"):
        raise NoClusterError(f"another cluster for tests is up, in {other}")


def name_leads_to_this_machine() -> None:
    """Make the machine's name lead to the loopback address, where Slurm is to listen."""
    host = socket.gethostname().split(".")[0]
    with contextlib.suppress(OSError):
        if socket.gethostbyname(host).startswith("127."):
            return
    with HOSTS.open("a") as file:
        file.write(f"127.0.0.1 {host}\n")


def main() -> int:
    """Start or stop a cluster from the command line."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("what", choices=["up", "down"])
    parser.add_argument("folder", type=Path, help="where everything of the cluster lies")
    parser.add_argument("--nodes", type=int, default=2, help="number of nodes (default 2)")
    parser.add_argument("--processors", type=int, default=2, help="processors of each (default 2)")
    given = parser.parse_args()
    cluster = Cluster(given.folder.resolve(), nodes=given.nodes, processors=given.processors)
    try:
        cluster.start() if given.what == "up" else cluster.stop()
    except NoClusterError as error:
        print(error, file=sys.stderr)
        return 1
    if given.what == "up":
        print(f"export SLURM_CONF={cluster.folder}/slurm.conf")
    return 0


if __name__ == "__main__":
    sys.exit(main())
