"""Histories beside snapshots: order, records, and what an earlier guard left."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from monitor.config import Settings
from monitor.growthlog.records import History, Remark
from monitor.guarding.histories import PIECE, RECORD_EVERY, Change, Histories
from monitor.guarding.journal import Journal
from probes.child import Child
from probes.errors import ChildError
from probes.spec import HistorySpec, SnapshotSpec, WatchSpec
from probes.wire import Configure, ReadHistories, Reply, Request
from tests.monitor.actions.fakes import FakeLog


class Bench:
    """A text log, the reading process's own code on it, and histories that follow it."""

    def __init__(self, folder: Path, **about: object) -> None:
        self.path = folder / "run.log"
        spec = HistorySpec(**{"path": "run.log", "column": 2, "step": 1, "time": 3, **about})
        self.settings = Settings(snapshots=SnapshotSpec(pattern=("a",)), histories={"energy": spec})
        self.watch = WatchSpec(
            folder=str(folder),
            snapshots=self.settings.snapshots,
            histories=self.settings.histories,
        )
        self.log, self.now = FakeLog(), 1000.0
        self.requests: list[Request] = []
        self.trouble: ChildError | None = None
        self.another_child()
        self.histories = self.another_guard()

    def another_child(self) -> None:
        self.child = Child()
        self.child.answer(Configure(watch=self.watch))

    def another_guard(self) -> Histories:
        known = {r.name: r for r in self.log.records if isinstance(r, History)}
        journal = Journal(self.log, lambda: self.now)
        self.another_child()
        return Histories(self.settings, self.ask, journal, lambda: self.now, known)

    def ask(self, request: Request, limit_s: float) -> Reply:
        self.requests.append(request)
        if self.trouble is not None:
            raise self.trouble
        return self.child.answer(request)

    def write(self, *lines: str) -> None:
        with self.path.open("a") as file:
            file.writelines(f"{line}\n" for line in lines)

    def march(self, first: int, last: int, start: float = 1e-10, rate: float = 1.05) -> None:
        """Lines of steps first to last: a growing part under 100."""
        values = (100.0 + start * rate**k for k in range(first, last + 1))
        self.write(*(f"{k} {v:.12e} {0.1 * k:.6f}" for k, v in enumerate(values, first)))

    def records(self) -> list[History]:
        return [r for r in self.log.records if isinstance(r, History)]


@pytest.fixture
def bench(tmp_path: Path) -> Bench:
    return Bench(tmp_path, alarm=True)


def said(changes: list[Change]) -> list[tuple[str, str]]:
    return [(c.before, c.record.verdict.condition) for c in changes]


def test_what_lies_beyond_a_snapshot_waits(bench: Bench) -> None:
    """A run that blew up long ago is judged in the order of its steps: the first snapshots do not
    know yet what the last lines show."""
    bench.march(0, 400)
    early = bench.histories.up_to(100, None, 1)
    assert said(early) == [("gathering", "quiet")]
    assert bench.histories.alarms() == ()
    record = bench.records()[-1]
    assert (record.step, record.sample, record.seg) == (100, 100, 1)
    late = bench.histories.up_to(350, None, 1)
    assert late[-1].record.verdict.condition == "runaway"
    assert bench.records()[-1].step == 350
    (heard,) = bench.histories.alarms()
    assert heard.name == "energy"
    assert "straight line" in heard.why


def test_times_are_compared_where_steps_cannot_be(tmp_path: Path) -> None:
    """A log without steps beside snapshots without times, and the reverse."""
    bench = Bench(tmp_path, step="")
    bench.march(0, 50)
    bench.histories.up_to(None, 2.05, 1)
    assert bench.records()[-1].sample == 20
    bench.histories.up_to(7, None, 1)
    assert bench.records()[-1].sample == 50


def test_live_and_afterwards_agree(tmp_path: Path) -> None:
    """Followed line by line or taken at once: the same changes at the same samples."""
    (tmp_path / "live").mkdir()
    (tmp_path / "after").mkdir()
    live, after = Bench(tmp_path / "live", alarm=True), Bench(tmp_path / "after", alarm=True)
    for k in range(401):
        live.march(k, k)
        live.histories.onward(1)
    after.march(0, 400)
    changes = after.histories.onward(1)
    changed = [r for r in live.records() if live.log.synced[live.log.records.index(r)]]
    assert [(r.sample, r.verdict) for r in changed] == [
        (c.record.sample, c.record.verdict) for c in changes
    ]


def test_records_are_few(bench: Bench) -> None:
    """One at each change, one at each snapshot with news, one a minute in between."""
    for k in range(0, 100, 10):
        bench.march(k, k + 9, rate=1.0)
        bench.histories.onward(1)
    assert len(bench.records()) == 1
    bench.now += RECORD_EVERY
    bench.march(100, 100, rate=1.0)
    bench.histories.onward(1)
    assert len(bench.records()) == 2
    bench.histories.up_to(100, None, 1)
    assert len(bench.records()) == 2
    bench.march(101, 105, rate=1.0)
    bench.histories.up_to(110, None, 1)
    last = bench.records()[-1]
    assert (len(bench.records()), last.count) == (3, 5)
    assert last.lo == pytest.approx(100.0)


