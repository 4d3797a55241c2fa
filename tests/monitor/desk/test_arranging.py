"""Which part stands where."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from monitor.desk.arranging import KEYS, LEFT, RIGHT, VERDICT, arrange, folded

ALL = {key for key, _ in LEFT + RIGHT}


def test_a_small_terminal_shows_one_part_and_the_verdict() -> None:
    """80 x 24: nine lines of verdict, fourteen of the part, one of keys."""
    places = arrange(80, 24, "w", alone=False)
    assert places == {VERDICT: (0, 0, 80, 9), "w": (0, 9, 80, 14), KEYS: (0, 23, 80, 1)}


def test_a_large_terminal_shows_all_of_them() -> None:
    """120 x 40: every part at once; alone only the chosen one; settings have no place besides."""
    assert set(arrange(120, 40, "g", alone=False)) == ALL | {VERDICT, KEYS}
    assert set(arrange(120, 40, "l", alone=True)) == {"l", VERDICT, KEYS}
    assert set(arrange(120, 40, "s", alone=False)) == {"s", VERDICT, KEYS}


@given(st.integers(1, 250), st.integers(1, 80), st.sampled_from([*sorted(ALL), "s"]), st.booleans())
def test_parts_fill_the_screen_and_never_overlap(w: int, h: int, key: str, alone: bool) -> None:
    """At any size: each cell belongs to at most one part, nothing reaches outside."""
    seen: set[tuple[int, int]] = set()
    for x, y, width, height in arrange(w, h, key, alone).values():
        assert min(x, y) >= 0
        cells = {(a, b) for a in range(x, x + width) for b in range(y, y + height)}
        assert not cells & seen
        assert x + width <= w
        assert y + height <= h
        seen |= cells
    if h >= 3:
        # One column is left free between the two halves.
        assert len(seen) >= w * h - (0 if folded(w, h) or alone else h)
