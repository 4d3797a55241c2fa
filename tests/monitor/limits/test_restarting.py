"""Restart advice in a review."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
import pytest

from demo_runs import plate
from monitor.cli import main
from monitor.exits import Exit
from monitor.growthlog.records import Estimate
from monitor.growthlog.write import encode
from monitor.limits.restarting import Advice, advise
from probes.limits.records import Found
from tests.monitor.made_log import alarmed_run, opened

WAVES = {
    "integrator": "verlet",
    "spacing": [1.0, 1.0],
    "terms": [{"kind": "wave", "speed": 2.0}],
}


def test_the_schemes_own_limit_comes_first(tmp_path: Path) -> None:
    """1 / (2 sqrt(2)) for waves (Yee 1966) against a failed step of 0.4, less 5 %."""
    advice = advise({"scheme": WAVES | {"step": 0.4}}, tmp_path, Estimate(1.5))
    assert advice is not None
    assert advice.found.ratio.value == pytest.approx(0.95 / (2 * math.sqrt(2.0)) / 0.4, rel=1e-6)
    plain = advice.json_object()
    assert plain["step"] == pytest.approx(0.95 / (2 * math.sqrt(2.0)), rel=1e-6)
    assert "configured terms" in advice.text()


def test_a_step_within_the_limit_points_elsewhere(tmp_path: Path) -> None:
    """Something else grew: that is said, and the growth gives a number with its assumption."""
    advice = advise({"scheme": WAVES | {"step": 0.3}}, tmp_path, Estimate(1.33, 1.31, 1.35, 0.8))
    assert advice is not None
    assert "of the scheme's limit" in advice.note
    # 2 sqrt(G) / (1 + G), from the leapfrog's polynomial, less 5 %.
    want = 0.95 * 2 * math.sqrt(1.35) / 2.35
    assert advice.found.ratio.value == pytest.approx(want, rel=1e-5)


def test_fields_that_are_gone(tmp_path: Path) -> None:
    """Without its coefficients the scheme's limit is unknown; the integrator still tells."""
    scheme = WAVES | {"step": 0.3, "terms": [{"kind": "wave", "speed": "c.npy"}]}
    advice = advise({"scheme": scheme}, tmp_path, Estimate(1.33))
    assert advice is not None
    assert "there is no file" in advice.note
    assert advice.found.ratio.value is not None


def test_what_no_step_cures(tmp_path: Path) -> None:
    """Forward-time central advection: a reason, no number (LeVeque 2007, section 10.2)."""
    scheme = {
        "integrator": "ftcs",
        "spacing": [1.0],
        "step": 0.1,
        "terms": [{"kind": "advection", "velocity": [1.0]}],
    }
    advice = advise({"scheme": scheme}, tmp_path, Estimate(1.01))
    assert advice is not None
    assert advice.json_object()["curable_by_step"] is False
    assert advice.json_object()["step"] is None
    assert "no smaller step cures it" in advice.text()


@pytest.mark.parametrize(
    "settings",
    [{}, {"scheme": None}, {"scheme": {"integrator": "unheard of"}}, {"scheme": {"x": 1}}],
)
def test_no_scheme_no_advice(settings: dict[str, Any], tmp_path: Path) -> None:
    """Nothing is guessed."""
    assert advise(settings, tmp_path, Estimate(1.5)) is None


def test_no_growth_no_number(tmp_path: Path) -> None:
    """A reason, not a number, where the factor is unknown too."""
    advice = advise({"scheme": WAVES}, tmp_path, Estimate(reason="too few snapshots"))
    assert advice is not None
    assert advice.found.ratio.value is None
    assert "no growth factor" in advice.text()


def test_the_review_says_it(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """In text and JSON of `review`, from the settings in the log."""
    head, *rest = alarmed_run()
    assert type(head) is type(opened())
    head = msgspec.structs.replace(head, settings={"scheme": WAVES | {"step": 0.4}})
    log = tmp_path / "growth.jsonl"
    log.write_bytes(b"".join(encode(record) for record in (head, *rest)))
    assert main(["review", str(log)]) == Exit.ALARM
    lines = capsys.readouterr().out.splitlines()
    (restart,) = [line for line in lines if line.startswith("Restart")]
    assert "a time step of at most 0.3359" in restart
    assert max(map(len, lines)) <= 100
    assert main(["review", str(log), "--json"]) == Exit.ALARM
    plain = json.loads(capsys.readouterr().out)
    assert plain["restart"]["step"] == pytest.approx(0.33588, rel=1e-4)


def test_a_range_is_shown(tmp_path: Path) -> None:
    """Where the kind of mode is unknown the mode's own limit is a range."""
    scheme = {"integrator": "rk4", "spacing": [1.0], "terms": [{"kind": "reaction", "rate": -1.0}]}
    advice = advise({"scheme": scheme}, tmp_path, Estimate(1.5))
    assert advice is not None
    assert "the mode's own limit lies at" in advice.text()
    assert isinstance(replace(advice, step=None), Advice)
    assert isinstance(advice.found.ratio, Found)


def test_the_advice_applied_to_a_demo_run_stays_stable(tmp_path: Path) -> None:
    """The plate fails at 1.02 of its limit; stepped at the advised step from a field with rough
    noise on it, the largest deviation never grows."""
    np.save(tmp_path / "k.npy", plate.conductivity())
    scheme = {
        "integrator": "euler",
        "spacing": [plate.SPACING] * 2,
        "step": 1.02 * plate.limit_step(),
        "terms": [{"kind": "diffusion", "coefficient": "k.npy"}],
    }
    advice = advise({"scheme": scheme}, tmp_path, Estimate(plate.growth(1.02).factor))
    assert advice is not None
    assert advice.found.ratio.value is not None
    cast = plate.build(1.02 * advice.found.ratio.value, None, tmp_path)
    noise = np.random.default_rng(5_903).standard_normal(plate.SHAPE)
    one, other = dict(cast.state), {"T": cast.state["T"] + 1e-6 * noise}
    sizes = []
    for _ in range(400):
        one, other = cast.step(one), cast.step(other)
        sizes.append(float(np.linalg.norm(other["T"] - one["T"])))
    assert (np.diff(sizes) <= 0.0).all()
