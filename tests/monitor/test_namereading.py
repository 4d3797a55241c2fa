"""What is read from file names."""

from __future__ import annotations

from itertools import product

import pytest

from monitor.namereading import group_names, merge_fields, stride


@pytest.mark.parametrize(
    ("names", "pattern", "steps", "parts"),
    [
        (["out/h_000010.npy", "out/h_000020.npy"], "out/h_{step}.npy", (10, 20), ()),
        (["h_9.npy", "h_10.npy", "h_100.npy"], "h_{step}.npy", (9, 10, 100), ()),
        (
            [f"d/u_{s}_p{p}.npz" for s, p in product((0, 50), range(3))],
            "d/u_{step}_p{part}.npz",
            (0, 50),
            ("0", "1", "2"),
        ),
        (
            [f"rank{p:02d}/step{s}.h5" for p, s in product(range(2), (1, 2, 3))],
            "rank{part}/step{step}.h5",
            (1, 2, 3),
            ("00", "01"),
        ),
        (
            ["out/0100/h_0100.npy", "out/0200/h_0200.npy"],
            "out/{step}/h_*.npy",
            (100, 200),
            (),
        ),
        (["run2/h_1.npy", "run2/h_2.npy"], "run2/h_{step}.npy", (1, 2), ()),
        (["odd[1]_5.npy", "odd[1]_6.npy"], "odd?1?_{step}.npy", (5, 6), ()),
    ],
)
def test_patterns(names: list[str], pattern: str, steps: tuple, parts: tuple) -> None:
    """A varying number is the step, or the part where its name or a full grid says so; numbers that
    do not vary stay as they are, and characters with a meaning in patterns become "?"."""
    (group,) = group_names(reversed(names))
    assert (group.pattern, group.steps, group.parts) == (pattern, steps, parts)


def test_steps_order_the_names_as_numbers() -> None:
    """10 comes after 9, whatever the alphabet says."""
    (group,) = group_names(["h_10.npy", "h_9.npy", "h_100.npy"])
    assert group.names == ("h_9.npy", "h_10.npy", "h_100.npy")


def test_a_time_in_the_name_is_no_step() -> None:
    """T_0.10.npy and T_0.25.npy carry a time; its digits must not be taken for steps."""
    (group,) = group_names(["T_0.10.npy", "T_1.25.npy"])
    assert group.dated
    assert group.steps == ()
    assert group.pattern == "T_*.*.npy"


def test_a_name_alone_stays_as_it_is() -> None:
    """One growing file has no step in its name."""
    (group,) = group_names(["history2.h5"])
    assert (group.pattern, group.steps) == ("history2.h5", ())


def test_fields_merge_where_one_word_differs() -> None:
    """h_, u_ and v_ files of the same steps are three fields of one pattern."""
    names = [f"out/{f}_{s}.npy" for f, s in product("huv", (10, 20))]
    merged = merge_fields(group_names(names))
    assert merged is not None
    assert (merged.pattern, merged.fields) == ("out/{field}_{step}.npy", ("h", "u", "v"))


@pytest.mark.parametrize(
    "names",
    [
        ["h_10.npy", "h_20.npy", "u_10.npy", "u_30.npy"],
        ["h_10.npy", "h_20.npy", "u_10.npz", "u_20.npz"],
        ["a/h_10.npy", "a/h_20.npy", "b/u_10.npy", "b/u_20.npy"],
        ["h_10.npy", "h_20.npy"],
    ],
)
def test_unlike_groups_do_not_merge(names: list[str]) -> None:
    """Other steps, another suffix, two differing words, or nothing to merge with."""
    assert merge_fields(group_names(names)) is None


def test_fields_in_folders_merge_too() -> None:
    """One folder per field is as good as one prefix per field."""
    merged = merge_fields(group_names(["h/10.npy", "h/20.npy", "u/10.npy", "u/20.npy"]))
    assert merged is not None
    assert merged.pattern == "{field}/{step}.npy"


def test_stride_is_the_commonest_gap() -> None:
    """A missing file does not change the stride; one step has none."""
    assert stride((0, 10, 20, 40, 50)) == 10
    assert stride((7,)) == 0
