"""What settings of the right type must fulfil besides."""

from __future__ import annotations

import re
import signal
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from typing import TYPE_CHECKING, Any

import msgspec

from monitor.settings_report import Problem, numbered_place, section_place, shown
from probes.spec import FieldSpec, HistorySpec, RawSpec, SnapshotSpec

if TYPE_CHECKING:
    from monitor.config import CheckpointSection, StopStep

PLACE_HOLDERS = ("step", "part", "field")


@dataclass(frozen=True, slots=True)
class Bounds:
    """Numbers allowed for a key: low <= n <= high (low < n where `over`), and n == `also`."""

    low: float = 0.0
    high: float = float("inf")
    over: bool = False
    also: float | None = None

    def allow(self, n: float) -> bool:
        if n == self.also:
            return True
        return n <= self.high and (n > self.low if self.over else n >= self.low)

    def __str__(self) -> str:
        text = f"over {self.low:g}" if self.over else f"{self.low:g} or more"
        if self.high < float("inf"):
            text = f"between {self.low:g} and {self.high:g}"
        return text if self.also is None else f"{self.also:g}, or {text}"


_NOT_NEGATIVE = Bounds()
_POSITIVE = Bounds(over=True)
_FROM_ONE = Bounds(1)

# Every numeric key of every section stands here or in FREE.
BOUNDS: dict[str, dict[str, Bounds]] = {
    "snapshots": {
        "step_factor": _FROM_ONE,
        "parts": _NOT_NEGATIVE,
        "settle_seconds": Bounds(also=-1),
        "poll_seconds": _NOT_NEGATIVE,
        "stale_seconds": _NOT_NEGATIVE,
    },
    "raw": {"shape": _FROM_ONE, "header_bytes": _NOT_NEGATIVE, "gap_bytes": _NOT_NEGATIVE},
    "fields": {
        "ghost": _NOT_NEGATIVE,
        "scale": _NOT_NEGATIVE,
        "spacing": _POSITIVE,
        "growth_per_time": _NOT_NEGATIVE,
    },
    "histories": {"step_factor": _FROM_ONE},
    "run": {"pid": _NOT_NEGATIVE, "last_step": _NOT_NEGATIVE, "idle_seconds": _NOT_NEGATIVE},
    "checkpoints": {"parts": _NOT_NEGATIVE},
    "sketch": {
        "tile": Bounds(4, 4096, also=0),
        "columns": Bounds(2, 64, also=0),
        "max_tiles": _FROM_ONE,
        "seed": _NOT_NEGATIVE,
        "budget_mb": _FROM_ONE,
    },
    "estimate": {"krylov": Bounds(2, 32), "history": Bounds(8, 100_000), "crops": Bounds(0, 8)},
    "alarm": {
        "run_length": Bounds(1, over=True),
        "decades": _POSITIVE,
        "straight": _POSITIVE,
        "cells": Bounds(2),
        "mode_cells": Bounds(2),
        "held": _FROM_ONE,
        "calm": _FROM_ONE,
    },
    "pins": {"provisional": _NOT_NEGATIVE, "budget_gb": _POSITIVE},
    "stop": {"wait_seconds": _POSITIVE},
    "notify": {"wait_seconds": _POSITIVE},
    "scheme": {
        "step": _NOT_NEGATIVE,
        "cells": _FROM_ONE,
        "stages": _NOT_NEGATIVE,
        "damping": Bounds(also=-1),
        "order": Bounds(1, 2),
        "filter": Bounds(0, 0.5),
    },
}
FREE = {
    "fields": ("fill", "origin", "min", "max"),
    # Columns are judged below: a number from 1, or a heading.
    "histories": ("column", "step", "time", "min", "max"),
    # Judged where they are put together: probes.limits.building and probes.limits.scheme.
    "scheme": ("spacing", "tableau", "weights", "polynomial"),
    "terms": (
        ("velocity", "coefficient", "speed", "rate") + ("offsets", "weights", "matrices", "source")
    ),
}


def broken_rules(sections: Mapping[str, Any]) -> Iterator[Problem]:
    """Problems of sections by their key in the file; those that are missing are not judged."""
    for name, section in sections.items():
        if name == "fields":
            for field, spec in section.items():
                yield from _within(spec, "fields", section_place("fields", field))
                yield from _field(field, spec)
        elif name == "histories":
            for history, about in section.items():
                yield from _within(about, "histories", section_place("histories", history))
                yield from _history(history, about)
        elif name == "stop":
            for n, rung in enumerate(section, 1):
                if rung is msgspec.UNSET:
                    continue
                yield from _within(rung, "stop", numbered_place("stop", n))
                yield from _rung(rung, numbered_place("stop", n))
        elif section is not None:
            yield from _within(section, name, section_place(name))
    if "snapshots" in sections:
        yield from _snapshots(sections["snapshots"])
    if "checkpoints" in sections:
        yield from _checkpoints(sections["checkpoints"])
    for name, keys in (("run", ("log",)), ("pins", ("folder",))):
        for key in keys if name in sections else ():
            if not getattr(sections[name], key).strip():
                yield Problem(f"{section_place(name)} {key}", "must not be empty")
    for name, key in (("run", "end_command"), ("notify", "command")):
        if name in sections:
            yield from _command(getattr(sections[name], key), f"{section_place(name)} {key}")


