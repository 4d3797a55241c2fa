"""How much warning the present cadence of snapshots can give. Pure, over evidence records."""

from __future__ import annotations

import math

from monitor.growthlog.records import Evidence
from monitor.wording import factor_text

# Snapshots that growth needs from its first sight to an alarm (the median on runs of several
# solvers), and the share of a field's variation up to which an alarm counts as early.
SNAPSHOTS_TO_ALARM = 8
EARLY = 1e-3


def foreseeable_growth(evidence: Evidence) -> tuple[float, float] | None:
    """Growth factors per step that are alarmed before they reach a thousandth of the field:
    (surely, at most).

    Growth surely shows where it exceeds the grid-scale ripple that is there now, at best (as a
    single mode under that ripple) where it exceeds rounding, and then has to last for eight
    snapshots; the field with the least room decides. Per snapshot where steps are not known; None
    before the first difference.
    """
    rooms = []
    for c in evidence.channels:
        if c.vary is None or c.floor is None:
            continue
        whole = c.vary + math.log(EARLY) - c.floor
        rooms.append((min(whole, whole - ((c.ripple or c.floor) - c.floor)), whole))
    if not rooms or evidence.fresh < 2:
        return None
    per = SNAPSHOTS_TO_ALARM * (evidence.stride or 1)
    sure, most = (max(0.0, min(room[side] for room in rooms)) for side in (0, 1))
    return math.exp(sure / per), math.exp(most / per)


def foresight_text(evidence: Evidence) -> str:
    """The same in a sentence; "" where nothing can be said yet."""
    growth = foreseeable_growth(evidence)
    if growth is None:
        return ""
    sure, most = growth
    stride = evidence.stride
    per = "step" if stride else "snapshot"
    cadence = "this cadence"
    if stride:
        cadence = f"a snapshot every {stride} steps" if stride > 1 else "a snapshot every step"
    surely = f"up to {factor_text(sure)} per {per} is foreseen" if sure > 1.0 + 1e-6 else ""
    perhaps = f"up to {factor_text(most)} perhaps" if most > 1.0 + 1e-6 else ""
    seen = ", ".join(part for part in (surely, perhaps) if part)
    if not seen:
        return f"with {cadence} growth is found, not foreseen: the ripple of the field hides it"
    return f"with {cadence} growth {seen}; faster growth is only found"
