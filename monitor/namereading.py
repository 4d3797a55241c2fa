"""Read file names: which number is the step, which the part, which word the field. Pure.

The patterns that come out are those of ``[snapshots] pattern``.
"""

from __future__ import annotations

import re
from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import pairwise

# Words before a number that count processes or blocks rather than steps. Common practice, no
# source.
_PARTS = re.compile(r"(rank|part|proc|block|mpi|cpu|task|node|piece|domain|pe|p|r)[-_.=]?$", re.I)
_STEPS = re.compile(r"(step|it|iter|cycle|dump|snap|frame|out|n|t)[-_.=]?$", re.I)
# Characters that mean something in a pattern stand for themselves by the single-character wildcard.
_SPECIAL = re.compile(r"[*?{}\[\]]")


@dataclass(frozen=True, slots=True)
class NameGroup:
    """Files that one pattern describes.

    names: in step order. steps: distinct, ascending. parts, fields: distinct, in order of
    appearance; empty without such a place-holder. dated: the names carry a time with a decimal
    point, which is no step.
    """

    pattern: str
    names: tuple[str, ...]
    steps: tuple[int, ...] = ()
    parts: tuple[str, ...] = ()
    fields: tuple[str, ...] = ()
    dated: bool = False


def group_names(names: Iterable[str]) -> list[NameGroup]:
    """Groups of names (with "/" between folders) that differ in their numbers only, largest first.

    A name that is alone stays a group of one, as it is.
    """
    families: dict[tuple[str, ...], list[tuple[str, tuple[str, ...]]]] = defaultdict(list)
    for name in names:
        pieces = re.split(r"(\d+)", name)
        families[tuple(pieces[0::2])].append((name, tuple(pieces[1::2])))
    groups = [_group(texts, members) for texts, members in families.items()]
    return sorted(groups, key=lambda g: (-len(g.names), g.pattern))


def merge_fields(groups: Sequence[NameGroup]) -> NameGroup | None:
    """One group with {field} for groups that differ in exactly one word and have the same steps;
    None where they do not fit together."""
    first = groups[0]
    if len(groups) < 2 or any(g.steps != first.steps or g.parts != first.parts for g in groups):
        return None
    split = [_words(g.pattern) for g in groups]
    texts, words = split[0]
    if any(t != texts or len(w) != len(words) for t, w in split):
        return None
    columns = list(zip(*(w for _, w in split), strict=True))
    differing = [i for i, column in enumerate(columns) if len(set(column)) > 1]
    if len(differing) != 1 or len(set(columns[differing[0]])) != len(groups):
        return None
    chosen = [("{field}" if i == differing[0] else word) for i, word in enumerate(words)]
    pattern = "".join(t + w for t, w in zip(texts, [*chosen, ""], strict=True))
    names = tuple(name for g in groups for name in g.names)
    return NameGroup(pattern, names, first.steps, first.parts, tuple(columns[differing[0]]))


def stride(steps: Sequence[int]) -> int:
    """The commonest difference of consecutive steps, the smaller one of equally common ones; 0 for
    fewer than two steps."""
    gaps = [b - a for a, b in pairwise(steps)]
    return min(set(gaps), key=lambda gap: (-gaps.count(gap), gap)) if gaps else 0


def _group(texts: tuple[str, ...], members: list[tuple[str, tuple[str, ...]]]) -> NameGroup:
    columns = list(zip(*(numbers for _, numbers in members), strict=True))
    varying = [i for i, column in enumerate(columns) if len(set(column)) > 1]
    dated = any(a + 1 == b and texts[b] == "." for a, b in pairwise(varying))
    part = None if dated else _part_column(texts, columns, varying)
    step = None if dated else _step_column(texts, columns, [i for i in varying if i != part])
    holders = {part: "{part}", step: "{step}"}
    pieces = [_SPECIAL.sub("?", texts[0])]
    for i, column in enumerate(columns):
        pieces.append(holders.get(i, "*") if i in varying else column[0])
        pieces.append(_SPECIAL.sub("?", texts[i + 1]))
    ordered = sorted(members, key=lambda m: [int(number) for number in m[1]])
    if step is not None:
        ordered.sort(key=lambda m: int(m[1][step]))
    return NameGroup(
        pattern="".join(pieces),
        names=tuple(name for name, _ in ordered),
        steps=() if step is None else tuple(sorted({int(n) for n in columns[step]})),
        parts=() if part is None else tuple(dict.fromkeys(m[1][part] for m in ordered)),
        dated=dated,
    )


def _part_column(
    texts: Sequence[str], columns: Sequence[tuple[str, ...]], varying: Sequence[int]
) -> int | None:
    """The number that counts parts: named so, or the smaller of two that form a full grid."""
    named = [i for i in varying if _PARTS.search(texts[i]) and not _STEPS.search(texts[i])]
    if named:
        return named[-1]
    if len(varying) != 2 or _same_number(columns, *varying):
        return None
    a, b = varying
    pairs = set(zip(columns[a], columns[b], strict=True))
    if len(pairs) != len(set(columns[a])) * len(set(columns[b])):
        return None
    return min(varying, key=lambda i: (len(set(columns[i])), bool(_STEPS.search(texts[i]))))


def _step_column(
    texts: Sequence[str], columns: Sequence[tuple[str, ...]], varying: Sequence[int]
) -> int | None:
    """The number that counts steps: named so, else the one with most values."""
    if not varying:
        return None
    return max(varying, key=lambda i: (bool(_STEPS.search(texts[i])), len(set(columns[i])), -i))


def _same_number(columns: Sequence[tuple[str, ...]], a: int, b: int) -> bool:
    """True where two columns always hold the same number ("out/0100/h_0100.npy")."""
    return all(int(x) == int(y) for x, y in zip(columns[a], columns[b], strict=True))


def _words(pattern: str) -> tuple[list[str], list[str]]:
    """Texts between the words of a pattern, and the words; place-holders count as text, and so
    does the suffix."""
    stem, dot, suffix = pattern.rpartition(".")
    texts, words, end = [], [], 0
    for match in re.finditer(r"\{\w+\}|[A-Za-z][A-Za-z0-9]*", stem):
        if not match.group().startswith("{"):
            texts.append(stem[end : match.start()])
            words.append(match.group())
            end = match.end()
    return [*texts, stem[end:] + dot + suffix], words
