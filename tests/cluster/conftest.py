"""The services are started once. Where they cannot be, the tests fail: who asks for them by
`-m cluster` wants them run. Only a kernel that forbids the blind mount is a reason to skip."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.cluster.services.blindmount import BlindMount, Forbidden
from tests.cluster.services.slurm import Slurm
from tests.cluster.services.sshd import Sshd


@pytest.fixture(scope="session")
def sshd() -> Iterator[Sshd]:
    # Sockets and keys want a short path that others cannot write to.
    with tempfile.TemporaryDirectory(prefix="sshd") as folder:
        server = Sshd(Path(folder))
        yield server
        server.close()


@pytest.fixture(scope="session")
def cluster() -> Iterator[Slurm]:
    with tempfile.TemporaryDirectory(prefix="slurm") as folder:
        started = Slurm(Path(folder))
        yield started
        started.close()


@pytest.fixture
def slurm(cluster: Slurm) -> Iterator[Slurm]:
    """The same Slurm for every test, with an empty queue."""
    yield cluster
    cluster.clear()


@pytest.fixture
def mount(tmp_path: Path) -> Iterator[BlindMount]:
    folder = tmp_path / "fs"
    folder.mkdir()
    try:
        mounted = BlindMount(folder)
    except Forbidden as error:
        pytest.skip(f"the kernel forbids file systems in user space: {error}")
    yield mounted
    mounted.close()
