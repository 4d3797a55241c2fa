"""Keep a snapshot record short: under 4,000 bytes, so that one write puts it down whole.

Evidence and verdict have budgets of their own, so that evidence is cut before it is decided upon,
whatever the verdict will say. Of the evidence these go, in this order and only as far as needed:
worst tiles beyond 4, edges, limits, heard histories beyond 2, modes beyond 2, channels beyond 12,
then modes and channels down to one. Channels without non-finite values go first, of these those
without bounds, of these the ones with the lowest ripple. `Evidence.cut` counts the entries left
out. At last the path loses its beginning.
"""

from __future__ import annotations

from collections.abc import Iterator

from msgspec.structs import replace

from monitor.growthlog.plain import plain_json
from monitor.growthlog.records import Channel, Estimate, Evidence, History, Snapshot, Verdict

# Bytes of JSON, without the newline.
LONGEST_SNAPSHOT = 3998
_EVIDENCE = 2400
_WHY = 320
_REASON = 100
_NAME = 160
_HEARD = 200


def fit_evidence(evidence: Evidence) -> Evidence:
    """`evidence` without what does not fit."""
    whole = shortest = _with_short_texts(evidence)
    versions = _shorter(whole)
    while len(plain_json(shortest)) > _EVIDENCE:
        version = next(versions, None)
        if version is None:
            break
        shortest = replace(version, cut=whole.cut + _entries(whole) - _entries(version))
    return shortest


def fit_verdict(verdict: Verdict) -> Verdict:
    """`verdict` with its sentence and reasons shortened where they are too long."""
    return replace(
        verdict,
        why=shortened(verdict.why, _WHY),
        field=shortened(verdict.field, _NAME),
        factor=_with_short_reason(verdict.factor),
        ruin=_with_short_reason(verdict.ruin),
        overflow=_with_short_reason(verdict.overflow),
    )


def fit_history(record: History) -> History:
    """`record` with its texts shortened where they are too long."""
    return replace(
        record,
        name=_name(record.name),
        print=shortened(record.print, _REASON),
        verdict=fit_verdict(record.verdict),
    )


def fit_snapshot(record: Snapshot) -> Snapshot:
    """`record`, evidence and verdict fitted before, with a path that fits."""
    excess = len(plain_json(record)) - LONGEST_SNAPSHOT
    if excess <= 0:
        return record
    room = max(3, _length(record.path) - excess)
    return replace(record, path=shortened(record.path, room, keep_end=True))


def shortened(text: str, most: int, *, keep_end: bool = False) -> str:
    """`text` in at most `most` bytes of JSON, "..." where something was left out."""
    if _length(text) <= most:
        return text
    room = most - 3
    kept: list[str] = []
    for character in reversed(text) if keep_end else text:
        room -= _length(character)
        if room < 0:
            break
        kept.append(character)
    return "..." + "".join(reversed(kept)) if keep_end else "".join(kept) + "..."


def _length(text: str) -> int:
    return len(plain_json(text)) - 2


# --- what goes ------------------------------------------------------------------------------


def _shorter(evidence: Evidence) -> Iterator[Evidence]:
    """Ever shorter versions; one that changes nothing does no harm."""
    evidence = replace(evidence, worst=evidence.worst[:4])
    yield evidence
    evidence = replace(evidence, edges={})
    yield evidence
    evidence = replace(evidence, limits={})
    yield evidence
    evidence = replace(evidence, heard=evidence.heard[:2])
    yield evidence
    evidence = replace(evidence, modes=evidence.modes[:2])
    yield evidence
    evidence = _with_channels(evidence, 12)
    yield evidence
    evidence = replace(evidence, modes=evidence.modes[:1])
    yield evidence
    while len(evidence.channels) > 1:
        evidence = _with_channels(evidence, len(evidence.channels) - 1)
        yield evidence


def _with_channels(evidence: Evidence, most: int) -> Evidence:
    ranked = sorted(evidence.channels, key=_importance, reverse=True)[:most]
    kept = {id(channel) for channel in ranked}
    return replace(evidence, channels=tuple(c for c in evidence.channels if id(c) in kept))


def _importance(channel: Channel) -> tuple[bool, bool, float]:
    ripple = channel.ripple if channel.ripple is not None else float("-inf")
    return channel.bad > 0, channel.bounded, ripple


def _entries(evidence: Evidence) -> int:
    parts = (
        *(evidence.worst, evidence.edges, evidence.limits),
        *(evidence.heard, evidence.modes, evidence.channels),
    )
    return sum(len(part) for part in parts)


def _with_short_texts(evidence: Evidence) -> Evidence:
    """Names and reasons as they occur are much shorter than this; a file may hold anything."""
    where, bad_at, line = evidence.where, evidence.bad_at, evidence.line
    heard = evidence.heard
    return replace(
        evidence,
        channels=tuple(replace(c, f=_name(c.f)) for c in evidence.channels),
        modes=tuple(replace(m, f=_name(m.f)) for m in evidence.modes),
        line=replace(line, f=_name(line.f)) if line is not None else None,
        edges={_name(k): v for k, v in evidence.edges.items()},
        limits={_name(k): v for k, v in evidence.limits.items()},
        heard=tuple(replace(h, name=_name(h.name), why=shortened(h.why, _HEARD)) for h in heard),
        where=(_name(where[0]), _name(where[1])) if where is not None else None,
        bad_at=(_name(bad_at[0]), _name(bad_at[1]), bad_at[2]) if bad_at is not None else None,
        contamination=_with_short_reason(evidence.contamination),
        local=_with_short_reason(evidence.local),
    )


def _name(text: str) -> str:
    return shortened(text, _NAME, keep_end=True)


def _with_short_reason(estimate: Estimate | None) -> Estimate | None:
    if estimate is None:
        return None
    return replace(estimate, reason=shortened(estimate.reason, _REASON))
