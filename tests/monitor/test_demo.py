"""The demo: what it must show, and that it leaves nothing running."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import psutil
import pytest
from msgspec.structs import replace

from monitor.config import load
from monitor.demo import SCENES, Plan, fresh_folder, settings_text, shortcomings
from monitor.growthlog.records import AnyRecord, Intent, Outcome, PinRecord, Snapshot
from probes.errors import SettingsError
from tests.monitor.made_log import alarmed_run, contents, evidence, opened, segment, snap

PLAN = Plan("plate", Path("nowhere"))


def shown() -> list[AnyRecord]:
    """The log of a demo that went as it should."""
    return [
        *alarmed_run(),
        PinRecord(
            seq=70,
            at=200.0,
            pin="p3",
            state="kept",
            folder="pins/p3",
            files=("T_000240.npy",),
            step=240,
            verified=True,
        ),
        Intent(seq=71, at=1.0, act="stop-file", id="x", target="STOP"),
        Outcome(seq=72, at=1.0, act="stop-file", id="x", outcome="accepted"),
    ]


def test_a_full_showing_has_no_shortcomings() -> None:
    """Alarm, verified clean pin, accepted stop, no ruin."""
    assert shortcomings(PLAN, contents(shown())) == []


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (lambda records: [r for r in records if not isinstance(r, PinRecord)], "pinned"),
        (
            lambda records: [
                replace(r, verified=False) if isinstance(r, PinRecord) else r for r in records
            ],
            "verified",
        ),
        (lambda records: records[:-1], "not stopped"),
        (lambda records: [*records, snap(80, "overflowed")], "ruined"),
        (lambda records: [*records, snap(80, "runaway", evidence_=evidence(1.3))], "ruined"),
        (lambda records: [r for r in records if not isinstance(r, Snapshot)], "no alarm"),
    ],
    ids=["no pin", "not verified", "not stopped", "overflow", "ruin", "no alarm"],
)
def test_each_shortcoming_is_named(spoil, words: str) -> None:
    """Taking one thing away from a good showing names just that."""
    assert any(words in what for what in shortcomings(PLAN, contents(spoil(shown()))))


def test_a_stable_showing_must_stay_quiet() -> None:
    """Below its limit no alarm is success, an alarm is not."""
    stable = Plan(PLAN.scene, PLAN.folder, step_factor=0.9)
    quiet = [opened(1), segment(2), *(snap(n) for n in range(3, 20))]
    assert shortcomings(stable, contents(quiet)) == []
    assert shortcomings(stable, contents(shown())) == ["an alarm on a stable solver"]


@pytest.mark.parametrize("scene", SCENES)
def test_every_scene_has_settings_that_load(scene: str, tmp_path: Path) -> None:
    """The demo's own stepwarden.toml is valid, stops by file and then by signal."""
    path = tmp_path / "stepwarden.toml"
    path.write_text(settings_text(Plan(scene, tmp_path)), encoding="utf-8")
    assert tomllib.loads(path.read_text(encoding="utf-8"))["run"]["name"].startswith("demo")
    assert [step.do for step in load(path).stop] == ["file", "signal"]


def test_the_demo_never_writes_among_other_files(tmp_path: Path) -> None:
    """A named folder must be empty; a new one is made; without a name it is temporary."""
    assert fresh_folder(tmp_path / "new").is_dir()
    (tmp_path / "new" / "thesis.tex").touch()
    with pytest.raises(SettingsError, match="empty folder"):
        fresh_folder(tmp_path / "new")
    assert list(fresh_folder(None).iterdir()) == []


def start(folder: Path, *words: str) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-P", "-m", "monitor", "demo", "--plain", "--folder", str(folder), *words],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"TERM": "dumb"},
    )


@pytest.mark.timeout(290)
def test_the_whole_demo(tmp_path: Path) -> None:
    """Real processes: solver, guard and its reading process. The alarm comes, a clean checkpoint is
    pinned, the solver is stopped before ruin: status 0, and the review is printed."""
    demo = start(tmp_path / "demo", "--pace", "0.1")
    out, err = demo.communicate(timeout=280)
    assert demo.returncode == 0, out[-2000:] + err
    assert "alarm at step" in out
    assert "pinned, sha256" in out
    assert (tmp_path / "demo" / "HOLD").exists()
    assert list((tmp_path / "demo" / "pins").rglob("*.npy")) != []


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_an_ended_demo_leaves_nothing_running(number: signal.Signals, tmp_path: Path) -> None:
    """TERM and an interrupt end solver, guard and reading process too."""
    demo = start(tmp_path / "demo")
    try:
        children = wait_for_children(demo.pid, 3)
        demo.send_signal(number)
        assert demo.wait(60) == 128 + number
        _, alive = psutil.wait_procs(children, 20)
        assert [p.cmdline() for p in alive] == []
    finally:
        demo.kill()
        demo.communicate()


def wait_for_children(pid: int, count: int) -> list[psutil.Process]:
    """Descendants of a process, once there are `count` of them."""
    until = time.monotonic() + 60
    while time.monotonic() < until:
        found = psutil.Process(pid).children(recursive=True)
        if len(found) >= count:
            return found
        time.sleep(0.05)
    raise AssertionError(f"fewer than {count} processes were started")
