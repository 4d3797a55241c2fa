"""A real SSH server and a real Slurm of one node, on this machine, under a folder of their own.

Nothing outside that folder is written but /run/sshd, everything listens on 127.0.0.1 only, and no
service manager is needed.
"""

from __future__ import annotations

import os
import shutil
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path

SBIN = ("/usr/local/sbin", "/usr/sbin", "/sbin")
NODE = "n1"


class Unavailable(Exception):
    """What is missing on this machine."""


def program(name: str) -> str:
    """Full path of a program. Raises Unavailable."""
    path = shutil.which(name, path=os.pathsep.join([os.environ["PATH"], *SBIN]))
    if path is None:
        raise Unavailable(f"there is no {name}")
    return path


def free_port() -> int:
    with socket.socket() as listener:
        listener.bind(("127.0.0.1", 0))
        return int(listener.getsockname()[1])


def wait_until(true: Callable[[], bool], seconds: float, what: str) -> None:
    end = time.monotonic() + seconds
    while not true():
        if time.monotonic() > end:
            raise AssertionError(f"after {seconds:.0f} s still not: {what}")
        time.sleep(0.1)


def quietly(words: Sequence[str], **more: object) -> subprocess.CompletedProcess[str]:
    return subprocess.run(  # type: ignore[call-overload, no-any-return]
        words, capture_output=True, text=True, check=False, stdin=subprocess.DEVNULL, **more
    )


def with_own_path() -> dict[str, str]:
    """An environment in which `stepwarden` and this Python come first."""
    here = str(Path(sys.executable).parent)
    return {**os.environ, "PATH": os.pathsep.join([here, os.environ["PATH"]])}


