"""A real Slurm of one node on the loopback interface, for tests and .ci/run: controller, node daemon and munge as children.

Needs the Debian packages slurmctld, slurmd, slurm-client and munge, and root. Everything lives in a folder of its own;
`SLURM_CONF` is all that clients need. Usage by hand: python tests/cluster/slurm_node.py FOLDER, then Ctrl-C.
"""

from __future__ import annotations

import os
import secrets
import shutil
import socket
import subprocess
import sys
import time
from pathlib import Path

PROGRAMS = ("munged", "slurmctld", "slurmd", "sbatch", "squeue", "scancel", "scontrol", "sinfo")
NEEDS = "Slurm on this machine: the Debian packages slurmctld, slurmd, slurm-client and munge, and root to start them"


def missing() -> str | None:
    """What stands in the way of starting a node, None when nothing does."""
    absent = [name for name in PROGRAMS if shutil.which(name, path=_path()) is None]
    if absent:
        return f"needs {NEEDS}; absent: {', '.join(absent)}"
    return None if os.geteuid() == 0 else f"needs {NEEDS}; this is not root"


def _path() -> str:
    return f"{os.environ.get('PATH', '')}:/usr/sbin:/sbin"


class SlurmNode:
    """A running single-node Slurm. Use as a context manager; `environment` is what clients run with."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder.absolute()
        self.processes: list[subprocess.Popen[bytes]] = []
        self.environment = {**os.environ, "PATH": _path(), "SLURM_CONF": str(self.folder / "slurm.conf")}

    def __enter__(self) -> SlurmNode:
        for name in ("state", "spool", "log", "munge"):
            (self.folder / name).mkdir(parents=True, exist_ok=True)
        (self.folder / "munge").chmod(0o700)
        key = self.folder / "munge" / "key"
        key.touch(mode=0o600)
        key.write_bytes(secrets.token_bytes(128))
        (self.folder / "log" / "jobs.log").touch()
        (self.folder / "slurm.conf").write_text(self._configuration())
        try:
            munge = self.folder / "munge"
            self._start("munged", "--foreground", "--force", f"--socket={munge}/socket", f"--key-file={key}",
                        f"--pid-file={munge}/pid", f"--log-file={munge}/log", f"--seed-file={munge}/seed")  # fmt: skip
            self._wait(lambda: (munge / "socket").is_socket(), "munged")
            self._start("slurmctld", "-D", "-c")
            self._start("slurmd", "-D")
            self._wait(self._idle, "slurmctld and slurmd")
        except BaseException:
            self.__exit__()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        if len(self.processes) > 1:
            self.call("scancel", "--user=root")
        for process in reversed(self.processes):
            process.terminate()
            try:
                process.wait(10)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()
        self.processes.clear()

    def call(self, *command: str) -> str:
        """Run a client; returns what it prints, "" where it fails."""
        try:
            done = subprocess.run(
                command, env=self.environment, capture_output=True, text=True, timeout=20, check=False
            )
        except subprocess.TimeoutExpired:
            return ""
        return done.stdout if done.returncode == 0 else ""

    def wait_until_empty(self, job: str, seconds: float = 120.0) -> None:
        """Wait until no task of a job waits or runs. Raises TimeoutError."""
        limit = time.monotonic() + seconds
        while time.monotonic() < limit:
            if not self.call("squeue", "-h", "-r", "-j", job, "-t", "PD,CF,R,CG", "-o", "%i").strip():
                return
            time.sleep(0.3)
        raise TimeoutError(f"job {job} did not end within {seconds:g} s")

    def _start(self, name: str, *arguments: str) -> None:
        program = shutil.which(name, path=_path())
        assert program is not None
        with (self.folder / "log" / f"{name}.out").open("wb") as log:
            self.processes.append(
                subprocess.Popen(
                    [program, *arguments],
                    env=self.environment,
                    stdin=subprocess.DEVNULL,
                    stdout=log,
                    stderr=log,
                    start_new_session=True,
                )
            )

    def _idle(self) -> bool:
        return self.call("sinfo", "-h", "-o", "%t").strip() == "idle"

    def _wait(self, ready, what: str, seconds: float = 30.0) -> None:  # type: ignore[no-untyped-def]
        limit = time.monotonic() + seconds
        while not ready():
            if time.monotonic() > limit or any(p.poll() is not None for p in self.processes):
                logs = {path.name: path.read_text(errors="replace")[-800:] for path in (self.folder / "log").iterdir()}
                raise RuntimeError(f"{what} did not start: {logs}")
            time.sleep(0.1)

    def _configuration(self) -> str:
        host = socket.gethostname().split(".")[0]
        controller, daemon, *client = _free_ports(22)
        memory = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") // 2**20
        return "\n".join(
            [
                "ClusterName=onenode",
                f"SlurmctldHost={host}(127.0.0.1)",
                "SlurmUser=root",
                "SlurmdUser=root",
                "AuthType=auth/munge",
                "CredType=cred/munge",
                f"AuthInfo=socket={self.folder}/munge/socket",
                "CommunicationParameters=NoCtldInAddrAny,NoInAddrAny",
                f"SlurmctldPort={controller}",
                f"SlurmdPort={daemon}",
                f"SrunPortRange={min(client)}-{max(client)}",
                f"StateSaveLocation={self.folder}/state",
                f"SlurmdSpoolDir={self.folder}/spool",
                f"SlurmctldPidFile={self.folder}/slurmctld.pid",
                f"SlurmdPidFile={self.folder}/slurmd.pid",
                "ProctrackType=proctrack/linuxproc",
                "TaskPlugin=task/none",
                "JobAcctGatherType=jobacct_gather/none",
                "AccountingStorageType=accounting_storage/none",
                "JobCompType=jobcomp/filetxt",
                f"JobCompLoc={self.folder}/log/jobs.log",
                "SelectType=select/cons_tres",
                "SelectTypeParameters=CR_Core",
                "MpiDefault=none",
                "ReturnToService=2",
                "SchedulerParameters=batch_sched_delay=0,sched_interval=1,bf_interval=1",
                "MinJobAge=3600",
                "KillWait=3",
                f"NodeName={host} NodeAddr=127.0.0.1 CPUs={os.cpu_count()} RealMemory={int(memory * 0.9)} State=UNKNOWN",
                f"PartitionName=main Nodes={host} Default=YES MaxTime=INFINITE State=UP",
                "",
            ]
        )


def _free_ports(number: int) -> list[int]:
    """Consecutive ports that nothing listens on at the moment."""
    for first in range(17000 + secrets.randbelow(20000), 60000, number):
        opened = []
        try:
            for port in range(first, first + number):
                opened.append(socket.socket())
                opened[-1].bind(("127.0.0.1", port))
            return list(range(first, first + number))
        except OSError:
            continue
        finally:
            for one in opened:
                one.close()
    raise RuntimeError("no free ports")


if __name__ == "__main__":
    why = missing()
    if why:
        sys.exit(why)
    with SlurmNode(Path(sys.argv[1])) as node:
        print(f"export SLURM_CONF={node.environment['SLURM_CONF']}", flush=True)
        try:
            while True:
                time.sleep(3600)
        except KeyboardInterrupt:
            pass
