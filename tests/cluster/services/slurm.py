"""A Slurm of one node, with the controller beside it."""

from __future__ import annotations

import os
import socket
from pathlib import Path

from tests.cluster.services.processes import (
    Daemons,
    free_port,
    program,
    quietly,
    wait_until,
    with_own_path,
)

NODE = "n1"


class Slurm:
    """A controller and one node that claims 16 processors."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        folder.chmod(0o755)  # munge wants everybody to reach its socket
        munged, controller, node = (program(n) for n in ("munged", "slurmctld", "slurmd"))
        for name in ("munge", "state", "spool"):
            (folder / name).mkdir()
        self._configure()
        self.environment = {**with_own_path(), "SLURM_CONF": str(folder / "slurm.conf")}
        self._daemons = Daemons(folder, self.environment)
        try:
            self._munge(munged)
            self._daemons.start("slurmctld", _as_local([controller, "-D"]))
            self._daemons.start("slurmd", _as_local([node, "-D", "-N", NODE]))
            wait_until(
                lambda: self.ask("sinfo", "-h", "-o", "%T").strip() == "idle", 40, "node idle"
            )
        except BaseException:
            self._daemons.close()
            raise

    def _configure(self) -> None:
        me = quietly(["id", "-un"]).stdout.strip()
        host = socket.gethostname() if _host_is_local() else "localhost"
        lines = {
            "ClusterName": "skerrow",
            "SlurmctldHost": f"{host}(127.0.0.1)",
            "SlurmctldPort": free_port(),
            "SlurmUser": me,
            "SlurmdUser": me,
            "AuthType": "auth/munge",
            # A requeued job starts only so many seconds later (default 120).
            "AuthInfo": f"socket={self.folder}/munge/socket,cred_expire=5",
            "CommunicationParameters": "NoInAddrAny,NoCtldInAddrAny",
            "StateSaveLocation": self.folder / "state",
            "SlurmdSpoolDir": self.folder / "spool",
            "SlurmctldPidFile": self.folder / "slurmctld.pid",
            "SlurmdPidFile": self.folder / "slurmd.pid",
            "ProctrackType": "proctrack/linuxproc",
            "TaskPlugin": "task/none",
            "JobAcctGatherType": "jobacct_gather/none",
            "AccountingStorageType": "accounting_storage/none",
            "MpiDefault": "none",
            "SelectType": "select/cons_tres",
            "SelectTypeParameters": "CR_Core",
            "SchedulerParameters": "batch_sched_delay=0,sched_min_interval=0,sched_interval=1",
            "SlurmdParameters": "config_overrides",
            "ReturnToService": 2,
            "KillWait": 10,
        }
        text = "".join(f"{key}={value}\n" for key, value in lines.items())
        text += (
            f"NodeName={NODE} NodeHostname={host} NodeAddr=127.0.0.1 Port={free_port()} "
            "CPUs=16 RealMemory=500 State=UNKNOWN\n"
            "PartitionName=main Nodes=ALL Default=YES MaxTime=INFINITE State=UP\n"
        )
        (self.folder / "slurm.conf").write_text(text)

    def _munge(self, munged: str) -> None:
        place = self.folder / "munge"
        key = place / "key"
        key.write_bytes(os.urandom(1024))
        key.chmod(0o600)
        files = {"key": "key", "socket": "socket", "pid": "pid", "log": "log", "seed": "seed"}
        options = [
            f"--{kind}={place / name}" if kind == "socket" else f"--{kind}-file={place / name}"
            for kind, name in files.items()
        ]
        self._daemons.start("munged", [munged, "--foreground", *options])
        wait_until((place / "socket").exists, 10, "munged listens")

    def ask(self, *words: str, cwd: Path | None = None) -> str:
        """What one of Slurm's commands prints ("" if it fails)."""
        return quietly(words, self.environment, cwd).stdout

    def submit(self, script: Path, *options: str) -> str:
        """Number of the job that `script` becomes, run in its own folder."""
        words = ["sbatch", "--parsable", *options, script.name]
        done = quietly(words, self.environment, script.parent)
        assert done.stdout.strip().isdigit(), done.stderr
        return done.stdout.strip()

    def jobs(self) -> list[str]:
        """Numbers of jobs that wait, run or are just ending."""
        return self.ask("squeue", "-h", "-o", "%A").split()

    def state(self, job: str) -> str:
        """As `scontrol` names it: RUNNING, COMPLETED, CANCELLED, TIMEOUT ..."""
        shown = self.ask("scontrol", "-o", "show", "job", job)
        return next((w[9:] for w in shown.split() if w.startswith("JobState=")), "")

    def wait_for_end(self, seconds: float = 60.0) -> None:
        wait_until(lambda: not self.jobs(), seconds, "queue empty")

    def clear(self) -> None:
        """Cancel whatever is left, so that one test's jobs do not hold up the next one's."""
        if jobs := self.jobs():
            self.ask("scancel", *jobs)
            self.wait_for_end(30)

    def close(self) -> None:
        try:
            self.clear()
        finally:
            self._daemons.close()


def _host_is_local() -> bool:
    try:
        return socket.gethostbyname(socket.gethostname()) == "127.0.0.1"
    except OSError:
        return False


def _as_local(words: list[str]) -> list[str]:
    """Slurm asks what the machine's own name stands for. Where that is another address, the command
    sees a machine that is called localhost."""
    if _host_is_local():
        return words
    return ["unshare", "--uts", "sh", "-c", 'hostname localhost && exec "$@"', "sh", *words]
