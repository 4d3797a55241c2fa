"""A review as plain text for an engineer: what happened, what is clean, what to mind."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from datetime import UTC, datetime

from monitor.foresight import foresight_text
from monitor.lastclean import CleanSnapshot, place
from monitor.review import Review
from monitor.wording import clean, drift_text, estimate_text, history_text, number

WIDTH = 98
_LABEL = 10
_MOST_SKIPPED = 5

_KINDS = {
    "none": "nothing grew",
    "resolved": "growth that the grid resolves",
    "numerical": "a numerical instability",
    "undetermined": "growth of undetermined kind",
}


def write_up(review: Review) -> str:
    """The whole text, without a newline at its end; nothing in it but printable characters."""
    lines = textwrap.wrap(clean(_headline(review)), WIDTH)
    previous = ""
    for label, text in _rows(review):
        lines += _wrapped("" if label == previous else label, clean(text))
        previous = label or previous
    if review.cautions:
        lines.append("Cautions")
        lines += [line for caution in review.cautions for line in _bullet(clean(caution))]
    return "\n".join(lines)


def _headline(review: Review) -> str:
    name = review.run or "run"
    if review.told is None:
        return f"{name}: no snapshot was judged"
    what = _KINDS[review.kind]
    if review.turn is None:
        alarm = "no alarm"
        if review.heard is not None:
            alarm = f"alarm of the history {review.heard.name} alone"
        return f"{name}: {review.condition}, {what}, {alarm}"
    return f"{name}: {review.condition}, {what}, alarm at {review.per} {place(review.turn)}"


def _rows(review: Review) -> Iterator[tuple[str, str]]:
    if review.told is not None and (review.turn is not None or review.kind != "none"):
        yield from _growth_rows(review)
    yield from _clean_rows(review)
    if review.told is not None and (foresight := foresight_text(review.told.evidence)):
        yield "Warning", foresight
    if review.told is not None and (drift := drift_text(review.told.evidence)):
        yield "Totals", f"change since the segment began: {drift}"
    if review.heard is not None:
        yield "History", f"first alarm: {history_text(review.heard)}"
    for history in review.histories:
        if history is not review.heard:
            yield "History", history_text(history)
    for deed in review.deeds:
        tries = f" ({deed.attempts} attempts)" if deed.attempts > 1 else ""
        detail = f": {deed.detail}" if deed.detail else ""
        yield "Done", f"{_moment(deed.at)}  {deed.act} {deed.target}{tries}, {deed.outcome}{detail}"
    segments = len(review.segments)
    skipped = len(review.skipped)
    ended = f"; guard ended: {review.ended}" if review.ended else ""
    yield (
        "Judged",
        f"{review.snapshots} snapshot(s) in {segments} segment(s), {skipped} skipped; "
        f"the run is {review.pulse}{ended}",
    )
    for skip in review.skipped[:_MOST_SKIPPED]:
        yield "Skipped", f"{skip.path}: {skip.reason}, {skip.detail}"
    if skipped > _MOST_SKIPPED:
        yield "Skipped", f"and {skipped - _MOST_SKIPPED} more"
    if segments > 1:
        for stretch in review.segments:
            alarm = "no alarm" if stretch.alarm_step is None else f"alarm at {stretch.alarm_step}"
            span = f"{stretch.first_step} to {stretch.last_step}" if stretch.snapshots else "empty"
            yield (
                "Segment",
                f"{stretch.number} ({stretch.why}): {span}, {stretch.condition}, {alarm}",
            )


def _growth_rows(review: Review) -> Iterator[tuple[str, str]]:
    told, turn, per = review.told, review.turn, review.per
    assert told is not None  # the caller looked
    when = []
    if review.onset is not None:
        when.append(f"growth began between {per} {review.onset[0]} and {review.onset[1]}")
    if turn is not None:
        time = "" if turn.time is None else f", time {number(turn.time)}"
        when.append(f"alarm at {per} {place(turn)}{time}, judged {_moment(turn.at)}")
    if when:
        yield "When", "; ".join(when)
    cells = "" if told.verdict.cells is None else f", {number(told.verdict.cells)} cells long"
    factor = f"factor per {per} {estimate_text(review.growth)}"
    yield "What", f"field {review.field or 'unknown'}: {factor}{cells}"
    yield "Where", _where(review)
    yield (
        "How bad",
        f"growing part, of the field's variation: {estimate_text(review.contamination)} over all, "
        f"{estimate_text(review.local_contamination)} in the worst tile",
    )
    yield "Left", f"{per}s to ruin: {estimate_text(review.ruin)}"
    yield "", f"{per}s to overflow: {estimate_text(review.overflow)}"
    if told.verdict.why:
        yield "Why", told.verdict.why


def _where(review: Review) -> str:
    region = review.region
    parts = []
    if region.box is not None:
        box = " x ".join(f"[{lo}, {hi})" for lo, hi in region.box)
        parts.append(f"cells {box}{' (the worst tile)' if region.source == 'tile' else ''}")
    if region.part:
        parts.append(f"part {region.part}")
    edges = review.told.evidence.edges if review.told else {}
    if edges:
        shares = ", ".join(f"{name} {share:.0%}" for name, share in edges.items())
        parts.append(f"at the boundary: {shares}")
    return "; ".join(parts) or "not known"


def _clean_rows(review: Review) -> Iterator[tuple[str, str]]:
    if review.clean is None:
        if review.told is not None:
            yield "Clean", "no clean checkpoint is known"
        return
    yield "Clean", _checkpoint(review, review.clean)
    if review.later is not None:
        yield "", f"later, clean but not pinned: {_checkpoint(review, review.later)}"


def _checkpoint(review: Review, found: CleanSnapshot) -> str:
    pinned = f", pinned, sha256 {found.sha256 or 'unknown'}" if found.pinned else ""
    return f"{review.per} {found.step}, {found.path}{pinned}; {found.reason}"


def _moment(at: float) -> str:
    return datetime.fromtimestamp(at, UTC).strftime("%Y-%m-%d %H:%M:%S UTC")


def _wrapped(label: str, text: str) -> list[str]:
    first, rest = label.ljust(_LABEL), " " * _LABEL
    return textwrap.wrap(
        text, WIDTH, initial_indent=first, subsequent_indent=rest, break_long_words=False
    )


def _bullet(text: str) -> list[str]:
    return textwrap.wrap(
        text, WIDTH, initial_indent="  - ", subsequent_indent="    ", break_long_words=False
    )