class Sshd:
    """An SSH server for the user who runs the tests, with throw-away keys.

    `ssh` gives the words that run a command through it.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        server, keygen = program("sshd"), program("ssh-keygen")
        program("ssh")
        port = free_port()
        for key in ("host", "user"):
            made = quietly([keygen, "-q", "-t", "ed25519", "-N", "", "-f", str(folder / key)])
            assert made.returncode == 0, made.stderr
        shutil.copy(folder / "user.pub", folder / "authorized")
        home = folder / "home"
        home.mkdir()
        if os.getuid() == 0:
            Path("/run/sshd").mkdir(exist_ok=True)
        path = with_own_path()["PATH"]
        (folder / "sshd_config").write_text(
            f"ListenAddress 127.0.0.1\nPort {port}\nHostKey {folder}/host\n"
            f"AuthorizedKeysFile {folder}/authorized\nPidFile none\nStrictModes no\nUsePAM no\n"
            "PasswordAuthentication no\nKbdInteractiveAuthentication no\n"
            f"PermitRootLogin prohibit-password\nSetEnv HOME={home} PATH={path}\n"
        )
        (folder / "ssh_config").write_text(
            f"Host far\n HostName 127.0.0.1\n Port {port}\n IdentityFile {folder}/user\n"
            f" IdentitiesOnly yes\n IdentityAgent none\n UserKnownHostsFile {folder}/known\n"
            " StrictHostKeyChecking accept-new\n BatchMode yes\n LogLevel ERROR\n"
        )
        with (folder / "sshd.log").open("wb") as log:
            self._server = subprocess.Popen(
                [server, "-D", "-e", "-f", str(folder / "sshd_config")],
                stdin=subprocess.DEVNULL,
                stderr=log,
            )
        wait_until(lambda: quietly(self.ssh("true")).returncode == 0, 20, "sshd answers")

    def ssh(self, *words: str, tty: bool = False) -> list[str]:
        options = ["-tt"] if tty else ["-T"]
        return ["ssh", "-F", str(self.folder / "ssh_config"), *options, "far", *words]

    def close(self) -> None:
        self._server.terminate()
        self._server.wait(10)


class Slurm:
    """A controller and one node that claims 16 processors."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._daemons: list[subprocess.Popen[bytes]] = []
        folder.chmod(0o755)  # munge wants everybody to reach its socket
        munged, controller, node = (program(n) for n in ("munged", "slurmctld", "slurmd"))
        for name in ("munge", "state", "spool"):
            (folder / name).mkdir()
        self._configure()
        self.environment = {**with_own_path(), "SLURM_CONF": str(folder / "slurm.conf")}
        # Slurm asks what the machine's own name stands for; that may be another address.
        local = [] if self._host_is_local() else ["unshare", "--uts", "sh", "-c"]
        self._munge(munged)
        for words in ([controller, "-D"], [node, "-D", "-N", NODE]):
            if local:
                words = [*local, 'hostname localhost && exec "$@"', "sh", *words]
            self._start(words, Path(words[-2]).name + ".log")
        wait_until(lambda: self.ask("sinfo", "-h", "-o", "%T").strip() == "idle", 40, "node idle")

    @staticmethod
    def _host_is_local() -> bool:
        try:
            return socket.gethostbyname(socket.gethostname()) == "127.0.0.1"
        except OSError:
            return False

    def _configure(self) -> None:
        me = quietly(["id", "-un"]).stdout.strip()
        host = socket.gethostname() if self._host_is_local() else "localhost"
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
            "KillWait": 5,
        }
        text = "".join(f"{key}={value}\n" for key, value in lines.items())
        text += (
            f"NodeName={NODE} NodeHostname={host} NodeAddr=127.0.0.1 Port={free_port()} "
            "CPUs=16 RealMemory=500 State=UNKNOWN\n"
            "PartitionName=main Nodes=ALL Default=YES MaxTime=INFINITE State=UP\n"
        )
        (self.folder / "slurm.conf").write_text(text)

    def _munge(self, munged: str) -> None:
        key = self.folder / "munge" / "key"
        key.write_bytes(os.urandom(1024))
        key.chmod(0o600)
        words = [munged, "--foreground"]
        for option, name in (
            ("key-file", "key"),
            ("socket", "socket"),
            ("pid-file", "pid"),
            ("log-file", "log"),
            ("seed-file", "seed"),
        ):
            words.append(f"--{option}={self.folder / 'munge' / name}")
        self._start(words, "munged.log")
        wait_until((self.folder / "munge" / "socket").exists, 10, "munged listens")

    def _start(self, words: list[str], log: str) -> None:
        with (self.folder / log).open("wb") as out:
            self._daemons.append(
                subprocess.Popen(
                    words, env=self.environment, stdin=subprocess.DEVNULL, stdout=out, stderr=out
                )
            )

    def ask(self, *words: str, cwd: Path | None = None) -> str:
        """What one of Slurm's commands prints ("" if it fails)."""
        return quietly(words, env=self.environment, cwd=cwd).stdout

    def submit(self, script: Path, *options: str) -> str:
        """Number of the job that `script` becomes, run in its own folder."""
        job = self.ask("sbatch", "--parsable", *options, script.name, cwd=script.parent).strip()
        assert job.isdigit(), quietly(["sbatch", script.name], env=self.environment).stderr
        return job

    def jobs(self) -> list[str]:
        """Numbers of jobs that wait or run."""
        return self.ask("squeue", "-h", "-o", "%A").split()

    def state(self, job: str) -> str:
        shown = self.ask("scontrol", "-o", "show", "job", job)
        return next((w[9:] for w in shown.split() if w.startswith("JobState=")), "")

    def wait_for_end(self, seconds: float = 60.0) -> None:
        wait_until(lambda: not self.jobs(), seconds, "queue empty")

    def close(self) -> None:
        if jobs := self.jobs():
            self.ask("scancel", *jobs)
            self.wait_for_end(20)
        for daemon in reversed(self._daemons):
            daemon.terminate()
        for daemon in self._daemons:
            daemon.wait(20)


class BlindMount:
    """A folder seen through a file system in user space: what is written on its far side raises no
    file event on the near one, as on a network mount."""

    def __init__(self, folder: Path) -> None:
        self.far, self.near = folder / "far", folder / "near"
        self._unmount = program("umount")
        words = [program("bindfs"), "-f", str(self.far), str(self.near)]
        if not Path("/dev/fuse").exists():
            raise Unavailable("there is no /dev/fuse")
        for side in (self.far, self.near):
            side.mkdir()
        self._server = subprocess.Popen(words, stdin=subprocess.DEVNULL)
        wait_until(lambda: os.path.ismount(self.near), 10, "mounted")

    def freeze(self) -> None:
        """From now on every access hangs."""
        self._server.send_signal(signal.SIGSTOP)

    def thaw(self) -> None:
        self._server.send_signal(signal.SIGCONT)

    def close(self) -> None:
        self.thaw()
        quietly([self._unmount, "-l", str(self.near)])
        self._server.terminate()
        self._server.wait(10)