def test_values_that_are_not_finite(tmp_path: Path) -> None:
    """Told at once with how they stand in the file; no alarm unless declared."""
    bench = Bench(tmp_path)
    bench.march(0, 20)
    bench.write("21 ******** 2.1")
    changes = bench.histories.onward(1)
    assert said(changes)[-1] == ("quiet", "overflowed")
    record = changes[-1].record
    assert (record.value, record.print, record.bad) == ("nan", "********", 1)
    assert not record.verdict.alarmed
    assert bench.histories.alarms() == ()


def test_another_guard_goes_on(bench: Bench) -> None:
    """What is in the log is taken in without a word; growth that spans both is seen."""
    bench.march(0, 150)
    bench.histories.up_to(150, None, 1)
    before = len(bench.records())
    again = bench.another_guard()
    assert again.onward(1) == []
    assert len(bench.records()) == before
    bench.march(151, 400)
    changes = again.onward(1)
    assert changes[-1].record.verdict.condition == "runaway"
    whole = Bench(bench.path.parent, alarm=True)
    assert whole.histories.onward(1)[-1].record.verdict == changes[-1].record.verdict


@pytest.mark.parametrize("lines", [20, 300])
def test_a_log_begun_again_between_guards(lines: int, bench: Bench) -> None:
    """Shorter than what was known, or of other values at the place known: another run, judged from
    its beginning."""
    bench.march(0, 150)
    bench.histories.up_to(150, None, 1)
    bench.path.write_text("")
    bench.march(0, 0)
    bench.march(1, lines - 1, start=2e-10)
    again = bench.another_guard()
    changes = again.onward(1)
    while again.more:
        changes += again.onward(1)
    again.up_to(lines, None, 2)
    assert bench.records()[-1].sample == lines - 1
    assert changes[-1].record.verdict.condition == ("runaway" if lines > 150 else "quiet")


def test_another_reading_process_begins_anew(bench: Bench) -> None:
    """One that died in between: no sample twice, none lost."""
    bench.march(0, 50)
    bench.histories.onward(1)
    bench.another_child()
    bench.march(51, 60)
    bench.histories.up_to(60, None, 1)
    last = bench.records()[-1]
    assert last.sample == 60
    assert sum(r.count for r in bench.records()) == 61


def test_a_file_that_is_replaced_is_a_new_run(bench: Bench) -> None:
    """While guard follows it: gathered anew."""
    bench.march(0, 300)
    assert bench.histories.onward(1)[-1].record.verdict.condition == "runaway"
    bench.path.unlink()
    bench.march(0, 3)
    changes = bench.histories.onward(2)
    assert said(changes) == [("runaway", "gathering")]
    assert not changes[0].record.verdict.alarmed


def test_trouble_is_told_once(bench: Bench) -> None:
    """With the reading process or with the file; the rest goes on."""
    bench.trouble = ChildError("died")
    for _ in range(3):
        assert bench.histories.onward(1) == []
        bench.histories.up_to(5, None, 1)
    bench.trouble = None
    bench.path.mkdir()
    for _ in range(3):
        bench.histories.onward(1)
    bench.path.rmdir()
    bench.march(0, 20)
    assert said(bench.histories.onward(1)) == [("gathering", "quiet")]
    told = [r.text for r in bench.log.records if isinstance(r, Remark)]
    assert len(told) == 2
    assert "died" in told[0]
    assert "energy" in told[1]


def test_memory_is_bounded_however_far_the_log_is_ahead(bench: Bench) -> None:
    """Early snapshots beside a log of many pieces: no more is read than the next of them needs."""
    lines = [f"{k} 1.0 {k}\n" for k in range(400_000)]
    bench.path.write_text("".join(lines))
    assert bench.path.stat().st_size > 3 * PIECE
    for step in range(0, 50, 10):
        bench.histories.up_to(step, None, 1)
    assert sum(isinstance(r, ReadHistories) for r in bench.requests) == 1
    assert bench.histories.more


def test_without_histories_nothing_is_asked(tmp_path: Path) -> None:
    """The reading process is left in peace."""
    bench = Bench(tmp_path)
    settings = Settings(snapshots=SnapshotSpec(pattern=("a",)))
    none = Histories(settings, bench.ask, Journal(bench.log, lambda: 0.0), lambda: 0.0, {})
    assert (none.onward(1), none.up_to(3, math.nan, 1), none.alarms()) == ([], [], ())
    assert (len(none), none.more, bench.requests) == (0, False, [])
