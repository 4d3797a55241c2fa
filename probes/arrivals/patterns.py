"""Path patterns with place-holders, matched component by component. Pure."""

from __future__ import annotations

import os
import re
from dataclasses import dataclass
from functools import cached_property

from probes.errors import SettingsError

# What a place-holder stands for. A step is digits; a part must not swallow a separator.
_STANDS_FOR = {
    "step": r"\d+",
    "part": r"[A-Za-z0-9-]+",
    "field": r"[A-Za-z][A-Za-z0-9_]*?",
}
_TOKEN = re.compile(r"\{([a-z]+)\}|(\*)|(\?)")
# Files that a writer has under way, or that a network file system leaves behind.
_UNFINISHED = re.compile(r"\.tmp|^\.|~$")


@dataclass(frozen=True, slots=True)
class Match:
    """What the place-holders of a path stand for; "" and None for those a pattern has not."""

    step: int | None = None
    part: str = ""
    field: str = ""

    def joined(self, other: Match) -> Match | None:
        """Both together; None where they disagree (a folder of one step, a file of another)."""
        if None not in (self.step, other.step) and self.step != other.step:
            return None
        if self.part and other.part and self.part != other.part:
            return None
        if self.field and other.field and self.field != other.field:
            return None
        return Match(
            self.step if self.step is not None else other.step,
            self.part or other.part,
            self.field or other.field,
        )


@dataclass(frozen=True)
class Level:
    """One component of a pattern: a literal name, or an expression."""

    text: str

    @cached_property
    def literal(self) -> bool:
        return not _TOKEN.search(self.text)

    @cached_property
    def expression(self) -> re.Pattern[str]:
        out, at, used = "", 0, set()
        for token in _TOKEN.finditer(self.text):
            out += re.escape(self.text[at : token.start()])
            at = token.end()
            name = token[1]
            if name is None:
                out += "[^/]*" if token[2] else "[^/]"
            elif name in used:
                out += f"(?P={name})"
            else:
                used.add(name)
                out += f"(?P<{name}>{_STANDS_FOR[name]})"
        return re.compile(out + re.escape(self.text[at:]))

    def match(self, name: str) -> Match | None:
        """What a name says, None where it does not fit or is not finished."""
        if _UNFINISHED.search(name) and not _UNFINISHED.search(self.text):
            return None
        found = self.expression.fullmatch(name)
        if found is None:
            return None
        said = found.groupdict()
        step = said.get("step")
        return Match(
            int(step) if step is not None else None, said.get("part") or "", said.get("field") or ""
        )


@dataclass(frozen=True)
class Pattern:
    """A whole pattern: `root` is the deepest folder without place-holders, `levels` the rest."""

    text: str
    root: str
    levels: tuple[Level, ...]

    @classmethod
    def of(cls, text: str, folder: str) -> Pattern:
        """Raises SettingsError for an unknown place-holder or a pattern that names no file."""
        for name in re.findall(r"\{([^{}]*)\}", text):
            if name not in _STANDS_FOR:
                known = ", ".join(f"{{{n}}}" for n in _STANDS_FOR)
                raise SettingsError(
                    f"unknown place-holder {{{name}}}", f"pattern {text!r}", f"known are {known}"
                )
        path = os.path.normpath(os.path.join(folder, text))
        parts = [p for p in path.split(os.sep) if p]
        if not parts or text.endswith(("/", os.sep)):
            raise SettingsError("names no file", f"pattern {text!r}")
        levels = [Level(p) for p in parts]
        first = next((i for i, level in enumerate(levels) if not level.literal), len(levels) - 1)
        return cls(text, os.sep + os.sep.join(parts[:first]), tuple(levels[first:]))

    @cached_property
    def has(self) -> frozenset[str]:
        """Names of the place-holders it contains."""
        return frozenset(re.findall(r"\{([a-z]+)\}", self.text))

    @cached_property
    def own_name(self) -> str:
        """Name of the one nameless array of a file: the literal words of the file name ("h" for
        "out/h_{step}.npy"), "field" where there are none."""
        stem = os.path.splitext(self.levels[-1].text)[0]
        words = re.split(r"\{[a-z]+\}|[*?]", stem)
        return "_".join(w for w in (word.strip("_-.") for word in words) if w) or "field"
