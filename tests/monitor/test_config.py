"""Settings: what is accepted, and that every problem is told, at once and with a way out."""

from __future__ import annotations

import types
from pathlib import Path
from typing import Any, Union, get_args, get_origin

import msgspec
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.config import (
    AlarmSection,
    Settings,
    StopStep,
    checked,
    from_options,
    load,
    log_path,
    watch_spec,
)
from monitor.settings_rules import BOUNDS, FREE, Bounds
from probes.errors import SettingsError
from probes.limits.spec import SchemeSpec, TermSpec
from probes.spec import FieldSpec, HistorySpec, RawSpec, SnapshotSpec

WHOLE = """
[run]
name = "tide in the basin"
log = "watch/growth.jsonl"
pid = 4711
last_step = 100000
end_file = "run-ended"
end_command = ["squeue", "--job", "12"]
idle_seconds = 3600

[snapshots]
pattern = "out/h_{step}.npy"
step_factor = 10
settle_seconds = 0.5

[fields.h]
spacing = [0.5, 0.5]
ghost = 2
periodic = [true, false]
min = -3
max = 3.0

[fields."flow/u"]
ghost = [1, 2]
components = "last"

[checkpoints]
pattern = ["restart/a.h5", "restart/b.h5"]
companions = "restart/state.txt"

[sketch]
tile = 16

[estimate]
crops = 4

[alarm]
decades = 2.5
run_length = 1e6

[pins]
provisional = 2

[[stop]]
do = "file"
path = "STOP"

[[stop]]
do = "signal"
signal = "USR1"
wait_seconds = 300

[notify]
command = ["mail-me", "--quietly"]
"""


def write(folder: Path, text: str) -> Path:
    path = folder / "stepwarden.toml"
    path.write_text(text, encoding="utf-8")
    return path


def problems(folder: Path, text: str) -> list[str]:
    """Lines of the report on a file, without the name of the file."""
    path = write(folder, text)
    with pytest.raises(SettingsError) as caught:
        load(path)
    lines = str(caught.value).splitlines()
    assert all(line.startswith(f"{path}: ") for line in lines)
    return [line.removeprefix(f"{path}: ") for line in lines]


def problem(folder: Path, section: str, text: str) -> str:
    """The one problem of a file with a good pattern and this section."""
    start = "" if section == "snapshots" else '[snapshots]\npattern = "a.npy"\n'
    head = f"[[{section}]]" if section == "stop" else f"[{section}]"
    found = problems(folder, f"{start}{head}\n{text}\n")
    assert len(found) == 1, found
    return found[0]


# --- what is accepted -----------------------------------------------------------------------


def test_a_whole_file(tmp_path: Path) -> None:
    """Every section with keys of every kind; whole numbers stand for numbers, one text for a list
    of one, and what is not given keeps its default."""
    got = load(write(tmp_path, WHOLE))
    assert got.run.idle_seconds == 3600.0
    assert got.run.end_command == ("squeue", "--job", "12")
    assert got.snapshots == SnapshotSpec(
        pattern=("out/h_{step}.npy",), step_factor=10, settle_seconds=0.5
    )
    assert got.fields == {
        "h": FieldSpec(spacing=(0.5, 0.5), ghost=2, periodic=(True, False), min=-3.0, max=3.0),
        "flow/u": FieldSpec(ghost=(1, 2), components="last"),
    }
    assert got.checkpoints.pattern == ("restart/a.h5", "restart/b.h5")
    assert got.checkpoints.companions == ("restart/state.txt",)
    assert got.alarm == AlarmSection(decades=2.5, run_length=1e6)
    assert got.stop == (
        StopStep(do="file", path="STOP"),
        StopStep(do="signal", signal="USR1", wait_seconds=300.0),
    )
    assert checked(got) is got


def test_a_pattern_is_enough(tmp_path: Path) -> None:
    """Everything else has a default, and by default nothing is stopped."""
    got = load(write(tmp_path, '[snapshots]\npattern = "h.npy"\n'))
    assert got == Settings(snapshots=SnapshotSpec(pattern=("h.npy",)))
    assert got.stop == ()


def test_the_defaults_keep_the_rules() -> None:
    """No default breaks a rule of its own section."""
    raw = RawSpec(shape=(4, 5))
    snapshots = SnapshotSpec(pattern=("h.npy",), raw=raw)
    plain = Settings(snapshots=snapshots, fields={"h": FieldSpec()})
    assert checked(plain) is plain


