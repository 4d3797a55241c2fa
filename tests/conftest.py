"""For all tests: a clean home folder, and skips only for reasons that stand on the short list."""

from __future__ import annotations

import os
import signal
from pathlib import Path

import pytest

ALLOWED = Path(__file__).parent / "allowed_skips.txt"
_skipped: list[tuple[str, str]] = []


def allowed_skips() -> dict[str, str]:
    """Test ids (or their beginnings, ending in ``*``) that may be skipped, with the reason."""
    out = {}
    for line in ALLOWED.read_text(encoding="utf-8").splitlines():
        if line.strip() and not line.startswith("#"):
            test, _, reason = line.partition("  ")
            out[test.strip()] = reason.strip()
    return out


def unexpected(skipped: list[tuple[str, str]]) -> list[tuple[str, str]]:
    """Those of (test id, reason) that the list does not cover."""
    listed = allowed_skips()
    return [
        (test, reason)
        for test, reason in skipped
        if not any(test == k or (k.endswith("*") and test.startswith(k[:-1])) for k in listed)
    ]


def pytest_configure(config: pytest.Config) -> None:
    """Under nohup or in the background of a script, hang-up or interrupt are ignored by whatever is
    started, and tests of them would see that."""
    signal.signal(signal.SIGHUP, signal.SIG_DFL)
    signal.signal(signal.SIGINT, signal.default_int_handler)


def pytest_runtest_logreport(report: pytest.TestReport) -> None:
    if report.skipped and not hasattr(report, "wasxfail"):
        reason = report.longrepr[2] if isinstance(report.longrepr, tuple) else str(report.longrepr)
        _skipped.append((report.nodeid, reason))


def pytest_collectreport(report: pytest.CollectReport) -> None:
    if report.skipped:
        _skipped.append((report.nodeid, str(report.longrepr)))


def pytest_sessionfinish(session: pytest.Session, exitstatus: int) -> None:
    if os.environ.get("CI") and exitstatus == 0 and unexpected(_skipped):
        session.exitstatus = pytest.ExitCode.TESTS_FAILED


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    for test, reason in unexpected(_skipped) if os.environ.get("CI") else []:
        terminalreporter.write_line(f"skipped without leave: {test}: {reason}", red=True)


@pytest.fixture(autouse=True)
def clean_home(tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch) -> None:
    """No test sees, or changes, the home folder of whoever runs it."""
    home = tmp_path_factory.mktemp("home")
    monkeypatch.setenv("HOME", str(home))
    for name in ("XDG_CONFIG_HOME", "XDG_CACHE_HOME", "STEPWARDEN_TRACE", "COLUMNS", "LINES"):
        monkeypatch.delenv(name, raising=False)
