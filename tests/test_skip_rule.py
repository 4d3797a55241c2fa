"""The rule that no test is skipped without leave."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from tests.conftest import allowed_skips
from tests.source_tree import ROOT


@pytest.mark.parametrize(("ci", "status"), [("true", 1), ("", 0)])
def test_an_unlisted_skip_fails_only_where_integration_runs(
    ci: str, status: int, tmp_path: Path
) -> None:
    """With CI set the whole run fails and names the test; a developer's own run goes through."""
    tests = tmp_path / "tests"
    tests.mkdir()
    for name in ("__init__.py", "conftest.py", "allowed_skips.txt"):
        shutil.copy(ROOT / "tests" / name, tests / name)
    (tests / "test_one.py").write_text(
        "import pytest\n\ndef test_never():\n    pytest.skip('not here')\n\ndef test_yes(): pass\n"
    )
    environment = {k: v for k, v in os.environ.items() if not k.startswith(("CI", "PYTEST"))}
    done = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "tests"],
        cwd=tmp_path,
        env=environment | ({"CI": ci} if ci else {}),
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert done.returncode == status
    assert ("skipped without leave: tests/test_one.py::test_never" in done.stdout) is bool(ci)


def test_every_leave_has_a_reason() -> None:
    """A listed skip without a reason is not a reason to skip."""
    assert [test for test, reason in allowed_skips().items() if not reason] == []
