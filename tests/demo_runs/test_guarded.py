"""The main job on every demo solver: quiet inside its limit, a right and early alarm outside.

What is measured is compared with the factor of the assembled matrix, the box of its eigenvector and
the difference of two runs that start a rounding apart. Guard takes real files of a real process.
"""

from __future__ import annotations

import json
import math
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from demo_runs import settings_text
from monitor.growthlog.read import read_log
from monitor.review import summarise
from tests.demo_runs.running import SOLVERS, twins


def guarded(name: str, factor: float, folder: Path, snapshots: int) -> tuple[int, dict[str, Any]]:
    """Exit status of guard and the review, after a solver has marched so far."""
    steps = snapshots * SOLVERS[name].EVERY
    words = ["--out", "out", "--step-factor", str(factor), "--steps", str(steps)]
    march = [sys.executable, "-P", "-m", f"demo_runs.{name}", *words]
    subprocess.run(march, cwd=folder, check=True, capture_output=True)
    (folder / "stepwarden.toml").write_text(settings_text(name, "out"))
    guard = [sys.executable, "-P", "-m", "monitor", "guard", "--catch-up", "--no-actions"]
    ended = subprocess.run(guard, cwd=folder, check=False, capture_output=True)
    review = summarise(read_log(folder / "growth.jsonl"))
    return ended.returncode, json.loads(json.dumps(review.json_object()))


@pytest.mark.parametrize("name", SOLVERS)
def test_inside_the_limit_it_is_quiet_to_the_end(name: str, tmp_path: Path) -> None:
    """Three times as many snapshots as the unstable run needs to ruin, at 0.9 of the limit."""
    status, review = guarded(name, 0.9, tmp_path, 80)
    assert status == 0
    assert review["condition"] == "quiet"
    assert review["snapshots"] >= 80
    assert {s["alarm_step"] for s in review["segments"]} == {None}


@pytest.mark.parametrize("name", SOLVERS)
def test_two_per_cent_outside_it_is_caught_clean(name: str, tmp_path: Path) -> None:
    """Alarm while the growing part is below 1e-4 of the field, ln G within 2 % of the matrix, and
    the box found on the cells lies over that of the eigenvector."""
    truth = SOLVERS[name].growth(1.02)
    status, review = guarded(name, 1.02, tmp_path, 24)
    assert status == 10
    assert review["field"] == truth.field
    assert abs(math.log(review["growth_per_step"]) / math.log(truth.factor) - 1.0) <= 0.02
    steps, levels, _ = twins(name)
    at_alarm = np.interp(review["alarm_step"], steps, np.log(levels), right=0.0)
    assert at_alarm < math.log(1e-4)
    assert review["contamination"] is None or review["contamination"] < 1e-4
    for (low, high), (least, most) in zip(review["region"], truth.box, strict=True):
        assert low < most
        assert high > least
    volume = math.prod(b - a for a, b in review["region"])
    assert volume <= 4 * math.prod(b - a for a, b in truth.box)
    assert review["last_clean_snapshot"]["step"] < review["alarm_step"]
