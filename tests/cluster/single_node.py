"""A Slurm cluster of one node on this machine's loopback, without systemd, cgroups or a data base.

munged, slurmctld and slurmd run in the foreground as children of the test and are ended by their own process ids.
Facts about their files and options are from the manual pages slurm.conf(5), slurmctld(8), slurmd(8) and munged(8).
"""

import contextlib
import os
import secrets
import shutil
import socket
import subprocess
import time
from pathlib import Path

SETTINGS = """\
ClusterName=evenblur
SlurmctldHost={host}(127.0.0.1)
SlurmctldPort={controller_port}
SlurmdPort={node_port}
CommunicationParameters=NoInAddrAny,NoCtldInAddrAny
SlurmUser={user}
SlurmdUser={user}
AuthType=auth/munge
CredType=cred/munge
AuthInfo=socket={socket}
SlurmctldPidFile={base}/slurmctld.pid
SlurmdPidFile={base}/slurmd.pid
StateSaveLocation={base}/state
SlurmdSpoolDir={base}/spool
SlurmctldLogFile={base}/slurmctld.log
SlurmdLogFile={base}/slurmd.log
ProctrackType=proctrack/linuxproc
TaskPlugin=task/none
JobAcctGatherType=jobacct_gather/none
MpiDefault=none
SwitchType=switch/none
AccountingStorageType=accounting_storage/none
JobCompType=jobcomp/filetxt
JobCompLoc={base}/completed.txt
# Without a data base a finished job must stay visible until the workflow asks for it.
MinJobAge=300
SchedulerType=sched/backfill
SchedulerParameters=batch_sched_delay=0,sched_interval=1,bf_interval=1,sched_min_interval=1000
# What can never run is refused at once instead of waiting for ever.
EnforcePartLimits=ALL
SelectType=select/cons_tres
SelectTypeParameters=CR_Core_Memory
SlurmdParameters=config_overrides
ReturnToService=2
KillWait=5
NodeName={host} NodeAddr=127.0.0.1 NodeHostname={host} CPUs={cpus} RealMemory={memory_mb} State=UNKNOWN
PartitionName=test Nodes=ALL Default=YES MaxTime=120 State=UP
"""


class SingleNode:
    """A running cluster; `environment` holds what a process needs to talk to it."""

    def __init__(self, base: Path, *, cpus: int = 3) -> None:
        self.base = base
        self.cpus = cpus
        self.daemons: list[subprocess.Popen] = []
        self.environment = {**os.environ, "SLURM_CONF": str(base / "slurm.conf")}
        self.environment["PATH"] = f"{base / 'bin'}:{os.environ['PATH']}:/usr/sbin:/sbin"

    def __enter__(self) -> "SingleNode":
        """Write the settings, start the daemons, wait until the node takes jobs."""
        try:
            self._write_files()
            self._start()
        except BaseException:
            self.__exit__()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        """End the jobs, then the daemons: node, controller, munge."""
        if len(self.daemons) == 3:
            with contextlib.suppress(subprocess.TimeoutExpired):
                self.call("scancel", "--partition=test", timeout=10, check=False)
                end = time.monotonic() + 10
                while self.call("squeue", "--noheader", check=False).strip() and time.monotonic() < end:
                    time.sleep(0.2)
        for daemon in reversed(self.daemons):
            daemon.terminate()
            try:
                daemon.wait(timeout=15)
            except subprocess.TimeoutExpired:
                daemon.kill()
                daemon.wait()

    def call(self, *command: str, timeout: float = 30, check: bool = True) -> str:
        """What a Slurm command prints."""
        done = subprocess.run(
            command, env=self.environment, capture_output=True, text=True, timeout=timeout, check=check
        )
        return done.stdout

    def completed(self) -> list[dict[str, str]]:
        """The finished submissions as Slurm notes them: fields by name."""
        path = self.base / "completed.txt"
        lines = path.read_text().splitlines() if path.exists() else []
        return [dict(word.split("=", 1) for word in line.split() if "=" in word) for line in lines]

    def _write_files(self) -> None:
        for name in ("state", "spool", "bin"):
            (self.base / name).mkdir(parents=True)
        self.base.chmod(0o755)
        key = self.base / "munge.key"
        key.touch(0o600)
        key.write_bytes(secrets.token_bytes(1024))
        pages = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
        settings = SETTINGS.format(
            base=self.base,
            host=socket.gethostname().split(".")[0],
            user=subprocess.run(["id", "-un"], check=True, capture_output=True, text=True).stdout.strip(),
            socket=self.base / "munge.socket",
            controller_port=_free_port(),
            node_port=_free_port(),
            cpus=self.cpus,
            memory_mb=int(0.9 * pages / 2**20),
        )
        (self.base / "slurm.conf").write_text(settings)
        # The executor drops SLURM_CONF before it starts a job's step, so that srun looks in the system's own place.
        real = shutil.which("srun", path=self.environment["PATH"])
        wrapper = self.base / "bin" / "srun"
        wrapper.write_text(f'#!/bin/sh\nSLURM_CONF={self.base / "slurm.conf"} exec {real} "$@"\n')
        wrapper.chmod(0o755)

    def _start(self) -> None:
        munge = [f"--key-file={self.base / 'munge.key'}", f"--socket={self.base / 'munge.socket'}"]
        munge += [f"--{name}-file={self.base / f'munged.{name}'}" for name in ("pid", "log", "seed")]
        self._daemon("munged", "--foreground", *munge)
        self._wait_for((self.base / "munge.socket").exists, "munged")
        self._daemon("slurmctld", "-D", "-c")
        self._daemon("slurmd", "-D", "-N", socket.gethostname().split(".")[0])
        self._wait_for(lambda: self.call("sinfo", "-h", "-o", "%T", check=False).strip() == "idle", "slurmctld")

    def _daemon(self, name: str, *arguments: str) -> None:
        path = shutil.which(name, path=self.environment["PATH"])
        if path is None:
            raise RuntimeError(f"{name} is not installed")
        with (self.base / f"{name}.out").open("wb") as out:
            daemon = subprocess.Popen(
                [path, *arguments], env=self.environment, stdout=out, stderr=subprocess.STDOUT, start_new_session=True
            )
        self.daemons.append(daemon)

    def _wait_for(self, ready, name: str) -> None:
        end = time.monotonic() + 30
        while not ready():
            if time.monotonic() > end or any(daemon.poll() is not None for daemon in self.daemons):
                said = "\n".join(path.read_text(errors="replace")[-2000:] for path in self.base.glob("*.out"))
                raise RuntimeError(f"{name} did not come up:\n{said}")
            time.sleep(0.1)


def _free_port() -> int:
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        return listener.getsockname()[1]
