"""The answers of the reading process, asked without a process in between."""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest

from probes import child as child_module
from probes.child import Child
from probes.fieldpass import FieldPass
from probes.spec import FieldSpec, SnapshotSpec, WatchSpec
from probes.wire import (
    Arrival,
    Configure,
    Crop,
    Done,
    Drop,
    Examine,
    Examined,
    Failed,
    FindCheckpoint,
    Found,
    Look,
    Looked,
    ReadSnapshot,
    Ready,
    Secure,
    Secured,
    Settled,
    Sketched,
    StopFile,
)

RNG = np.random.default_rng(590217)


def old(path: Path) -> Path:
    """As if it had been written long ago."""
    os.utime(path, (1e9, 1e9))
    return path


def array(path: Path, values: np.ndarray | None = None) -> Path:
    np.save(path, RNG.normal(size=(12, 10)) if values is None else values)
    return old(path)


@pytest.fixture
def child(tmp_path: Path) -> Callable[..., Child]:
    def make(
        *pattern: str, fields: dict[str, FieldSpec] | None = None, known: tuple[str, ...] = ()
    ) -> Child:
        made = Child()
        watch = WatchSpec(
            folder=str(tmp_path), snapshots=SnapshotSpec(pattern=pattern), fields=fields or {}
        )
        ready = made.answer(Configure(watch=watch, known=known))
        assert isinstance(ready, Ready)
        return made

    return make


def arrivals(child: Child) -> tuple[Arrival, ...]:
    looked = child.answer(Look())
    assert isinstance(looked, Looked)
    return looked.arrivals


def sketched(child: Child, arrival: Arrival, **more: object) -> Sketched:
    reply = child.answer(ReadSnapshot(arrival=arrival, **more))  # type: ignore[arg-type]
    assert isinstance(reply, Sketched), reply
    return reply


def failed(child: Child, arrival: Arrival) -> Failed:
    reply = child.answer(ReadSnapshot(arrival=arrival))
    assert isinstance(reply, Failed), reply
    return reply


def test_readers_are_told(tmp_path: Path) -> None:
    """Ready names the readers."""
    watch = WatchSpec(folder=str(tmp_path), snapshots=SnapshotSpec(pattern=("a",)))
    ready = Child().answer(Configure(watch=watch))
    assert isinstance(ready, Ready)
    assert {"npy", "npz", "hdf5", "netcdf3", "raw"} <= set(ready.readers)


def test_first_configure() -> None:
    """Without a configuration there is an answer, and it is a failure."""
    reply = Child().answer(Look())
    assert isinstance(reply, Failed)


