"""What `scout` makes of a folder; a scripted reading process answers for the files."""

from __future__ import annotations

import os
import tomllib
from collections.abc import Callable
from itertools import product
from pathlib import Path

import numpy as np
import pytest

from monitor.config import load, watch_spec
from monitor.proposal import describe, propose
from monitor.scout import MOST_EXAMINED, scout
from probes.child import Child
from probes.errors import ArrivalError
from probes.spec import SnapshotSpec, WatchSpec
from probes.wire import (
    Configure,
    Examine,
    Examined,
    Failed,
    Look,
    Looked,
    ReadSnapshot,
    Reply,
    Request,
    Sketched,
)


def fill(folder: Path, names: list[str], spacing: float = 2.0) -> None:
    """Empty files, `spacing` seconds apart."""
    for number, name in enumerate(names):
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.touch()
        os.utime(path, (1000.0 + spacing * number, 1000.0 + spacing * number))


def examined(format_: str, *fields: tuple, records: int = 1, growing: bool = False) -> Examined:
    return Examined(
        format=format_,
        fields=fields,
        records=records,
        growing=growing,
        steps=(None,) * records,
        times=(None,) * records,
    )


def answering(by_suffix: dict[str, Examined]) -> Callable[[Request], Reply]:
    def ask(request: Request) -> Reply:
        assert isinstance(request, Examine)
        known = by_suffix.get(Path(request.path).suffix)
        return known or Failed(kind="read", what="no reader knows this format")

    return ask


NPY = answering({".npy": examined("npy", ("T", (48, 32), "<f8"))})


def test_numbered_files_are_one_series(tmp_path: Path) -> None:
    """Ten files every 25 steps, two seconds apart: pattern, steps and cadence are found."""
    fill(tmp_path, [f"out/T_{s:05d}.npy" for s in range(0, 250, 25)])
    scouted = scout(tmp_path, NPY)
    sight = scouted.snapshots
    assert sight is not None
    assert sight.group.pattern == "out/T_{step}.npy"
    assert sight.cadence == pytest.approx(2.0)
    told = describe(scouted)
    for words in ("10 snapshot(s)", "steps 0 to 225", "every 25", "T: 48 x 32 cells, <f8"):
        assert words in told


def test_one_file_per_field_is_put_together(tmp_path: Path) -> None:
    """h, u and v of the same steps become {field}, each with its own description."""
    fill(tmp_path, [f"{f}_{s}.npy" for s, f in product((10, 20, 30), "huv")])
    sight = scout(tmp_path, NPY).snapshots
    assert sight is not None
    assert sight.group.pattern == "{field}_{step}.npy"
    assert sight.contents is not None
    assert [name for name, _, _ in sight.contents.fields] == ["h", "u", "v"]


def test_files_that_are_not_snapshots_are_left_out(tmp_path: Path) -> None:
    """Unfinished files, dot-files, logs, our own pins and the settings are nobody's snapshots."""
    names = ["T_1.npy", "T_2.npy", "T_3.npy.tmp", ".nfs0001", "run.log", "growth.jsonl"]
    fill(tmp_path, [*names, "pins/p1/T_1.npy", "stepwarden.toml"])
    scouted = scout(tmp_path, NPY)
    assert [s.group.names for s in scouted.sights] == [("T_1.npy", "T_2.npy")]


def test_restart_files_come_after_snapshots(tmp_path: Path) -> None:
    """A pattern that is called restart is what the solver restarts from, however many there are."""
    fill(tmp_path, ["h_1.npy", "h_2.npy", "restart/s_1.h5", "restart/s_2.h5", "restart/s_3.h5"])
    reply = examined("hdf5", ("/state/h", (48, 32), "<f8"))
    scouted = scout(tmp_path, answering({".npy": NPY(Examine(path="a.npy")), ".h5": reply}))
    assert scouted.snapshots is not None
    assert scouted.snapshots.group.pattern == "h_{step}.npy"
    assert scouted.checkpoints is not None
    assert "restart/s_{step}.h5" in propose(scouted)


def test_a_growing_file_counts_its_records(tmp_path: Path) -> None:
    """One file with 40 records is 40 snapshots, and the proposal says how it grows."""
    fill(tmp_path, ["wave.h5"])
    reply = examined("hdf5", ("/eta", (64,), "<f4"), records=40, growing=True)
    scouted = scout(tmp_path, answering({".h5": reply}))
    assert scouted.snapshots is not None
    assert scouted.snapshots.snapshots == 40
    assert tomllib.loads(propose(scouted))["snapshots"]["record_axis"] == "yes"


def test_one_file_names_its_series(tmp_path: Path) -> None:
    """Given one file, scout tells of the files named like it and of no others."""
    fill(tmp_path, ["T_1.npy", "T_2.npy", "p_1.npy", "p_5.npy"])
    scouted = scout(tmp_path / "T_1.npy", NPY)
    assert [s.group.pattern for s in scouted.sights] == ["T_{step}.npy"]


