"""The reading process as a process: hung, killed, replaced, and beside a writer at work."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import textwrap
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import h5py
import numpy as np
import pytest

import probes
from monitor import childkeeper
from monitor.childkeeper import ChildKeeper
from probes.errors import ChildError, ChildHung
from probes.spec import SketchSpec, SnapshotSpec, WatchSpec
from probes.wire import (
    Arrival,
    Done,
    Failed,
    FileId,
    Look,
    Looked,
    ReadSnapshot,
    Sketched,
    StopFile,
)

RNG = np.random.default_rng(77391)
PATIENCE = 60.0


@pytest.fixture
def keep(tmp_path: Path) -> Iterator[Callable[..., ChildKeeper]]:
    made: list[ChildKeeper] = []

    def make(*pattern: str, known: tuple[str, ...] = (), **more: int) -> ChildKeeper:
        spec = SnapshotSpec(pattern=pattern)
        watch = WatchSpec(folder=str(tmp_path), snapshots=spec, sketch=SketchSpec())
        made.append(ChildKeeper(watch, known, **more))
        return made[-1]

    yield make
    for keeper in made:
        keeper.close()


def array(folder: Path, step: int) -> Path:
    path = folder / f"h_{step}.npy"
    np.save(path, RNG.normal(size=(12, 10)))
    os.utime(path, (1e9, 1e9))
    return path


def arrivals(keeper: ChildKeeper) -> tuple[Arrival, ...]:
    reply = keeper.ask(Look(), PATIENCE)
    assert isinstance(reply, Looked), reply
    return reply.arrivals


def pid(keeper: ChildKeeper) -> int:
    assert keeper._process is not None
    return keeper._process.pid


def gone(number: int) -> bool:
    try:
        os.kill(number, 0)
    except ProcessLookupError:
        return True
    return False


def until(what: Callable[[], bool]) -> None:
    deadline = time.monotonic() + PATIENCE
    while not what():
        assert time.monotonic() < deadline
        time.sleep(0.01)


def pipe_as_snapshot(folder: Path) -> Arrival:
    """A named pipe that nobody writes to: opening it for reading hangs, like a dead mount."""
    path = folder / "hanging.npy"
    os.mkfifo(path)
    found = path.stat()
    file = FileId(
        path=str(path), size=found.st_size, mtime_ns=found.st_mtime_ns, inode=found.st_ino
    )
    return Arrival(key="0" * 16, files=(file,), step=1)


def test_one_process_for_all_requests(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """Snapshots are found and read by one process, which ends with its keeper."""
    array(tmp_path, 1)
    keeper = keep("h_{step}.npy")
    (arrival,) = arrivals(keeper)
    first = pid(keeper)
    assert isinstance(keeper.ask(ReadSnapshot(arrival=arrival), PATIENCE), Sketched)
    assert pid(keeper) == first
    keeper.close()
    assert gone(first)


def test_failures_are_returned(keep: Callable[..., ChildKeeper]) -> None:
    """What the process declines comes back as a reply, and it lives on."""
    keeper = keep("h_{step}.npy")
    reply = keeper.ask(ReadSnapshot(arrival=Arrival(key="0" * 16, files=())), PATIENCE)
    assert isinstance(reply, Failed)
    assert not gone(pid(keeper))


def test_settled_keys_survive_a_kill(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """After kill -9 the next request is answered by a new process, which knows every settled key,
    those of the start and later ones."""
    for step in (1, 2, 3):
        array(tmp_path, step)
    first, second, third = arrivals(keep("h_{step}.npy"))
    keeper = keep("h_{step}.npy", known=(first.key,))
    assert arrivals(keeper) == (second, third)
    keeper.settled([second.key])
    assert arrivals(keeper) == (third,)
    killed = pid(keeper)
    os.kill(killed, signal.SIGKILL)
    until(lambda: keeper._process is not None and keeper._process.poll() is not None)
    assert arrivals(keeper) == (third,)
    assert pid(keeper) != killed


def test_killed_while_it_works(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """A process that dies over a request is told by its signal; the next request works."""
    keeper = keep("h_{step}.npy")
    arrivals(keeper)
    killer = subprocess.Popen(
        [sys.executable, "-c", f"import os, time; time.sleep(0.3); os.kill({pid(keeper)}, 9)"]
    )
    with pytest.raises(ChildError, match="SIGKILL"):
        keeper.ask(Look(wait_s=PATIENCE), PATIENCE)
    assert killer.wait(PATIENCE) == 0
    assert arrivals(keeper) == ()


def test_hanging_read_ends_itself(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """A read that hangs is ended by the process's own alarm, and the next request works."""
    array(tmp_path, 1)
    keeper = keep("h_{step}.npy")
    hanging = pipe_as_snapshot(tmp_path)
    arrivals(keeper)
    hung = pid(keeper)
    began = time.monotonic()
    with pytest.raises(ChildHung, match="took too long"):
        keeper.ask(ReadSnapshot(arrival=hanging), 0.5)
    assert time.monotonic() - began < 0.5 + childkeeper.GRACE
    assert gone(hung)
    assert len(arrivals(keeper)) == 1