def test_a_file_saved_with_a_byte_order_mark(tmp_path: Path) -> None:
    """Some editors put one at the beginning; it is no part of the text."""
    path = tmp_path / "stepwarden.toml"
    path.write_bytes(b"\xef\xbb\xbf" + b'[snapshots]\npattern = "h.npy"\n')
    assert load(path).snapshots.pattern == ("h.npy",)


def test_paths_start_from_the_files_folder(tmp_path: Path) -> None:
    """The reading process gets the absolute folder, patterns stay as written; the log is put into
    that folder unless its path is absolute."""
    got = load(write(tmp_path, WHOLE))
    spec = watch_spec(got, tmp_path / "x" / "..")
    assert spec.folder == str(tmp_path)
    assert (spec.snapshots, spec.fields, spec.sketch) == (got.snapshots, got.fields, got.sketch)
    assert log_path(got, tmp_path) == tmp_path / "watch" / "growth.jsonl"
    elsewhere = from_options(["h.npy"], log="/var/tmp/growth.jsonl")
    assert log_path(elsewhere, tmp_path) == Path("/var/tmp/growth.jsonl")


def test_options_make_the_same_settings(tmp_path: Path) -> None:
    """Patterns, fields, log and overriding tables give what a file with them gives."""
    file = load(
        write(
            tmp_path,
            """
            [run]
            log = "g.jsonl"
            name = "basin"
            [snapshots]
            pattern = ["a_{step}.npy", "b_{step}.npy"]
            step_factor = 5
            [fields.h]
            scale = 2.0
            [fields.u]
            """,
        )
    )
    given = from_options(
        ["a_{step}.npy", "b_{step}.npy"],
        ["h", "u"],
        {
            "run": {"name": "basin"},
            "snapshots": {"step_factor": 5},
            "fields": {"h": {"scale": 2.0}},
        },
        log="g.jsonl",
    )
    assert given == file


def test_options_are_checked_like_a_file() -> None:
    """The report names the options as its source."""
    with pytest.raises(SettingsError) as caught:
        from_options(["a_{stp}.npy"], [], {"alarm": {"decade": 3}})
    assert str(caught.value).splitlines() == [
        "options: [alarm] decade: unknown key; did you mean 'decades'?",
        'options: [snapshots] pattern: unknown place-holder {stp} in "a_{stp}.npy"; '
        "did you mean {step}?",
    ]


def test_settings_put_together_are_checked() -> None:
    """What was replaced in good settings is judged by the same rules."""
    good = from_options(["h.npy"])
    bad = msgspec.structs.replace(good, stop=(StopStep(do="signal", signal="SIGTERM"),))
    with pytest.raises(SettingsError, match="did you mean 'TERM'"):
        checked(bad)


# --- what is not ----------------------------------------------------------------------------


def test_every_problem_in_one_report(tmp_path: Path) -> None:
    """Unknown names, wrong types and values out of range, in all sections, are told together."""
    found = problems(
        tmp_path,
        """
        pattern = "x"
        [snapshot]
        [snapshots]
        pattern = "a.npy"
        poll_seconds = -1
        record_axis = "maybe"
        [alarm]
        decade = 3
        decades = -2.0
        held = "x"
        [fields.u]
        ghost = [1, -2]
        [[stop]]
        do = "comand"
        [[stop]]
        do = "file"
        [pins]
        enabled = 1
        """,
    )
    assert found == [
        "pattern: stands outside any section; it belongs to [snapshots]",
        "[snapshot]: unknown section; did you mean 'snapshots'?",
        '[snapshots] record_axis: must be one of "auto", "yes", "no", not "maybe"',
        "[alarm] decade: unknown key; did you mean 'decades'?",
        '[alarm] held: must be a whole number, not "x"',
        '[[stop]] number 1 do: must be one of "file", "command", "signal", not "comand"; '
        'did you mean "command"?',
        "[pins] enabled: must be true or false, not 1",
        "[snapshots] poll_seconds: must be 0 or more, not -1.0",
        "[alarm] decades: must be over 0, not -2.0",
        "[fields.u] ghost: must be 0 or more, not [1, -2]",
        "[[stop]] number 2 path: must name the file that the solver looks for",
    ]


