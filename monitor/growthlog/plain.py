"""JSON in plain ASCII, so that a log survives every terminal, mail and locale it passes through."""

from __future__ import annotations

import re
from typing import Any

import msgspec

_encoder = msgspec.json.Encoder()
_BEYOND_ASCII = re.compile("[^\x00-\x7f]+")


def plain_json(value: Any) -> bytes:
    """`value` (records or built-in types, lone surrogates escaped before) as ASCII JSON."""
    line = _encoder.encode(value)
    if line.isascii():
        return line
    # Beyond ASCII there are only characters inside strings, so each can become its escape.
    return _BEYOND_ASCII.sub(_escaped, line.decode()).encode("ascii")


def _escaped(found: re.Match[str]) -> str:
    units = found.group().encode("utf-16-be")
    return "".join(f"\\u{units[i]:02x}{units[i + 1]:02x}" for i in range(0, len(units), 2))


def valid_text(text: str) -> str:
    """`text` with lone surrogates, which names of files may bring, written as escapes."""
    return text if text.isascii() else text.encode("utf-8", "backslashreplace").decode()


def with_valid_text(value: Any) -> Any:
    """Built-in types with all their strings made valid."""
    if isinstance(value, str):
        return valid_text(value)
    if isinstance(value, dict):
        return {valid_text(k): with_valid_text(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [with_valid_text(v) for v in value]
    return value
