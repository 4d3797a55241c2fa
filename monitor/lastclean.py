"""Which checkpoint is still clean, as far as the growth log can tell. Pure, over records."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from monitor.growthlog.records import Channel, Evidence, History, PinRecord, Snapshot

# A snapshot may be restarted from when its growing part is below the larger of this share of the
# field's variation and a hundred rounding errors of the stored numbers.
TOLERANCE = 1e-8
ROUNDINGS = 100.0


@dataclass(frozen=True, slots=True)
class CleanSnapshot:
    """A snapshot to restart from, and why it counts as clean.

    step: solver step, or the snapshot's number where the run does not tell its steps.
    path: of a pin's first file as the log has it, else of the snapshot, relative to the run's
    folder. sha256: "" without a pin.
    """

    step: int
    path: str
    pinned: bool
    sha256: str
    reason: str


def place(snapshot: Snapshot) -> int:
    """Solver step of a snapshot, or its number in the segment where the step is unknown."""
    return snapshot.index if snapshot.step is None else snapshot.step


def as_turn(record: History, path: str, index: int) -> Snapshot:
    """What a history's alarm says, in the shape of the snapshot that turned. path: of its text
    file. index: of the snapshot that would come next."""
    return Snapshot(
        seq=record.seq,
        at=record.at,
        key="",
        path=path,
        index=index,
        seg=record.seg,
        step=record.step,
        time=record.time,
        evidence=Evidence(channels=()),
        verdict=record.verdict,
    )


def tolerance(snapshot: Snapshot) -> float:
    """Largest clean contamination of this snapshot's fields, as a share of the variation.

    The rounding error is taken from the storage floor that the log gives for each field, divided
    by the field's largest value.
    """
    rounding = 0.0
    for channel in snapshot.evidence.channels:
        ends = [abs(x) for x in (channel.lo, channel.hi) if isinstance(x, float | int)]
        peak = max(ends, default=0.0)
        if channel.floor is not None and 0.0 < peak < math.inf:
            rounding = max(rounding, math.exp(min(0.0, channel.floor - math.log(peak))))
    return max(TOLERANCE, ROUNDINGS * rounding)


def clean_reason(snapshot: Snapshot, turn: Snapshot | None, before: Sequence[Snapshot]) -> str:
    """Why a judged snapshot counts as clean; "" if it does not.

    turn: the alarm (or first overflow) of its segment, None if there was none. before: the
    segment's snapshots before that turn, in order.
    """
    if turn is None:
        return "judged quiet, no alarm followed" if snapshot.verdict.condition == "quiet" else ""
    if snapshot not in before:
        return ""
    onset = turn.verdict.onset
    if onset is not None and place(snapshot) < onset[0]:
        return f"before the growth can have begun (step {onset[0]})"
    share = snapshot.evidence.local or snapshot.evidence.contamination
    limit = tolerance(snapshot)
    if share is not None and isinstance(share.value, float | int) and share.value < limit:
        return f"growing part {share.value:.1e} of the field's variation, below {limit:.0e}"
    back = traced_back(snapshot, turn)
    if back is not None and back < limit:
        return (
            f"growing part at most {back:.1e} of the field's variation, traced back from the "
            f"alarm at its growth, below {limit:.0e}"
        )
    # An overflow out of nothing: the snapshot just before it had grown unseen, earlier ones are
    # the best there is.
    sudden = onset is None and share is None
    if sudden and snapshot.verdict.condition == "quiet" and snapshot is not before[-1]:
        return "judged quiet, and not the last one before the trouble"
    return ""


def traced_back(snapshot: Snapshot, turn: Snapshot) -> float | None:
    """Most that the growing part can have been of the field's variation at an earlier snapshot.

    What it is at the alarm (its upper end; without one, all of the grid-scale ripple there) shrinks
    backwards at the lower end of the factor. None where the alarm knows no such factor.
    """
    factor = turn.verdict.factor
    low = factor.low if factor is not None else None
    if not isinstance(low, float | int) or not low > 1.0:
        return None
    share = turn.evidence.local
    high = share.high if share is not None else None
    most = (
        float(high)
        if isinstance(high, float | int)
        else max((_all_ripple(c) for c in turn.evidence.channels), default=math.inf)
    )
    return most * math.exp(-(place(turn) - place(snapshot)) * math.log(low))


# One tile may hold this many times the ripple of the whole field's rms.
_CONCENTRATED = 30.0


def _all_ripple(channel: Channel) -> float:
    """Ripple of the difference as a share of the field's variation, in the worst tile."""
    if channel.ripple is None or channel.vary is None:
        return 0.0 if channel.ripple is None else math.inf
    return _CONCENTRATED * math.exp(min(300.0, channel.ripple - channel.vary))


def kept_pins(pins: Sequence[PinRecord]) -> list[PinRecord]:
    """The last word on each pin, without the released ones, in step order."""
    last = {pin.pin: pin for pin in pins}
    held = [pin for pin in last.values() if pin.state != "released"]
    return sorted(held, key=lambda pin: -1 if pin.step is None else pin.step)


def clean_pins(
    pins: Sequence[PinRecord], snaps: Sequence[Snapshot], turn: Snapshot | None
) -> list[CleanSnapshot]:
    """Held pins that count as clean, in step order.

    A pin whose step was judged is judged by that snapshot. One of separate checkpoint files counts
    when the next judged snapshot at or after its step is clean.
    """
    before = _before(snaps, turn)
    out = []
    for pin in kept_pins(pins):
        if pin.step is None:
            continue
        judged = next((s for s in snaps if place(s) >= pin.step), None)
        reason = "" if judged is None else clean_reason(judged, turn, before)
        if reason:
            path = f"{pin.folder}/{pin.files[0]}" if pin.files else pin.folder
            out.append(CleanSnapshot(pin.step, path, True, pin.sha256, reason))
    return out


def clean_files(snaps: Sequence[Snapshot], turn: Snapshot | None) -> list[CleanSnapshot]:
    """Clean snapshots whose name was not used again later in the segment, in step order.

    A name that several snapshots share was overwritten, and only its last use still stands; but for
    a growing file, whose records stay.
    """
    before = _before(snaps, turn)
    left = Counter((s.path, s.record) for s in snaps)
    out = []
    for snapshot in snaps:
        left[snapshot.path, snapshot.record] -= 1
        gone = left[snapshot.path, snapshot.record] > 0
        reason = "" if gone else clean_reason(snapshot, turn, before)
        if reason and snapshot.path.endswith(".sketch"):
            reason = f"tapped, no checkpoint: take one from this step or before; {reason}"
        elif reason and snapshot.record is not None:
            reason = f"record {snapshot.record}, {reason}"
        if reason:
            out.append(CleanSnapshot(place(snapshot), snapshot.path, False, "", reason))
    return out


def _before(snaps: Sequence[Snapshot], turn: Snapshot | None) -> list[Snapshot]:
    return [s for s in snaps if turn is None or s.seq < turn.seq]