def test_a_snapshot_is_read(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Extremes, total and a crop are those of NumPy; the field is called as its pattern says."""
    values = RNG.normal(size=(12, 10))
    array(tmp_path / "h_3.npy", values)
    one = child("h_{step}.npy")
    (arrival,) = arrivals(one)
    crop = Crop(field="h", part="", lo=(2, 3), hi=(5, 9))
    reply = sketched(one, arrival, crops=(crop,), new_segment=True)
    (block,) = reply.blocks
    assert (block.field, block.part, block.shape) == ("h", "", (12, 10))
    assert (block.low, block.high) == (values.min(), values.max())
    assert block.total == pytest.approx(values.sum(), rel=1e-12)
    assert reply.bytes_read == values.nbytes
    (cut,) = reply.crops
    assert cut.values is not None
    assert np.array_equal(cut.values.array(), values[2:5, 3:9])


def test_settled_and_known_keys(tmp_path: Path, child: Callable[..., Child]) -> None:
    """What is settled, now or in the log, is not offered again."""
    array(tmp_path / "h_3.npy")
    array(tmp_path / "h_4.npy")
    one = child("h_{step}.npy")
    first, second = arrivals(one)
    assert one.answer(Settled(keys=(first.key,))) == Done()
    assert arrivals(one) == (second,)
    assert arrivals(child("h_{step}.npy", known=(first.key, second.key))) == ()


def test_fields_of_several_files_and_parts(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Each file's array has the field and part that its name tells."""
    for field in "uv":
        for part in range(2):
            array(tmp_path / f"{field}_7_{part}.npy")
    one = child("{field}_{step}_{part}.npy")
    (arrival,) = arrivals(one)
    blocks = sketched(one, arrival).blocks
    assert sorted((b.field, b.part) for b in blocks) == [
        ("u", "0"),
        ("u", "1"),
        ("v", "0"),
        ("v", "1"),
    ]


@pytest.mark.parametrize(
    ("fields", "expected"),
    [
        ({}, ["T", "a/p", "b/p"]),
        ({"T": FieldSpec()}, ["T"]),
        ({"heat": FieldSpec(path="/T")}, ["heat"]),
        ({"a/p": FieldSpec()}, ["a/p"]),
        ({"left": FieldSpec(path="a/p"), "right": FieldSpec(path="b/p")}, ["left", "right"]),
    ],
)
def test_which_fields(
    tmp_path: Path,
    child: Callable[..., Child],
    fields: dict[str, FieldSpec],
    expected: list[str],
) -> None:
    """Chosen by path, whole name or its last component; equal last components keep their paths."""
    with h5py.File(tmp_path / "s_1.h5", "w") as file:
        for name in ("T", "a/p", "b/p"):
            file[name] = RNG.normal(size=(8, 8))
    old(tmp_path / "s_1.h5")
    one = child("s_{step}.h5", fields=fields)
    reply = sketched(one, arrivals(one)[0])
    assert sorted(b.field for b in reply.blocks) == expected


def test_a_field_that_is_not_there(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Refused with the names of those that are."""
    np.savez(tmp_path / "s_1.npz", u=np.ones((8, 8)), v=np.ones((8, 8)))
    old(tmp_path / "s_1.npz")
    one = child("s_{step}.npz", fields={"u": FieldSpec(), "w": FieldSpec()})
    reply = failed(one, arrivals(one)[0])
    assert (reply.kind, "'w'" in reply.what) == ("refused", True)
    assert "u" in reply.remedy


def test_incomplete_for_long(tmp_path: Path, child: Callable[..., Child]) -> None:
    """A cut file is "not yet" while somebody may be at it, and damage after a minute."""
    path = array(tmp_path / "h_3.npy")
    os.truncate(path, 200)
    os.utime(path, (time.time() - 30.0,) * 2)
    one = child("h_{step}.npy")
    assert failed(one, arrivals(one)[0]).kind == "not-yet"
    old(path)
    assert failed(one, arrivals(one)[0]).kind == "read"


@pytest.mark.parametrize("change", ["gone", "rewritten", "truncated"])
def test_not_what_was_listed(tmp_path: Path, child: Callable[..., Child], change: str) -> None:
    """A file that vanished or changed since it was listed is "not yet"."""
    path = array(tmp_path / "h_3.npy")
    one = child("h_{step}.npy")
    (arrival,) = arrivals(one)
    if change == "gone":
        path.unlink()
    elif change == "rewritten":
        np.save(path, RNG.normal(size=(12, 10)))
    else:
        os.truncate(path, 200)
    assert failed(one, arrival).kind == "not-yet"


def test_changed_while_it_was_read(
    tmp_path: Path, child: Callable[..., Child], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Numbers read from a file that changes meanwhile are thrown away."""
    path = array(tmp_path / "h_3.npy")
    one = child("h_{step}.npy")
    (arrival,) = arrivals(one)
    finish = FieldPass.finish

    def disturbed(self: object) -> object:
        array(path)
        os.utime(path)
        return finish(self)  # type: ignore[arg-type]

    monkeypatch.setattr(FieldPass, "finish", disturbed)
    assert failed(one, arrival).kind == "not-yet"


def test_growing_file(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Each record is an arrival with step and time from the file, and reads as written; a file
    begun again in the meantime is not taken for the old one."""
    path = tmp_path / "run.h5"
    values = RNG.normal(size=(3, 8, 8))

    def write(steps: list[int], when: float) -> None:
        with h5py.File(path, "w") as file:
            file.create_dataset("T", data=values, maxshape=(None, 8, 8))
            file.create_dataset("step", data=steps, maxshape=(None,))
            file.create_dataset("time", data=[0.5, 1.0, 1.5], maxshape=(None,))
        os.utime(path, (when, when))

    write([10, 20, 30], 1e9)
    one = child("run.h5")
    found = arrivals(one)
    assert [(a.step, a.time, a.growing) for a in found] == [
        (10, 0.5, True),
        (20, 1.0, True),
        (30, 1.5, True),
    ]
    block = sketched(one, found[1]).blocks[0]
    assert (block.low, block.high) == (values[1].min(), values[1].max())
    write([5, 6, 7], 1e9 + 60)
    assert failed(one, found[1]).kind == "not-yet"


def test_step_in_the_file_alone(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Overwritten files tell their step themselves."""
    np.savez(tmp_path / "latest.npz", u=np.ones((8, 8)), step=40, time=2.5)
    old(tmp_path / "latest.npz")
    one = child("latest.npz")
    (arrival,) = arrivals(one)
    assert (arrival.step, arrival.time) == (40, 2.5)


def test_trouble_is_told_by_kind(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Foreign content is refused, damage is a read error, no grid is refused; none is internal."""
    (tmp_path / "h_1.npy").write_bytes(b"plain text, no array" * 20)
    np.save(tmp_path / "h_2.npy", np.ones((2, 2, 2, 2, 2)))
    np.save(tmp_path / "h_3.npy", np.array([{}], dtype=object), allow_pickle=True)
    for n in (1, 2, 3):
        old(tmp_path / f"h_{n}.npy")
    one = child("h_{step}.npy")
    assert [failed(one, a).kind for a in arrivals(one)] == ["refused"] * 3


def test_a_fault_is_told_without_a_traceback(
    tmp_path: Path, child: Callable[..., Child], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Whatever goes wrong inside comes back as one line; lack of memory names the remedy."""
    array(tmp_path / "h_3.npy")
    one = child("h_{step}.npy")
    (arrival,) = arrivals(one)

    def fault(*_: object) -> object:
        raise ZeroDivisionError("a fault")

    monkeypatch.setattr(child_module, "open_snapshot", fault)
    assert failed(one, arrival) == Failed(kind="internal", what="ZeroDivisionError: a fault")

    def greedy(*_: object) -> object:
        raise MemoryError

    monkeypatch.setattr(child_module, "open_snapshot", greedy)
    reply = failed(one, arrival)
    assert (reply.kind, "budget_mb" in reply.remedy) == ("refused", True)


def find(child: Child, *pattern: str, companions: tuple[str, ...] = ()) -> list[list[str]]:
    reply = child.answer(FindCheckpoint(pattern=pattern, companions=companions))
    assert isinstance(reply, Found), reply
    return [[Path(f.path).name for f in a.files] for a in reply.checkpoints]


def test_checkpoints_of_any_format(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Found by name, newest last, with companions: those of the same step, and those of all. One
    whose companion has not come is left out, and so is one still being written."""
    for name in ("rst_9.dat", "rst_10.dat", "rst_11.dat", "rst_9.aux", "rst_10.aux", "mesh.bin"):
        (tmp_path / name).write_bytes(b"opaque")
        old(tmp_path / name)
    (tmp_path / "rst_12.dat").write_bytes(b"young")
    future = time.time() + 1000.0
    os.utime(tmp_path / "rst_12.dat", (future, future))
    one = child("h_{step}.npy")
    assert find(one, "rst_{step}.dat") == [["rst_9.dat"], ["rst_10.dat"], ["rst_11.dat"]]
    assert find(one, "rst_{step}.dat", companions=("rst_{step}.aux", "mesh.bin")) == [
        ["rst_9.dat", "rst_9.aux", "mesh.bin"],
        ["rst_10.dat", "rst_10.aux", "mesh.bin"],
    ]


def test_alternating_checkpoints(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Without steps in names they come in the order of writing; those that say their step, by
    it."""
    for n, name in enumerate(("b.rst", "a.rst")):
        (tmp_path / name).write_bytes(b"opaque")
        os.utime(tmp_path / name, (1e9 + n, 1e9 + n))
    for step, name in ((20, "a.npz"), (10, "b.npz")):
        np.savez(tmp_path / name, u=np.ones((8, 8)), step=step)
        old(tmp_path / name)
    one = child("h_{step}.npy")
    assert find(one, "?.rst") == [["b.rst"], ["a.rst"]]
    assert find(one, "?.npz") == [["b.npz"], ["a.npz"]]


def test_secure_drop_and_stop_file(tmp_path: Path, child: Callable[..., Child]) -> None:
    """The acts are passed on, and their failures come back as replies."""
    array(tmp_path / "h_3.npy")
    one = child("h_{step}.npy")
    (arrival,) = arrivals(one)
    pin = str(tmp_path / "pins" / "p")
    assert isinstance(one.answer(Secure(files=arrival.files, folder=pin)), Secured)
    again = one.answer(Secure(files=arrival.files, folder=pin))
    assert isinstance(again, Failed)
    assert again.kind == "refused"
    assert one.answer(Drop(folder=pin)) == Done(detail="removed")
    stop = str(tmp_path / "STOP")
    assert one.answer(StopFile(path=stop, action="create")) == Done(exists=True)


def test_examine(tmp_path: Path, child: Callable[..., Child]) -> None:
    """Format, fields, shapes and clock of one file."""
    np.savez(tmp_path / "s.npz", u=np.ones((4, 6), dtype=np.float32), step=12, time=0.5)
    reply = child("x").answer(Examine(path=str(tmp_path / "s.npz")))
    assert isinstance(reply, Examined)
    assert (reply.format, reply.fields) == ("npz", (("u", (4, 6), "<f4"),))
    assert (reply.steps, reply.times) == ((12,), (0.5,))