def _within(section: msgspec.Struct, name: str, place: str) -> Iterator[Problem]:
    for key, bounds in BOUNDS[name].items():
        value = getattr(section, key)
        for n in value if isinstance(value, tuple) else (value,):
            if not bounds.allow(n):
                yield Problem(f"{place} {key}", f"must be {bounds}, not {shown(value)}")
                break


# --- snapshots and checkpoints --------------------------------------------------------------


def _snapshots(spec: SnapshotSpec) -> Iterator[Problem]:
    place = "[snapshots]"
    yield from _patterns(spec.pattern, f"{place} pattern")
    if not spec.pattern:
        yield Problem(f"{place} pattern", "names no files", 'write for example "out/h_{step}.npy"')
    if not spec.format.strip():
        yield Problem(f"{place} format", "must not be empty", 'write "auto" or a reader\'s name')
    yield from _source(spec.step, f"{place} step", ("auto", "name", "none"))
    yield from _source(spec.time, f"{place} time", ("auto", "none"))
    if spec.raw is not None:
        yield from _within(spec.raw, "raw", "[snapshots.raw]")
        yield from _raw(spec.raw)
        if spec.format not in ("auto", "raw"):
            what = f"describes a headerless file, but [snapshots] format is {shown(spec.format)}"
            yield Problem("[snapshots.raw]", what, 'write format = "raw" or leave this section out')
    elif spec.format == "raw":
        what = 'format = "raw" needs a section that describes the file'
        yield Problem("[snapshots.raw]", what, "give at least shape and dtype")


def _checkpoints(section: CheckpointSection) -> Iterator[Problem]:
    yield from _patterns(section.pattern, "[checkpoints] pattern")
    yield from _patterns(section.companions, "[checkpoints] companions")
    if section.companions and not section.pattern:
        yield Problem("[checkpoints] pattern", "must be given where there are companions")


def _patterns(patterns: tuple[str, ...], place: str) -> Iterator[Problem]:
    for pattern in patterns:
        if not pattern.strip():
            yield Problem(place, "must not be empty")
            continue
        if any(ord(c) < 32 or ord(c) == 127 for c in pattern):
            yield Problem(place, f"{shown(pattern)} holds control characters")
        names = re.findall(r"\{([^{}]*)\}", pattern)
        for name in names:
            if name not in PLACE_HOLDERS:
                near = get_close_matches(name, PLACE_HOLDERS, 1)
                known = ", ".join(f"{{{p}}}" for p in PLACE_HOLDERS)
                remedy = f"did you mean {{{near[0]}}}?" if near else f"known are {known}"
                yield Problem(place, f"unknown place-holder {{{name}}} in {shown(pattern)}", remedy)
        if re.search(r"[{}]", re.sub(r"\{[^{}]*\}", "", pattern)):
            yield Problem(place, f"a brace in {shown(pattern)} has no partner")


def _source(value: str, place: str, words: tuple[str, ...]) -> Iterator[Problem]:
    prefix, colon, rest = value.partition(":")
    if value in words or (colon and prefix in ("attribute", "dataset") and rest.strip()):
        return
    known = ", ".join(f'"{word}"' for word in words)
    yield Problem(place, f'must be {known}, "attribute:NAME" or "dataset:PATH", not {shown(value)}')


# Kinds of numbers by their letter: sizes in bytes.
_SIZES = {"f": (2, 4, 8), "c": (8, 16), "i": (1, 2, 4, 8), "u": (1, 2, 4, 8)}


def _raw(raw: RawSpec) -> Iterator[Problem]:
    place = "[snapshots.raw]"
    if not 1 <= len(raw.shape) <= 4:
        yield Problem(f"{place} shape", "must hold one to four numbers of cells")
    found = re.fullmatch(r"([<>|=]?)([fciu])(\d+)", raw.dtype)
    if found is None or int(found[3]) not in _SIZES[found[2]]:
        what = f"{shown(raw.dtype)} is no number type"
        yield Problem(f"{place} dtype", what, 'write for example "<f8", ">f4" or "<c16"')
    elif found[1] not in ("<", ">") and found[3] != "1":
        what = f"{shown(raw.dtype)} does not say the order of bytes"
        remedy = f'write "<{found[2]}{found[3]}" (PC) or ">{found[2]}{found[3]}" (big-endian)'
        yield Problem(f"{place} dtype", what, remedy)
    if not raw.fields or not all(name.strip() for name in raw.fields):
        yield Problem(f"{place} fields", "must name every field of the file")
    if len(set(raw.fields)) < len(raw.fields):
        yield Problem(f"{place} fields", f"names a field twice: {shown(raw.fields)}")