def test_one_problem_is_one_line(tmp_path: Path) -> None:
    """What, where and what next, as for any other error."""
    path = write(tmp_path, '[snapshots]\npattern = "a.npy"\n[alarm]\ndecade = 2\n')
    with pytest.raises(SettingsError) as caught:
        load(path)
    error = caught.value
    assert (error.what, error.where) == ("[alarm] decade: unknown key", str(path))
    assert error.remedy == "did you mean 'decades'?"


def test_without_snapshots_the_rest_is_judged_all_the_same(tmp_path: Path) -> None:
    """A file without its one required section gets a full report."""
    found = problems(tmp_path, "[alarm]\nheld = 0\n")
    assert found == ["[snapshots] pattern: must be given", "[alarm] held: must be 1 or more, not 0"]


@pytest.mark.parametrize(
    ("section", "text", "told"),
    [
        ("snapshots", "pattern = []", 'names no files; write for example "out/h_{step}.npy"'),
        ("snapshots", 'pattern = ["a.npy", " "]', "must not be empty"),
        ("snapshots", "pattern = 3", "must be a list of texts in quotes, not 3"),
        ("snapshots", 'pattern = "h_{step.npy"', 'a brace in "h_{step.npy" has no partner'),
        ("snapshots", 'pattern = "h_{}.npy"', "unknown place-holder {} in"),
        ("snapshots", 'pattern = "h\\u0007.npy"', "holds control characters"),
        ("snapshots", 'pattern = "a"\nstep = "attribute:"', 'must be "auto", "name", "none", "'),
        ("snapshots", 'pattern = "a"\ntime = "name"', '"dataset:PATH", not "name"'),
        ("snapshots", 'pattern = "a"\nsettle_seconds = -2', "must be -1, or 0 or more, not -2"),
        ("snapshots", 'pattern = "a"\nstep_factor = 0', "must be 1 or more, not 0"),
        ("snapshots", 'pattern = "a"\nstale_seconds = nan', "must be finite, not nan"),
        ("snapshots", 'pattern = "a"\nparts = 99999999999999999999', "is too large"),
        ("snapshots", 'pattern = "a"\nformat = "raw"', "needs a section that describes the file"),
        ("fields", 'u = "all"', 'must be a section of keys, not "all"'),
        ("fields.u", "ghost = -1", "must be 0 or more, not -1"),
        ("fields.u", "spacing = [1, 0]", "must be over 0, not [1.0, 0.0]"),
        ("fields.u", "spacing = 1.0", "must be a list of numbers, not 1.0"),
        ("fields.u", "min = 2\nmax = 2", "must be less than max, but 2 is not less than 2"),
        ("fields.u", "spacing = [1, 1]\norigin = [0]", "on the number of axes: spacing 2"),
        ("histories.e", "column = 3", "[histories.e] path: must be given"),
        ("histories.e", 'path = ""\ncolumn = 3', "must name a text file"),
        ("histories.e", 'path = "a"', 'must say which number of a line is meant; write for'),
        ("histories.e", 'path = "a"\ncolumn = 0', "columns are counted from 1, not 0"),
        ("histories.e", 'path = "a"\ncolumn = 1\nstep = 1.5', "text in quotes or a whole number"),
        ("histories.e", 'path = "a"\npattern = "("', '"(" is no regular expression: '),
        ("histories.e", 'path = "a"\npattern = "x"', "has no group named value; write for example"),
        ("histories.e", "path = 'a'\npattern = ['(?P<value>.)', '(?P<steps>.)']", "mean 'step'?"),
        ("histories.e", "path = 'a'\npattern = '(?P<value>.)'\nstep = 1", "beside a pattern"),
        ("histories.e", 'path = "a"\ncolumn = 1\nmin = 1\nmax = 0', "must be less than max"),
        ("histories.e", 'path = "a"\ncolumn = 1\nstep_factor = 0', "must be 1 or more, not 0"),
        ("histories.e", 'path = "a"\ncolumn = 1\nalarm = 1', "must be true or false, not 1"),
        ("histories", "e = 1", "must be a section of keys, not 1"),
        ("fields.'v[1]'", "scale = 1", "share its settings; write [fields.v]"),
        ("fields.u", 'components = "frist"', 'did you mean "first"?'),
        ("run", "idle_seconds = -1", "must be 0 or more"),
        ("run", 'log = ""', "must not be empty"),
        ("run", 'end_command = "test -f x"', 'write it word by word, like ["test", "-f", "x"]'),
        ("run", 'end_command = ["", "x"]', "the first word must name a program"),
        ("run", "pid = true", "must be a whole number, not true"),
        ("run", "name = 2026-03-04", "must be a text in quotes, not 2026-03-04"),
        ("checkpoints", 'companions = "x"', "must be given where there are companions"),
        ("checkpoints", 'pattern = "{sept}"', "did you mean {step}?"),
        ("sketch", "tile = 2", "must be 0, or between 4 and 4096, not 2"),
        ("sketch", "columns = -1", "not -1"),
        ("sketch", "budget_mb = 0", "must be 1 or more, not 0"),
        ("estimate", "crops = 9", "must be between 0 and 8, not 9"),
        ("alarm", "run_length = 1", "must be over 1, not 1"),
        ("alarm", "cells = inf", "must be finite, not inf"),
        ("pins", "budget_gb = 0", "must be over 0"),
        ("stop", 'wait_seconds = 1', "[[stop]] number 1 do: must be given"),
        ("stop", 'do = "command"', "must be a program and its arguments"),
        ("stop", 'do = "signal"\nsignal = "SIGUSR1"', "did you mean 'USR1'?"),
        ("stop", 'do = "file"\npath = "x"\nsignal = "HUP"', 'no meaning with do = "file"'),
        ("stop", 'do = "file"\npath = "x"\naction = "write"', "must say what to write"),
        ("notify", "wait_seconds = 0", "must be over 0"),
        ("notify", 'comand = ["x"]', "did you mean 'command'?"),
        ("weather", "", "unknown section; known are snapshots, run"),
    ],
)  # fmt: skip
def test_a_single_problem(tmp_path: Path, section: str, text: str, told: str) -> None:
    """Each kind of mistake, alone, gives one line that names its place and says what is wanted."""
    found = problem(tmp_path, section, text)
    assert told in found
    assert found.startswith("[")


