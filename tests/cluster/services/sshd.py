"""An SSH server for the user who runs the tests, with throw-away keys."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

from tests.cluster.services.processes import (
    Daemons,
    free_port,
    program,
    quietly,
    wait_until,
    with_own_path,
)


class Sshd:
    """`ssh` gives the words that run a command through it."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        server, keygen, self._client = (program(n) for n in ("sshd", "ssh-keygen", "ssh"))
        for key in ("host", "user"):
            made = quietly([keygen, "-q", "-t", "ed25519", "-N", "", "-f", str(folder / key)])
            assert made.returncode == 0, made.stderr
        shutil.copy(folder / "user.pub", folder / "authorized")
        (folder / "home").mkdir()
        if os.getuid() == 0:
            Path("/run/sshd").mkdir(exist_ok=True)
        self._configure(free_port())
        self._daemons = Daemons(folder)
        try:
            self._daemons.start("sshd", [server, "-D", "-e", "-f", str(folder / "sshd_config")])
            wait_until(lambda: quietly(self.ssh("true")).returncode == 0, 20, "sshd answers")
        except BaseException:
            self.close()
            raise

    def _configure(self, port: int) -> None:
        folder, path = self.folder, with_own_path()["PATH"]
        (folder / "sshd_config").write_text(
            f"ListenAddress 127.0.0.1\nPort {port}\nHostKey {folder}/host\n"
            f"AuthorizedKeysFile {folder}/authorized\nPidFile none\nStrictModes no\nUsePAM no\n"
            "PasswordAuthentication no\nKbdInteractiveAuthentication no\n"
            f"PermitRootLogin prohibit-password\nSetEnv HOME={folder}/home PATH={path}\n"
        )
        (folder / "ssh_config").write_text(
            f"Host far\n HostName 127.0.0.1\n Port {port}\n IdentityFile {folder}/user\n"
            f" IdentitiesOnly yes\n IdentityAgent none\n UserKnownHostsFile {folder}/known\n"
            " StrictHostKeyChecking accept-new\n BatchMode yes\n LogLevel ERROR\n"
        )

    def ssh(self, *words: str, tty: bool = False) -> list[str]:
        options = ["-tt"] if tty else ["-T"]
        return [self._client, "-F", str(self.folder / "ssh_config"), *options, "far", *words]

    def close(self) -> None:
        self._daemons.close()
