"""From tables of plain values to typed sections, with every problem found on the way.

msgspec stops at the first error, so that tables are converted key by key here.
"""

from __future__ import annotations

import json
import math
import re
import types
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any, Literal, Union, get_args, get_origin

import msgspec

from probes.errors import SettingsError

# Keys for which one text may stand instead of a list of one.
_ONE_OR_MORE = ("pattern", "companions")
_LARGEST_INTEGER = 2**63 - 1


@dataclass(frozen=True, slots=True)
class Problem:
    """place: "[alarm] decades"; what: the fact; remedy: what to write instead, or ""."""

    place: str
    what: str
    remedy: str = ""

    def __str__(self) -> str:
        text = f"{self.place}: {self.what}"
        return f"{text}; {self.remedy}" if self.remedy else text


def raise_all(problems: Iterable[Problem], source: str) -> None:
    """One SettingsError for all problems, a line each; nothing if there are none."""
    found = list(problems)
    if len(found) == 1:
        only = found[0]
        raise SettingsError(f"{only.place}: {only.what}", source, only.remedy)
    if found:
        raise SettingsError("\n".join(f"{source}: {problem}" for problem in found))


def shown(value: object) -> str:
    """A value as it would stand in the file, short, control characters escaped."""
    if isinstance(value, Mapping):
        return "a section"
    if isinstance(value, list | tuple):
        text = "[" + ", ".join(shown(v) for v in value[:6]) + (", ..." if len(value) > 6 else "]")
    elif isinstance(value, str):
        text = json.dumps(value)
    elif isinstance(value, bool):
        text = str(value).lower()
    else:
        text = str(value)
    return text if len(text) <= 60 else text[:57] + "..."


def key_text(key: str) -> str:
    """A key as it would stand in the file."""
    return key if re.fullmatch(r"[\w-]+", key, re.ASCII) else shown(key)


def section_place(*keys: str) -> str:
    return f"[{'.'.join(key_text(k) for k in keys)}]"


def convert_keys(
    table: Mapping[str, object], kind: type[msgspec.Struct], problems: list[Problem]
) -> dict[str, Any]:
    """Values for the fields of `kind`, the whole file, from its table; problems are added.

    Keys with problems are left out; sections are there, with defaults for their bad keys, unless a
    required key of theirs is missing or unusable.
    """
    return _keys(table, kind, (), "", problems)


def _keys(
    table: Mapping[str, object],
    kind: type[msgspec.Struct],
    keys: tuple[str, ...],
    place: str,
    problems: list[Problem],
) -> dict[str, Any]:
    fields = {field.name: field for field in msgspec.structs.fields(kind)}
    values: dict[str, Any] = {}
    for key, value in table.items():
        if key not in fields:
            problems.append(_unknown(key, value, kind, place))
            continue
        result = _value(value, fields[key].type, (*keys, key), place, problems)
        if result is not msgspec.UNSET:
            values[key] = result
    problems += [
        Problem(_at(place, name), "must be given")
        for name, field in fields.items()
        if field.required and name not in table
    ]
    return values


def _value(
    value: object, kind: Any, keys: tuple[str, ...], place: str, problems: list[Problem]
) -> Any:
    """One value of any kind that occurs in settings; UNSET, after a report, if it is unusable."""
    inner = get_args(kind)
    choices = inner if get_origin(kind) in (Union, types.UnionType) else (kind,)
    section = next((choice for choice in choices if _is_section(choice)), None)
    if section is not None:
        return _section(value, section, keys, section_place(*keys), problems)
    if get_origin(kind) is dict and _is_section(inner[1]):
        return _named_sections(value, inner[1], keys, problems)
    if get_origin(kind) is tuple and _is_section(inner[0]):
        return _listed_sections(value, inner[0], keys, problems)
    return _plain(value, kind, keys[-1], _at(place, keys[-1]), problems)


def _section(
    table: object,
    kind: type[msgspec.Struct],
    keys: tuple[str, ...],
    place: str,
    problems: list[Problem],
) -> Any:
    if not isinstance(table, Mapping):
        problems.append(Problem(place, f"must be a section of keys, not {shown(table)}"))
        return msgspec.UNSET
    values = _keys(table, kind, keys, place, problems)
    required = {field.name for field in msgspec.structs.fields(kind) if field.required}
    return kind(**values) if required <= values.keys() else msgspec.UNSET