RAW = '[snapshots]\npattern = "a.bin"\n[snapshots.raw]\n'


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("", "[snapshots.raw] shape: must be given"),
        ("shape = [4, 0]", "[snapshots.raw] shape: must be 1 or more, not [4, 0]"),
        ("shape = []", "[snapshots.raw] shape: must hold one to four numbers of cells"),
        ('shape = [4]\ndtype = "f8"', 'write "<f8" (PC) or ">f8" (big-endian)'),
        ('shape = [4]\ndtype = "<f3"', '"<f3" is no number type; write for example "<f8"'),
        ('shape = [4]\ndtype = "object"', '"object" is no number type'),
        ('shape = [4]\norder = "X"', '[snapshots.raw] order: must be one of "C", "F", not "X"'),
        ("shape = [4]\nheader_bytes = -4", "[snapshots.raw] header_bytes: must be 0 or more"),
        ('shape = [4]\nfields = ["u", "u"]', 'names a field twice: ["u", "u"]'),
        ('shape = [4]\nfields = [""]', "must name every field"),
    ],
)
def test_problems_of_a_raw_layout(tmp_path: Path, text: str, told: str) -> None:
    """The layout of a headerless file is checked as far as that is possible without it."""
    found = problems(tmp_path, RAW + text)
    assert len(found) == 1
    assert told in found[0]


@pytest.mark.parametrize("dtype", ["<f2", ">f4", "<f8", ">c16", "<i4", "|u1", "u1", ">i8"])
def test_number_types_that_numpy_knows_are_taken(tmp_path: Path, dtype: str) -> None:
    """Types that the rule lets through are NumPy types of that size (NumPy is the reference)."""
    import numpy as np

    got = load(write(tmp_path, f'{RAW}shape = [4]\ndtype = "{dtype}"\n')).snapshots.raw
    assert got is not None
    assert np.dtype(got.dtype).itemsize == int(dtype.lstrip("<>|fciu"))


def test_a_raw_layout_and_another_format_disagree(tmp_path: Path) -> None:
    """A file cannot be headerless and of some format."""
    text = '[snapshots]\npattern = "a"\nformat = "npy"\n[snapshots.raw]\nshape = [4]\n'
    (found,) = problems(tmp_path, text)
    assert found.endswith('write format = "raw" or leave this section out')


@pytest.mark.parametrize("name", ["stop", "fields", "alarm"])
def test_a_value_where_a_section_belongs(tmp_path: Path, name: str) -> None:
    """A key of a section's name outside any section is told, with how sections are written."""
    (found,) = problems(tmp_path, f'{name} = "x"\n[snapshots]\npattern = "a"\n')
    assert found.startswith(f"[{name}]: must ")


