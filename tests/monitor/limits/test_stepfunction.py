"""A step function of the user's own, in its own process."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest

import monitor.limits.stepfunction as ours
from monitor.cli import main
from monitor.exits import Exit
from tests.monitor.here import Here

SOLVER = """
import sys
import numpy as np

calls = 0

def heat(u, r=0.4):
    print("stepping")
    p = np.concatenate([[0.0], u, [0.0]])
    return u + r * (p[2:] - 2 * u + p[:-2])

def too_long(u):
    return heat(u, 0.6)

def logistic(u):
    return 3.2 * u * (1 - u)

def large(u):
    v = u + 0.3 * (np.roll(u, 1) - 2 * u + np.roll(u, -1)) - 0.55 * u
    v[1000] = -1.1 * u[1000]
    return v

def noisy(u):
    return heat(u) + 1e-9 * np.random.default_rng().random(u.shape)

def short(u):
    return u[:-1]

def wild(u):
    return u / 0.0 * np.inf

def failing(u):
    raise RuntimeError("no \\x1b[31m water")

def leaving(u):
    sys.exit(3)

def hanging(u):
    while True:
        pass
"""


@pytest.fixture
def solver(scene: Here) -> Path:
    (scene.folder / "mysolver.py").write_text(SOLVER)
    np.save(scene.folder / "u.npy", np.sin(np.arange(30.0)))
    np.save(scene.folder / "fixed.npy", np.full(4, 1.0 - 1.0 / 3.2))
    np.save(scene.folder / "many.npy", np.cos(np.arange(2000.0)))
    return scene.folder


def ask(name: str, state: str, capsys: pytest.CaptureFixture[str]) -> tuple[int, dict]:
    status = main(["limit", "--function", f"mysolver:{name}", "--state", state, "--json"])
    return status, json.loads(capsys.readouterr().out)


@pytest.mark.parametrize(("name", "ratio"), [("heat", 0.4), ("too_long", 0.6)])
def test_heat(name: str, ratio: float, solver: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """max over j of |1 - 4 r sin(j pi / 62)**2| (LeVeque 2007, section 9.6); what the function
    prints does not get into the answer."""
    status, got = ask(name, "u.npy", capsys)
    want = np.abs(1.0 - 4.0 * ratio * np.sin(np.arange(1, 31) * np.pi / 62) ** 2).max()
    assert status == (Exit.GOOD if want <= 1.0 else Exit.ALARM)
    assert got["matrix"]["spectral_radius"]["value"] == pytest.approx(want, rel=1e-6)
    assert got["matrix"]["two_norm"]["value"] == pytest.approx(want, rel=1e-6)
    assert got["notes"] == []


def test_a_nonlinear_step_at_its_fixed_point(
    solver: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The logistic map's slope at its fixed point is 2 - 3.2 (Strogatz 1994, section 10.3)."""
    status, got = ask("logistic", "fixed.npy", capsys)
    assert status == Exit.ALARM
    assert got["factor"] == pytest.approx(1.2, rel=1e-6)


def test_many_unknowns_are_never_formed(solver: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """2,000 unknowns, one of which obeys only itself and grows by 1.1: the radius by iteration, as
    a lower bound with its reason; no norm without a transpose."""
    status, got = ask("large", "many.npy", capsys)
    assert status == Exit.ALARM
    radius = got["matrix"]["spectral_radius"]
    assert radius["value"] == pytest.approx(1.1, rel=1e-6)
    assert "lower bound" in radius["reason"]
    assert got["matrix"]["two_norm"]["value"] is None


def test_noise_is_told(solver: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """By how much two equal calls differ, and what that hides."""
    _, got = ask("noisy", "u.npy", capsys)
    assert "not deterministic" in got["notes"][0]


@pytest.mark.parametrize(
    ("name", "said"),
    [
        ("short", "returned shape (29,) for a state of (30,)"),
        ("wild", "not finite"),
        ("failing", "raised RuntimeError: no \\x1b[31m water"),
        ("leaving", "raised SystemExit: 3"),
        ("absent", "cannot be loaded: AttributeError"),
    ],
)
def test_what_goes_wrong_inside(
    name: str, said: str, solver: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Status 2 and one message that names the function."""
    words = ["limit", "--function", f"mysolver:{name}", "--state", "u.npy"]
    assert main(words) == Exit.USAGE
    assert said in capsys.readouterr().err


def test_a_hanging_function_is_ended(
    solver: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """After the time limit its process is killed, and the message says so."""
    monkeypatch.setattr(ours, "_SECONDS", 3.0)
    assert main(["limit", "--function", "mysolver:hanging", "--state", "u.npy"]) == Exit.USAGE
    assert "took over 3 s for a step" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--function", "mysolver"], "--state: must be given"),
        (["--function", "my solver:x", "--state", "u.npy"], "write module:function"),
        (["--function", "nowhere:x", "--state", "u.npy"], "cannot be loaded: ModuleNotFound"),
        (["--function", "mysolver:heat", "--state", "u.npy", "--step", "1"], "leave it out"),
        (["--function", "mysolver:heat", "--state", "u.npy", "--scan"], "goes neither"),
    ],
)
def test_wrong_usage(
    words: list[str], said: str, solver: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Status 2."""
    assert main(["limit", *words]) == Exit.USAGE
    assert said in capsys.readouterr().err


def test_the_growth_seen_is_the_growth_told(
    solver: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Stepping the function itself from a small error grows as its radius says, ln G to 1e-3."""
    _, got = ask("too_long", "u.npy", capsys)
    u = 1e-8 * np.random.default_rng(6_607).standard_normal(30)
    sizes = []
    for _ in range(400):
        p = np.concatenate([[0.0], u, [0.0]])
        u = u + 0.6 * (p[2:] - 2 * u + p[:-2])
        sizes.append(math.log(float(np.linalg.norm(u))))
    slope = (sizes[-1] - sizes[-101]) / 100
    assert math.log(got["factor"]) == pytest.approx(slope, rel=1e-3)