# --- fields ---------------------------------------------------------------------------------


def _field(name: str, spec: FieldSpec) -> Iterator[Problem]:
    place = section_place("fields", name)
    if not name.strip():
        yield Problem(place, "a field needs a name")
    if "[" in name:
        remedy = f"write [fields.{name.split('[')[0] or 'NAME'}]"
        yield Problem(place, "components of a field share its settings", remedy)
    yield from _ends(spec, place)
    lengths = {
        key: len(value)
        for key in ("ghost", "spacing", "origin", "periodic")
        if isinstance(value := getattr(spec, key), tuple) and value
    }
    if len(set(lengths.values())) > 1:
        told = ", ".join(f"{key} {n}" for key, n in lengths.items())
        yield Problem(place, f"values per axis disagree on the number of axes: {told}")


def _ends(spec: FieldSpec | HistorySpec, place: str) -> Iterator[Problem]:
    if spec.min is not None and spec.max is not None and spec.min >= spec.max:
        what = f"must be less than max, but {spec.min:g} is not less than {spec.max:g}"
        yield Problem(f"{place} min", what)


# --- histories ------------------------------------------------------------------------------

_GROUPS = ("value", "step", "time")


def _history(name: str, spec: HistorySpec) -> Iterator[Problem]:
    place = section_place("histories", name)
    if not name.strip():
        yield Problem(place, "a history needs a name")
    if not spec.path.strip():
        yield Problem(f"{place} path", "must name a text file")
    yield from _ends(spec, place)
    for key in ("column", "step", "time"):
        value = getattr(spec, key)
        if isinstance(value, int) and value < 1:
            yield Problem(f"{place} {key}", f"columns are counted from 1, not {shown(value)}")
        elif value != "" and spec.pattern:
            yield Problem(f"{place} {key}", "has no meaning beside a pattern, whose groups tell it")
    if not spec.pattern and spec.column == "":
        remedy = 'write for example column = "energy", column = 3 or a pattern'
        yield Problem(f"{place} column", "must say which number of a line is meant", remedy)
    found: set[str] = set()
    for pattern in spec.pattern:
        try:
            found |= set(re.compile(pattern).groupindex)
        except re.error as error:
            what = f"{shown(pattern)} is no regular expression: {error}"
            yield Problem(f"{place} pattern", what)
            return
    if spec.pattern and "value" not in found:
        remedy = "write for example 'energy = (?P<value>\\S+)'"
        yield Problem(f"{place} pattern", "has no group named value", remedy)
    for group in sorted(found - set(_GROUPS)):
        near = get_close_matches(group, _GROUPS, 1)
        remedy = f"did you mean '{near[0]}'?" if near else f"known are {', '.join(_GROUPS)}"
        yield Problem(f"{place} pattern", f"unknown group {shown(group)}", remedy)


# --- commands and the stop ladder -----------------------------------------------------------

# Which keys belong to which way of stopping.
_RUNG_KEYS = {"file": ("path", "action", "text"), "command": ("command",), "signal": ("signal",)}
_SIGNALS = sorted(s.name.removeprefix("SIG") for s in signal.Signals)


def _command(words: tuple[str, ...], place: str) -> Iterator[Problem]:
    if words and not words[0].strip():
        yield Problem(place, "the first word must name a program")
    if any("\0" in word for word in words):
        yield Problem(place, "holds a character that no command line can")


def _rung(rung: StopStep, place: str) -> Iterator[Problem]:
    defaults = {f.name: f.default for f in msgspec.structs.fields(type(rung))}
    for way, keys in _RUNG_KEYS.items():
        for key in keys if way != rung.do else ():
            if getattr(rung, key) != defaults[key]:
                yield Problem(f"{place} {key}", f'has no meaning with do = "{rung.do}"')
    if rung.do == "file":
        if not rung.path.strip():
            yield Problem(f"{place} path", "must name the file that the solver looks for")
        if rung.action == "write" and not rung.text:
            yield Problem(f"{place} text", 'must say what to write with action = "write"')
        if rung.action == "remove" and rung.text:
            yield Problem(f"{place} text", 'has no meaning with action = "remove"')
    elif rung.do == "command":
        if not rung.command:
            remedy = 'write for example ["scancel", "4711"]'
            yield Problem(f"{place} command", "must be a program and its arguments", remedy)
        yield from _command(rung.command, f"{place} command")
    elif rung.signal not in _SIGNALS:
        near = get_close_matches(rung.signal.upper().removeprefix("SIG"), _SIGNALS, 1)
        remedy = f"did you mean '{near[0]}'?" if near else "write for example 'TERM' or 'USR1'"
        yield Problem(f"{place} signal", f"{shown(rung.signal)} is no signal here", remedy)