def test_frozen_process_is_killed(
    keep: Callable[..., ChildKeeper], monkeypatch: pytest.MonkeyPatch
) -> None:
    """A process that cannot even end itself (here: stopped) is killed after the time limit."""
    monkeypatch.setattr(childkeeper, "GRACE", 0.2)
    keeper = keep("h_{step}.npy")
    arrivals(keeper)
    frozen = pid(keeper)
    os.kill(frozen, signal.SIGSTOP)
    with pytest.raises(ChildHung, match="no answer"):
        keeper.ask(Look(), 0.3)
    assert gone(frozen)
    assert arrivals(keeper) == ()


def test_whoever_waits_may_give_up(keep: Callable[..., ChildKeeper]) -> None:
    """What `meanwhile` raises ends the waiting long before the time limit, and the process that did
    not answer; the next request starts a new one."""

    class Enough(Exception):
        pass

    def enough() -> None:
        raise Enough

    keeper = keep("h_{step}.npy")
    arrivals(keeper)
    frozen = pid(keeper)
    os.kill(frozen, signal.SIGSTOP)
    keeper.meanwhile = enough
    with pytest.raises(Enough):
        keeper.ask(Look(), 10 * PATIENCE)
    assert gone(frozen)
    keeper.meanwhile = lambda: None
    assert arrivals(keeper) == ()