def test_hostile_keys_and_values_are_shown_escaped(tmp_path: Path) -> None:
    """Control characters from the file never reach the terminal."""
    found = problems(
        tmp_path,
        '[snapshots]\npattern = "a"\nformat = 1\n"\\u001b[31m" = 2\nstep = "\\u001b[2J\\n"\n',
    )
    assert len(found) == 3
    assert all(line.isprintable() for line in found)


@pytest.mark.parametrize(
    ("content", "told"),
    [
        (b"[snapshots\n", "is not valid TOML: "),
        (b"[a]\nb = 1\nb = 2\n", "is not valid TOML: Cannot overwrite a value (at line 3"),
        (b"a = " + b"[" * 5000, "is not valid TOML: too deeply nested"),
        (b"\xff\xfe\x00", "is not text in UTF-8"),
        (b"#" * (2 << 20), "is too long for a settings file"),
    ],
    ids=["syntax", "twice", "nested", "binary", "long"],
)
def test_files_that_are_no_settings(tmp_path: Path, content: bytes, told: str) -> None:
    """Whatever the file holds, the answer is one clear error that names it."""
    path = tmp_path / "stepwarden.toml"
    path.write_bytes(content)
    with pytest.raises(SettingsError) as caught:
        load(path)
    assert told in str(caught.value)
    assert str(caught.value).startswith(str(path))


def test_files_that_are_not_there(tmp_path: Path) -> None:
    """A missing file is told with a way to get one, a folder as what it is."""
    with pytest.raises(SettingsError, match="there is no such settings file; `stepwarden scout"):
        load(tmp_path / "stepwarden.toml")
    with pytest.raises(SettingsError, match="Is a directory"):
        load(tmp_path)


_TABLES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3)
    | st.dictionaries(
        st.sampled_from(
            ["snapshots", "pattern", "raw", "shape", "dtype", "fields", "ghost", "stop", "do",
             "command", "alarm", "decades", "spacing", "step", "x"]
        ),
        inner,
        max_size=5,
    ),
    max_leaves=20,
)  # fmt: skip


@settings(deadline=None, max_examples=300)
@given(st.dictionaries(st.sampled_from(Settings.__struct_fields__), _TABLES, max_size=6))
def test_any_tables_give_settings_or_a_report(tables: dict[str, Any]) -> None:
    """No shape of input gets past the checks or ends in another error."""
    try:
        got = from_options(["h.npy"], [], tables)
    except SettingsError as error:
        told = str(error)
    else:
        told = ""
        assert checked(got) is got
    assert all(line.startswith("options: ") for line in told.splitlines())


# --- the rules themselves -------------------------------------------------------------------


def sections() -> dict[str, type[msgspec.Struct]]:
    found = {f.name: f.type for f in msgspec.structs.fields(Settings)}
    own = {"fields": FieldSpec, "histories": HistorySpec, "stop": StopStep, "raw": RawSpec}
    return found | own | {"scheme": SchemeSpec, "terms": TermSpec}


def is_numeric(kind: Any) -> bool:
    if get_origin(kind) in (Union, types.UnionType, tuple):
        return any(is_numeric(inner) for inner in get_args(kind))
    return kind in (int, float)


def test_every_number_has_its_bounds() -> None:
    """A numeric key without a stated range (or leave to have none) would be accepted unseen."""
    for name, section in sections().items():
        numeric = {f.name for f in msgspec.structs.fields(section) if is_numeric(f.type)}
        assert numeric == set(BOUNDS.get(name, {})) | set(FREE.get(name, ())), name


@pytest.mark.parametrize(
    ("bounds", "good", "bad"),
    [
        (Bounds(), (0, 0.5, 1e300), (-1e-300,)),
        (Bounds(over=True), (1e-300,), (0, -1)),
        (Bounds(2, 5), (2, 5), (1.999, 5.001)),
        (Bounds(4, 9, also=0), (0, 4, 9), (-1, 1, 3.9, 10)),
    ],
)
def test_bounds(bounds: Bounds, good: tuple[float, ...], bad: tuple[float, ...]) -> None:
    """Ends are inside, except the lower one of an open range; one value may be allowed besides."""
    assert all(bounds.allow(n) for n in good)
    assert not any(bounds.allow(n) for n in bad)
