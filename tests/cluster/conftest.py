"""The services are started once. Where they cannot be, the tests fail: who asks for them by
`-m cluster` wants them run."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.cluster.services import Slurm, Sshd


@pytest.fixture(scope="session")
def sshd() -> Iterator[Sshd]:
    # Sockets and keys want a short path that others cannot write to.
    with tempfile.TemporaryDirectory(prefix="sshd") as folder:
        server = Sshd(Path(folder))
        yield server
        server.close()


@pytest.fixture(scope="session")
def slurm() -> Iterator[Slurm]:
    with tempfile.TemporaryDirectory(prefix="slurm") as folder:
        cluster = Slurm(Path(folder))
        yield cluster
        cluster.close()
