"""A run's folder to work in."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.monitor.here import Here


@pytest.fixture
def scene(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Here:
    """An empty folder, which is the current one."""
    monkeypatch.chdir(tmp_path)
    return Here(tmp_path)