def test_unkillable_processes_are_abandoned_at_most_twice(
    keep: Callable[..., ChildKeeper], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Where processes hang in the kernel (here: kill does nothing), two are left behind; then the
    file system is said not to answer, and no further process is started."""
    monkeypatch.setattr(childkeeper, "GRACE", 0.1)
    monkeypatch.setattr(childkeeper, "KILL_SECONDS", 0.1)
    kill = subprocess.Popen.kill
    monkeypatch.setattr(subprocess.Popen, "kill", lambda self: None)
    keeper = keep("h_{step}.npy")
    left = []
    for _ in range(2):
        arrivals(keeper)
        left.append(keeper._process)
        os.kill(pid(keeper), signal.SIGSTOP)
        with pytest.raises(ChildError, match="no answer"):
            keeper.ask(Look(), 0.2)
    with pytest.raises(ChildError, match="file system not answering"):
        keeper.ask(Look(), PATIENCE)
    for process in left:
        assert process is not None
        kill(process)
        process.wait(PATIENCE)
    assert arrivals(keeper) == ()


def test_dies_with_its_parent(tmp_path: Path) -> None:
    """When guard is killed its reading process goes too, also while it hangs."""
    hanging = pipe_as_snapshot(tmp_path).files[0]
    (tmp_path / "parent.py").write_text(
        textwrap.dedent(f"""
            from monitor.childkeeper import ChildKeeper
            from probes.spec import SnapshotSpec, WatchSpec
            from probes.wire import Arrival, FileId, Look, ReadSnapshot
            spec = SnapshotSpec(pattern=("x",))
            keeper = ChildKeeper(WatchSpec(folder={str(tmp_path)!r}, snapshots=spec), ())
            keeper.ask(Look(), 60.0)
            print(keeper._process.pid, flush=True)
            file = FileId(path={hanging.path!r}, size={hanging.size},
                mtime_ns={hanging.mtime_ns}, inode={hanging.inode})
            keeper.ask(ReadSnapshot(arrival=Arrival(key="0", files=(file,))), 60.0)
        """)
    )
    parent = subprocess.Popen(
        [sys.executable, "-P", str(tmp_path / "parent.py")], stdout=subprocess.PIPE
    )
    assert parent.stdout is not None
    child = int(parent.stdout.readline())
    parent.kill()
    parent.wait()
    parent.stdout.close()
    until(lambda: gone(child))


def test_damaged_files_do_no_harm(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """HDF5 files with bytes overwritten at random give a reply or a dead process, never a wait;
    a sound file reads afterwards."""
    with h5py.File(tmp_path / "sound.h5", "w") as file:
        file["T"] = RNG.normal(size=(16, 16))
    sound = (tmp_path / "sound.h5").read_bytes()
    for n in range(12):
        damaged = bytearray(sound)
        for at in RNG.integers(8, len(sound), size=40):
            damaged[at] = RNG.integers(256)
        (tmp_path / f"s_{n}.h5").write_bytes(damaged)
        os.utime(tmp_path / f"s_{n}.h5", (1e9, 1e9))
    (tmp_path / "s_12.h5").write_bytes(sound)
    os.utime(tmp_path / "s_12.h5", (1e9, 1e9))
    keeper = keep("s_{step}.h5")
    *damaged_ones, last = arrivals(keeper)
    assert len(damaged_ones) == 12
    for arrival in damaged_ones:
        try:
            reply = keeper.ask(ReadSnapshot(arrival=arrival), 5.0)
        except ChildError:
            continue
        assert isinstance(reply, Sketched) or reply.kind in ("read", "refused"), reply  # type: ignore[union-attr]
    assert isinstance(keeper.ask(ReadSnapshot(arrival=last), PATIENCE), Sketched)


def test_memory_is_bounded(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """More memory than allowed is refused with a remedy, and the process lives on."""
    with h5py.File(tmp_path / "s_1.h5", "w") as file:
        data = file.create_dataset("T", (4096, 4096), "f8", chunks=(4096, 4096), compression="gzip")
        data[...] = 1.0
    os.utime(tmp_path / "s_1.h5", (1e9, 1e9))
    keeper = keep("s_{step}.h5", memory_mb=100)
    (arrival,) = arrivals(keeper)
    reply = keeper.ask(ReadSnapshot(arrival=arrival), PATIENCE)
    assert isinstance(reply, Failed), reply
    assert reply.kind != "internal"
    assert arrivals(keeper) == (arrival,)


def test_imports_are_the_parents_own(
    tmp_path: Path, keep: Callable[..., ChildKeeper], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The process runs the same package as its parent, from wherever that was imported, and
    nothing called like a module in the run's folder or beside the package."""
    for place in (tmp_path, tmp_path / "source"):
        place.mkdir(exist_ok=True)
        for name in ("numpy", "msgspec", "json", "monitor"):
            trap = f"open({str(tmp_path / 'imported')!r}, 'w')\nraise SystemExit(9)\n"
            (place / f"{name}.py").write_text(trap)
    ours = Path(probes.__file__).parent
    (tmp_path / "source" / "probes").symlink_to(ours)
    monkeypatch.setattr(probes, "__file__", str(tmp_path / "source" / "probes" / "__init__.py"))
    monkeypatch.chdir(tmp_path)
    array(tmp_path, 1)
    keeper = keep("h_{step}.npy")
    assert len(arrivals(keeper)) == 1
    assert not (tmp_path / "imported").exists()
    maps = Path(f"/proc/{pid(keeper)}/cwd").resolve()
    assert maps == Path("/")


def test_printing_does_not_disturb_the_protocol(
    tmp_path: Path, keep: Callable[..., ChildKeeper], capfd: pytest.CaptureFixture[str]
) -> None:
    """The process's standard output leads to its standard error, so that a library that prints
    cannot get into the replies."""
    keeper = keep("h_{step}.npy")
    arrivals(keeper)
    one, two = (os.readlink(f"/proc/{pid(keeper)}/fd/{n}") for n in (1, 2))
    assert one == two


def test_stop_file_through_the_process(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """An act is done once the reply is there."""
    path = tmp_path / "STOP"
    reply = keep("x").ask(StopFile(path=str(path), action="write", text="stop"), PATIENCE)
    assert reply == Done(exists=True)
    assert path.read_text() == "stop\n"


WRITER = """
import sys
import h5py
import numpy as np
path, count = sys.argv[1], int(sys.argv[2])
with h5py.File(path, "w") as file:
    file.create_dataset("T", (0, 24, 24), "f8", maxshape=(None, 24, 24), chunks=(1, 24, 24))
    file.create_dataset("step", (0,), maxshape=(None,), dtype="i8")
failed = 0
for n in range(count):
    try:
        file = h5py.File(path, "r+")
    except OSError as error:
        print(error)
        failed += 1
        continue
    with file:
        file["T"].resize(n + 1, axis=0)
        file["step"].resize(n + 1, axis=0)
        file["T"][n] = np.full((24, 24), float(n))
        file["step"][n] = n
sys.exit(1 if failed else 0)
"""


def test_a_writer_is_never_disturbed(tmp_path: Path, keep: Callable[..., ChildKeeper]) -> None:
    """A solver opens its growing file r+ 300 times while it is read: no open fails, every record
    arrives once, in order, and reads as it was written."""
    count = 300
    (tmp_path / "writer.py").write_text(WRITER)
    keeper = keep("run.h5")
    arrivals(keeper)
    environment = {k: v for k, v in os.environ.items() if k != "HDF5_USE_FILE_LOCKING"}
    writer = subprocess.Popen(
        [sys.executable, str(tmp_path / "writer.py"), str(tmp_path / "run.h5"), str(count)],
        stdout=subprocess.PIPE,
        env=environment,
    )
    steps: list[int | None] = []
    reads_beside = 0
    deadline = time.monotonic() + PATIENCE
    while len(steps) < count and time.monotonic() < deadline:
        reply = keeper.ask(Look(wait_s=0.05), PATIENCE)
        assert isinstance(reply, Looked)
        for arrival in reply.arrivals:
            read = keeper.ask(ReadSnapshot(arrival=arrival), PATIENCE)
            if isinstance(read, Failed):
                assert read.kind == "not-yet", read
                break
            assert isinstance(read, Sketched)
            (block,) = read.blocks
            assert (block.low, block.high) == (arrival.step, arrival.step)
            steps.append(arrival.step)
            keeper.settled([arrival.key])
            reads_beside += writer.poll() is None
    assert writer.stdout is not None
    said = writer.stdout.read().decode()
    writer.stdout.close()
    assert writer.wait(PATIENCE) == 0, said
    assert steps == list(range(count))
    assert reads_beside > 0