def test_what_cannot_be_read_is_said(tmp_path: Path) -> None:
    """A file of an unknown format appears with the reason, and nothing is proposed."""
    fill(tmp_path, ["data.bin"])
    scouted = scout(tmp_path, NPY)
    assert scouted.snapshots is None
    assert "no reader knows this format" in describe(scouted)
    with pytest.raises(ValueError, match="nothing to propose"):
        propose(scouted)


def test_a_folder_that_is_not_there(tmp_path: Path) -> None:
    """A clear error with the path, not a traceback of the operating system's."""
    with pytest.raises(ArrivalError, match="missing"):
        scout(tmp_path / "missing" / "run", NPY)


def test_few_files_are_examined_in_a_full_folder(tmp_path: Path) -> None:
    """Fifty unlike files cost a bounded number of questions."""
    fill(tmp_path, [f"{'x' * n}.npy" for n in range(1, 51)])
    asked = []

    def ask(request: Request) -> Reply:
        asked.append(request)
        return NPY(request)

    scout(tmp_path, ask)
    assert len(asked) == MOST_EXAMINED


@pytest.mark.parametrize(
    ("shape", "line"),
    [
        ((3, 40, 50), 'components = "first"'),
        ((40, 50, 2), 'components = "last"'),
        ((8, 9, 10, 11), "grid = false"),
    ],
)
def test_component_axes_are_proposed(shape: tuple[int, ...], line: str) -> None:
    """A short axis beside long ones holds components; more than three grid axes cannot be cut."""
    from monitor.namereading import NameGroup
    from monitor.scout import Scouted, Sight

    sight = Sight(NameGroup("a.npy", ("a.npy",)), None, examined("npy", ("u", shape, "<f4")))
    assert line in propose(Scouted(Path("run"), (sight,), 1, False))


@pytest.mark.parametrize(
    ("names", "reply"),
    [
        (["out/T_1.npy", "out/T_2.npy"], examined("npy", ("T", (48, 32), "<f8"))),
        (["u_1.npy", "u_2.npy", "v_1.npy", "v_2.npy"], examined("npy", ("u", (9, 9), "<f4"))),
        ([f"q_{s}_p{p}.npz" for s, p in product((1, 2, 3), (0, 1))], examined("npz")),
        (["wave.h5"], examined("hdf5", ("/a/eta", (2, 64), "<f4"), records=9, growing=True)),
        (["T_0.10.nc", "T_0.20.nc"], examined("netcdf3", ("T", (3, 3, 3, 3), ">f4"))),
        (["h_1.npy", "h_2.npy", "h_3.npy", "restart_1.npy"], examined("npy", ("h", (9,), "<f8"))),
    ],
    ids=["series", "fields", "parts", "growing", "dated", "restarts"],
)
def test_the_proposal_is_accepted_by_guard(
    names: list[str], reply: Examined, tmp_path: Path
) -> None:
    """What scout writes loads as it stands, watches the same pattern and stops nothing."""
    fill(tmp_path, names)
    scouted = scout(tmp_path, answering({Path(names[0]).suffix: reply}))
    path = tmp_path / "stepwarden.toml"
    path.write_text(propose(scouted), encoding="utf-8")
    settings = load(path)
    assert scouted.snapshots is not None
    assert settings.snapshots.pattern == (scouted.snapshots.group.pattern,)
    assert settings.stop == ()
    assert bool(settings.checkpoints.pattern) == ("restart_1.npy" in names)


def test_odd_names_give_valid_toml(tmp_path: Path) -> None:
    """Quotes, brackets, control characters and bytes that are no UTF-8 end up escaped or as the
    wildcard of one character."""
    odd = os.fsdecode(b'T"\x07[1]\xff_')
    fill(tmp_path, [f"{odd}{s}.npy" for s in (1, 2, 3)])
    settings = tomllib.loads(propose(scout(tmp_path, NPY)))
    assert settings["snapshots"]["pattern"] == 'T"\x07?1??_{step}.npy'


@pytest.mark.parametrize(("stem", "field"), [("field_{:06d}", "field"), ("{:06d}", "field")])
def test_a_nameless_array_is_proposed_as_guard_finds_it(
    stem: str, field: str, tmp_path: Path
) -> None:
    """With real files, quiet for long, and the real reader, all snapshots hold that field."""
    for step in range(0, 50, 10):
        file = tmp_path / f"{stem.format(step)}.npy"
        np.save(file, np.full((9, 8), float(step)))
        os.utime(file, (1000.0 + step, 1000.0 + step))
    child = Child()
    watch = WatchSpec(folder=str(tmp_path), snapshots=SnapshotSpec(pattern=("*",)))
    child.answer(Configure(watch=watch))
    path = tmp_path / "stepwarden.toml"
    path.write_text(propose(scout(tmp_path, child.answer)), encoding="utf-8")
    settings = load(path)
    assert list(settings.fields) == [field]
    child.answer(Configure(watch=watch_spec(settings, tmp_path)))
    looked = child.answer(Look())
    assert isinstance(looked, Looked)
    for arrival in looked.arrivals:
        read = child.answer(ReadSnapshot(arrival=arrival))
        assert isinstance(read, Sketched)
        assert [b.field for b in read.blocks] == [field]
    assert len(looked.arrivals) == 5