def _named_sections(
    value: object, kind: type[msgspec.Struct], keys: tuple[str, ...], problems: list[Problem]
) -> Any:
    place = section_place(*keys)
    if not isinstance(value, Mapping):
        remedy = f"write [{keys[-1]}.NAME] for each"
        problems.append(Problem(place, f"must hold sections, not {shown(value)}", remedy))
        return msgspec.UNSET
    converted = {
        name: _section(table, kind, (*keys, name), section_place(*keys, name), problems)
        for name, table in value.items()
    }
    return {name: section for name, section in converted.items() if section is not msgspec.UNSET}


def _listed_sections(
    value: object, kind: type[msgspec.Struct], keys: tuple[str, ...], problems: list[Problem]
) -> Any:
    if not isinstance(value, list | tuple):
        remedy = f"write [[{'.'.join(keys)}]] for each"
        problems.append(Problem(section_place(*keys), "must be a list of sections", remedy))
        return msgspec.UNSET
    # Unusable ones keep their place, so that the others keep their numbers in the report.
    return tuple(
        _section(table, kind, keys, numbered_place(".".join(keys), n), problems)
        for n, table in enumerate(value, 1)
    )


def numbered_place(key: str, number: int) -> str:
    """The place of one of several sections of the same name, counted from 1."""
    return f"[[{key}]] number {number}"


def _is_section(kind: Any) -> bool:
    return isinstance(kind, type) and issubclass(kind, msgspec.Struct)


def _plain(value: object, kind: Any, key: str, place: str, problems: list[Problem]) -> Any:
    if key in _ONE_OR_MORE and isinstance(value, str):
        value = [value]
    try:
        result = msgspec.convert(value, kind)
    except msgspec.ValidationError:
        what = f"must be {_described(kind)}, not {shown(value)}"
        problems.append(Problem(place, what, _hint(value, kind)))
        return msgspec.UNSET
    for number in result if isinstance(result, tuple) else (result,):
        if isinstance(number, float) and not math.isfinite(number):
            problems.append(Problem(place, f"must be finite, not {shown(value)}"))
            return msgspec.UNSET
        if isinstance(number, int) and abs(number) > _LARGEST_INTEGER:
            problems.append(Problem(place, f"{shown(value)} is too large"))
            return msgspec.UNSET
    return result


def _described(kind: Any, plural: bool = False) -> str:
    words = {
        str: ("a text in quotes", "texts in quotes"),
        int: ("a whole number", "whole numbers"),
        float: ("a number", "numbers"),
        bool: ("true or false", "true or false values"),
    }
    inner = get_args(kind)
    if kind in words:
        return words[kind][plural]
    if get_origin(kind) is Literal:
        return "one of " + ", ".join(shown(v) for v in inner)
    if get_origin(kind) is tuple:
        return "a list of " + _described(inner[0], plural=True)
    return " or ".join(_described(v) for v in inner if v is not type(None))


def _hint(value: object, kind: Any) -> str:
    if get_origin(kind) is Literal and isinstance(value, str):
        near = get_close_matches(value, get_args(kind), 1)
        return f"did you mean {shown(near[0])}?" if near else ""
    if get_origin(kind) is tuple and get_args(kind)[0] is str and isinstance(value, str):
        return f"write it word by word, like {shown(value.split())}"
    return ""


def _unknown(key: str, value: object, kind: type[msgspec.Struct], place: str) -> Problem:
    fields = msgspec.structs.fields(kind)
    what = "unknown key" if place else "unknown section"
    if not place and not isinstance(value, Mapping | list):
        what = "stands outside any section"
        for field in fields:
            if _is_section(field.type) and key in field.type.__struct_fields__:
                return Problem(key_text(key), what, f"it belongs to [{field.name}]")
    known = [field.name for field in fields]
    near = get_close_matches(key, known, 1)
    remedy = f"did you mean '{near[0]}'?" if near else f"known are {', '.join(known)}"
    return Problem(_at(place, key), what, remedy)


def _at(place: str, key: str) -> str:
    return f"{place} {key_text(key)}" if place else section_place(key)
