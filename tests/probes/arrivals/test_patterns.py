"""Patterns with place-holders: what they match and what they read out of a name."""

from __future__ import annotations

import pytest

from probes.arrivals.patterns import Level, Match, Pattern
from probes.errors import SettingsError


@pytest.mark.parametrize(
    ("pattern", "name", "expected"),
    [
        ("h_{step}.npy", "h_0042.npy", Match(42)),
        ("h_{step}.npy", "h_.npy", None),
        ("h_{step}.npy", "h_12a.npy", None),
        ("h_{step}.npy", "hh_12.npy", None),
        ("h_{step}.npy", "h_12xnpy", None),
        ("{field}_{step}.npy", "eta_7.npy", Match(7, "", "eta")),
        ("{field}_{step}.npy", "u_old_7.npy", Match(7, "", "u_old")),
        ("s{step}.p{part}.h5", "s10.prank-3.h5", Match(10, "rank-3")),
        ("s{step}.p{part}.h5", "s10.pa.b.h5", None),
        ("T_?.npy", "T_a.npy", Match()),
        ("T_?.npy", "T_ab.npy", None),
        ("T*.npy", "T_ab.npy", Match()),
        ("r{step}_{step}.h5", "r5_5.h5", Match(5)),
        ("r{step}_{step}.h5", "r5_6.h5", None),
        ("*", "h_1.npy.tmp", None),
        ("*", ".nfs0001", None),
        ("*", ".hidden", None),
        ("*", "h.npy~", None),
        (".state_{step}", ".state_3", Match(3)),
        ("a+b({step}).npy", "a+b(4).npy", Match(4)),
    ],
)
def test_one_name(pattern: str, name: str, expected: Match | None) -> None:
    """A name matches as a whole or not at all; unfinished and hidden names match only a pattern
    that asks for such."""
    assert Level(pattern).match(name) == expected


def test_levels() -> None:
    """The root is the deepest folder without place-holders, "." and ".." are resolved."""
    pattern = Pattern.of("../out/./{step}/{field}.npy", "/data/run")
    assert pattern.root == "/data/out"
    assert [level.text for level in pattern.levels] == ["{step}", "{field}.npy"]
    assert pattern.has == {"step", "field"}


def test_absolute_pattern_and_literal_name() -> None:
    """An absolute pattern ignores the folder; a plain name is its own last level."""
    pattern = Pattern.of("/elsewhere/latest.h5", "/data/run")
    assert (pattern.root, pattern.levels[0].text) == ("/elsewhere", "latest.h5")


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("out/h_{step}.npy", "h"),
        ("T_?.npy", "T"),
        ("{step}.npy", "field"),
        ("u_{step}_v.npy", "u_v"),
    ],
)
def test_own_name(text: str, name: str) -> None:
    """The literal words of a file name name its field; without any it is called "field"."""
    assert Pattern.of(text, "/r").own_name == name


@pytest.mark.parametrize("text", ["h_{stepp}.npy", "h_{}.npy", "out/", ""])
def test_refused(text: str) -> None:
    """Unknown place-holders and patterns that name no file are told, the latter at the root."""
    with pytest.raises(SettingsError):
        Pattern.of(text, "/")


def test_joining_levels() -> None:
    """Folder and file must agree on what both tell."""
    assert Match(3, "", "u").joined(Match(3, "p1", "")) == Match(3, "p1", "u")
    assert Match(3).joined(Match(4)) is None
    assert Match(None, "a").joined(Match(None, "b")) is None
    assert Match(None, "", "u").joined(Match(None, "", "v")) is None
