"""Pins: made while quiet, rotated, kept at an alarm, checked, mended after a kill."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest

from monitor.actions.pin import Held, PinHistory, Pins, Source
from monitor.config import CheckpointSection, PinSection, Settings
from monitor.growthlog.records import Estimate, Intent, PinRecord, Remark, Snapshot
from monitor.guarding.journal import Journal
from probes.spec import SnapshotSpec
from probes.wire import Drop, Failed, ReadSnapshot, Secure, Sketched
from tests.monitor.actions.fakes import FakeChild, FakeLog, arrival, block, snapshot

RANDOM = np.random.default_rng(60317)


class Run:
    """A solver that writes snapshots, and the pins that guard holds of it."""

    def __init__(
        self, folder: Path, child: FakeChild, journal: Journal, log: FakeLog, **settings: object
    ) -> None:
        self.folder, self.child, self.journal, self.log = folder, child, journal, log
        pattern = settings.pop("pattern", "T_{step}.npy")
        self.settings = Settings(snapshots=SnapshotSpec(pattern=(pattern,)), **settings)  # type: ignore[arg-type]
        self.count = 0
        self.judged: list[Snapshot] = []
        self.values = RANDOM.normal(size=(6, 5))
        self.pins = self.new_pins()

    def new_pins(self, history: PinHistory | None = None) -> Pins:
        return Pins(
            self.settings, self.child.ask, self.journal, self.folder, history or PinHistory()
        )

    def write(self, step: int, name: str | None = None) -> Source:
        self.values = self.values + 0.01
        path = self.folder / (name or f"T_{step}.npy")
        with path.open("wb") as file:  # in place, as most solvers do
            np.save(file, self.values)
        os.utime(path, ns=(step * 10**9, step * 10**9))
        self.count += 1
        self.log.next_seq = max(self.log.next_seq, 1)
        record = snapshot(self.log.next_seq, step, self.values, index=self.count)
        self.log.append(record)
        self.judged.append(record)
        arrived = arrival(path, step)
        return Source(
            arrived, step, record, Sketched(arrival=arrived, blocks=(block(self.values),))
        )

    def quiet(self, step: int, name: str | None = None) -> None:
        source = self.write(step, name)
        self.pins.saw(source)
        self.pins.rotate(source, self.count)

    def alarm(self, step: int, onset: tuple[int, int] | None) -> Snapshot:
        self.count += 1
        turn = snapshot(
            self.log.next_seq,
            step,
            self.values,
            index=self.count,
            condition="runaway",
            alarmed=True,
            kind="numerical",
            onset=onset,
        )
        self.log.append(turn)
        self.pins.keep(turn, self.count)
        return turn

    def last_words(self) -> dict[str, PinRecord]:
        return {r.pin: r for r in self.log.only(PinRecord)}

    def held(self, state: str) -> list[int | None]:
        return sorted(r.step or 0 for r in self.last_words().values() if r.state == state)


@pytest.fixture
def run(tmp_path: Path, child: FakeChild, journal: Journal, log: FakeLog) -> Run:
    return Run(tmp_path, child, journal, log)


def folders(run: Run) -> set[str]:
    pins = run.folder / "pins"
    return {p.name for p in pins.iterdir()} if pins.exists() else set()


def test_quiet_snapshots_are_pinned_and_rotate(run: Run) -> None:
    """Never more than three, all there on the disk, each a verified record with its checksum."""
    for step in range(0, 800, 20):
        run.quiet(step)
        assert len(run.held("provisional")) <= 3
    held = [r for r in run.last_words().values() if r.state == "provisional"]
    assert len(held) == 3
    assert {Path(r.folder).name for r in held} == folders(run)
    for record in held:
        assert record.verified
        assert len(record.sha256) == 64
        (name,) = record.files
        assert np.load(run.folder / record.folder / name).shape == (6, 5)
    assert run.log.outcomes("pin").count("failed") == 0


def test_two_alternating_files_keep_a_clean_one(run: Run) -> None:
    """The solver has only two names; at the alarm a pin from before the growth is there, in a copy
    of its own, with the contents of its step."""
    first: dict[int, np.ndarray] = {}
    for n, step in enumerate(range(0, 1200, 20)):
        run.quiet(step, name=f"state_{'ab'[n % 2]}.npy")
        first[step] = run.values.copy()
    run.alarm(1200, (1000, 1100))
    kept = [r for r in run.last_words().values() if r.state == "kept"]
    assert kept
    for record in kept:
        assert record.step is not None
        assert record.step < 1000
        assert record.method == "copy"
        np.testing.assert_array_equal(
            np.load(run.folder / record.folder / record.files[0]), first[record.step]
        )


def test_an_alarm_keeps_what_precedes_the_onset_only(run: Run) -> None:
    """Pins from inside the interval stay provisional; nothing is pinned anew."""
    for step in range(0, 400, 20):
        run.quiet(step)
    provisional = run.held("provisional")
    run.alarm(400, (200, 300))
    assert run.held("kept") == [s for s in provisional if s is not None and s < 200]
    assert run.held("provisional") == [s for s in provisional if s is not None and s >= 200]


def test_a_grown_pin_below_the_tolerance_is_clean(run: Run) -> None:
    """After the onset, but with a growing part of 1e-10 of the field: kept as well."""
    source = run.write(0)
    evidence = source.judged.evidence
    share = Estimate(1e-10, 5e-11, 2e-10, 0.8)
    evidence = type(evidence)(channels=evidence.channels, local=share)
    judged = Snapshot(
        seq=source.judged.seq, at=1.0, key="0", path="T_0.npy", index=1, step=0,
        evidence=evidence, verdict=source.judged.verdict,
    )  # fmt: skip
    run.pins.rotate(Source(source.arrival, 0, judged, source.sketched), 1)
    run.alarm(400, (-10, 300))
    assert run.held("kept") == [0]


def test_without_an_early_pin_an_early_file_is_taken(run: Run) -> None:
    """The growth began before the only pin, but an earlier snapshot still lies there under its own
    name: the latest of these is pinned, checked against its record."""
    for step in (0, 20, 40):
        run.pins.saw(run.write(step))
    run.quiet(60)
    for step in (80, 100):
        run.pins.saw(run.write(step))
    run.alarm(120, (50, 90))
    (kept,) = [r for r in run.last_words().values() if r.state == "kept"]
    assert (kept.step, kept.verified) == (40, True)


def test_nothing_clean_is_left(run: Run, told: list[str]) -> None:
    """The oldest pin is kept, and both the log and the terminal say that it may not be clean."""
    for step in (100, 120, 140, 160, 180):
        run.quiet(step, name="latest.npy")
    run.alarm(200, (50, 90))
    assert run.held("kept") == [100]
    assert any("no checkpoint from before" in r.text for r in run.log.only(Remark))
    assert any("no checkpoint from before" in text for text in told)


def test_nothing_at_all_is_left(run: Run) -> None:
    """Pins off the disk and files gone: one trouble, no crash."""
    source = run.write(100)
    run.pins.saw(source)
    Path(source.arrival.files[0].path).unlink()
    run.alarm(120, (10, 90))
    assert run.held("kept") == []
    assert any("nothing else could be pinned" in r.text for r in run.log.only(Remark))


def test_without_an_onset_pins_before_the_last_snapshot_are_kept(run: Run) -> None:
    """An overflow out of nothing: what was quiet and not the very last one counts as clean."""
    for step in range(0, 100, 20):
        run.quiet(step)
    run.alarm(100, None)
    assert run.held("kept")[0] == 0


def test_keeping_happens_once(run: Run) -> None:
    """A guard that is started again after the alarm keeps nothing more."""
    for step in range(0, 400, 20):
        run.quiet(step)
    turn = run.alarm(400, (200, 300))
    before = len(run.log.records)
    run.pins.keep(turn, run.count)
    assert len(run.log.records) == before


def test_links_where_names_never_come_again(run: Run) -> None:
    """After some snapshots with steps in their names, pins are hard links; at the alarm they become
    copies, since the next run may write into the same names."""
    for step in range(0, 400, 20):
        run.quiet(step)
    methods = [r.method for r in run.log.only(PinRecord) if r.state == "provisional"]
    assert methods[0] == "copy"
    assert methods[-1] == "link"
    run.alarm(400, (390, 395))
    kept = [r for r in run.last_words().values() if r.state == "kept"]
    assert {r.method for r in kept} == {"copy"}
    for record in kept:
        path = run.folder / record.folder / record.files[0]
        assert path.stat().st_nlink == 1
        assert record.verified


def test_a_link_that_was_written_to_is_not_kept(run: Run) -> None:
    """The checksum tells; another pin is kept instead."""
    for step in range(0, 400, 20):
        run.quiet(step)
    linked = [r for r in run.last_words().values() if r.state == "provisional"][-1]
    assert linked.method == "link"
    with (run.folder / f"T_{linked.step}.npy").open("r+b") as file:
        file.seek(-8, os.SEEK_END)
        file.write(b"\0" * 8)
    run.alarm(400, (390, 395))
    assert linked.step not in run.held("kept")
    assert run.held("kept")
    assert run.last_words()[linked.pin].state == "released"


def test_never_a_link_into_files_written_in_place(run: Run) -> None:
    """One name that is written again and again is copied."""
    for step in range(0, 800, 20):
        run.quiet(step, name="latest.npy")
    assert {r.method for r in run.log.only(PinRecord)} == {"copy"}


def test_a_copy_that_differs_is_no_pin(run: Run) -> None:
    """A bit flipped on the way: the copy is dropped, and the log says failed."""

    def before(request: object) -> None:
        if isinstance(request, ReadSnapshot):
            path = Path(request.arrival.files[0].path)
            values = np.load(path)
            values.flat[3] += 1e-3
            np.save(path, values)

    run.child.before = before
    run.quiet(0)
    assert run.held("provisional") == []
    assert folders(run) == set()
    assert run.log.outcomes("pin") == ["failed"]


def test_an_overwritten_file_is_tried_again_at_the_next(run: Run) -> None:
    """The solver was quicker: no pin of this one, but of the next."""
    failed = Failed(kind="not-yet", what="it has changed")
    run.child.before = lambda r: failed if isinstance(r, Secure) else None
    run.quiet(0)
    run.child.before = lambda r: None
    run.quiet(20)
    assert run.log.outcomes("pin") == ["failed", "done"]
    assert run.held("provisional") == [20]


def test_the_budget_bounds_all_pins(tmp_path: Path, child: FakeChild, log: FakeLog) -> None:
    """With room for two copies never more than two are held; with room for none, one trouble."""
    journal = Journal(log, lambda: 1000.0)
    size = 128 + 8 * 30
    run = Run(tmp_path, child, journal, log, pins=PinSection(budget_gb=2.5 * size / 1e9))
    for step in range(0, 800, 20):
        run.quiet(step)
        assert len(folders(run)) <= 2
    assert len(folders(run)) == 2
    run.settings = Settings(
        snapshots=run.settings.snapshots, pins=PinSection(budget_gb=0.5 * size / 1e9)
    )
    run.pins = run.new_pins()
    for step in range(800, 1000, 20):
        run.quiet(step)
    assert sum("budget" in r.text for r in log.only(Remark)) == 1


@pytest.mark.parametrize("section", [PinSection(enabled=False), PinSection(provisional=0)])
def test_pins_can_be_off(
    section: PinSection, tmp_path: Path, child: FakeChild, journal: Journal, log: FakeLog
) -> None:
    """No copying while quiet."""
    run = Run(tmp_path, child, journal, log, pins=section)
    for step in range(0, 400, 20):
        run.quiet(step)
    assert child.requests == []


def test_separate_checkpoints_are_what_is_pinned(
    tmp_path: Path, child: FakeChild, journal: Journal, log: FakeLog
) -> None:
    """The newest checkpoint at or before the present step, never a later one."""
    run = Run(
        tmp_path, child, journal, log, checkpoints=CheckpointSection(pattern=("c_{step}.npy",))
    )
    for step in (0, 100, 200):
        np.save(tmp_path / f"c_{step}.npy", np.full((3, 2), float(step)))
    child.checkpoints = tuple(arrival(tmp_path / f"c_{s}.npy", s) for s in (0, 100, 200))
    run.quiet(120)
    (record,) = log.only(PinRecord)
    assert (record.step, record.files, record.verified) == (100, ("c_100.npy",), True)


def test_a_checkpoint_that_is_not_finite_is_refused(
    tmp_path: Path, child: FakeChild, journal: Journal, log: FakeLog
) -> None:
    """It is of no use to restart from."""
    run = Run(
        tmp_path, child, journal, log, checkpoints=CheckpointSection(pattern=("c_{step}.npy",))
    )
    np.save(tmp_path / "c_100.npy", np.array([1.0, np.nan]))
    child.checkpoints = (arrival(tmp_path / "c_100.npy", 100),)
    run.quiet(120)
    assert log.only(PinRecord) == []
    assert log.outcomes("pin") == ["failed"]


def test_a_checkpoint_in_an_unknown_format_is_kept_by_its_checksum(
    tmp_path: Path, child: FakeChild, journal: Journal, log: FakeLog
) -> None:
    """It cannot be judged, and the record says so."""
    run = Run(
        tmp_path, child, journal, log, checkpoints=CheckpointSection(pattern=("c_{step}.dat",))
    )
    (tmp_path / "c_100.dat").write_bytes(b"own format")
    child.checkpoints = (arrival(tmp_path / "c_100.dat", 100),)
    run.quiet(120)
    (record,) = log.only(PinRecord)
    assert not record.verified
    assert "checksum" in record.detail


def test_growing_files_are_pinned_at_an_alarm_only(run: Run) -> None:
    """One growing file keeps its old records by itself; at the alarm it is copied once."""
    path = run.folder / "T.npy"
    for step in (0, 20, 40, 60):
        source = run.write(step, name="T.npy")
        growing = type(source.arrival)(
            key=str(step), files=source.arrival.files, step=step, growing=True
        )
        grown = Source(growing, step, source.judged, source.sketched)
        run.pins.saw(grown)
        run.pins.rotate(grown, run.count)
    assert run.log.only(PinRecord) == []
    assert path.exists()


# --- after a kill of guard ------------------------------------------------------------------


def test_an_orphan_is_removed(run: Run) -> None:
    """Copied, but killed before the record: the folder goes, the intent gets its outcome."""
    orphan = run.folder / "pins" / "s1-00000020"
    orphan.mkdir(parents=True)
    (orphan / "T_20.npy").write_bytes(b"half")
    intent = Intent(seq=5, at=1.0, act="pin", id="s1-00000020", target="pins/s1-00000020")
    pins = run.new_pins(PinHistory(used={intent.id}, open=[intent]))
    pins.recover(3)
    assert folders(run) == set()
    assert run.log.outcomes("pin") == ["failed"]


def test_recorded_but_not_closed(run: Run) -> None:
    """Killed between the record and the outcome: the pin stands."""
    run.quiet(20)
    (record,) = run.log.only(PinRecord)
    intent = next(r for r in run.log.records if isinstance(r, Intent))
    pins = run.new_pins(PinHistory(held=[Held(record, 1)], used={record.pin}, open=[intent]))
    pins.recover(1)
    assert run.log.outcomes("pin")[-1] == "found-done"
    assert len(folders(run)) == 1


def test_a_pin_whose_folder_is_gone_is_released(run: Run) -> None:
    """Somebody removed it, or guard was killed after dropping it."""
    run.quiet(20)
    (record,) = run.log.only(PinRecord)
    run.child.ask(Drop(folder=str(run.folder / record.folder)), 1.0)
    pins = run.new_pins(PinHistory(held=[Held(record, 1)], used={record.pin}))
    pins.recover(1)
    assert run.last_words()[record.pin].state == "released"
    assert pins.records == []


def test_rotation_goes_on_after_a_restart(run: Run) -> None:
    """Pins of the guard before are let go like own ones, and no id is used twice."""
    for step in range(0, 400, 20):
        run.quiet(step)
    held = [
        Held(r, int((r.step or 0) / 20) + 1)
        for r in run.last_words().values()
        if r.state == "provisional"
    ]
    run.pins = run.new_pins(PinHistory(held=held, used=set(run.last_words())))
    for step in range(400, 800, 20):
        run.quiet(step)
    assert len(folders(run)) == 3
    names = [r.pin for r in run.log.only(PinRecord) if r.state == "provisional"]
    assert len(names) == len(set(names))
