"""What went wrong, counted by cause; single cases are named from the tuned half only. Pure."""

from __future__ import annotations

import math
from collections.abc import Sequence

from tests.corpus.playing import Played
from tests.corpus.tables import CALM, close, healthy, missed, sick

# How the sentence of an alarm begins tells which evidence it rests on.
_EVIDENCE = (
    ("on a straight line", "a level on a straight line"),
    ("alternating in sign", "a mode that alternates in sign"),
    ("a mode persists", "a mode that persists"),
    ("not finite", "values that are not finite"),
    ("bound", "values out of bounds"),
)


def evidence(why: str) -> str:
    """The kind of evidence that an alarm's sentence speaks of."""
    return next((name for words, name in _EVIDENCE if words in why), "other evidence")


def troubles(run: Played) -> list[str]:
    """Everything in which a run falls short of the bars."""
    s = run.score
    if run.failed:
        return [f"could not be played: {run.failed}"]
    if run.label == "healthy":
        out = []
        if s.alarm is not None:
            out.append(f"false alarm by {evidence(s.why)}")
        if s.swollen > CALM:
            out.append(f"suspected for more than {CALM} snapshots though healthy")
        return out
    if s.at_once is not None:
        return [] if s.at_once else ["a value out of bounds was not alarmed at once"]
    out = []
    if s.premature:
        out.append(f"alarm before the cause, by {evidence(s.why)}")
    elif missed(run):
        out.append("never alarmed before the overflow")
    elif s.sight == "enough" and not s.in_time:
        out.append("alarm only above a thousandth of the field")
    if s.sight == "some" and not s.suspected_in_time:
        out.append("6 to 11 snapshots, not suspected in time")
    if s.error is not None and run.linear and not close(run):
        wrong = "no growth at all" if math.isinf(s.error) else "by more than allowed"
        out.append(f"factor wrong, {wrong}")
    if s.covered is False and run.linear:
        out.append("interval misses the factor")
    if s.hit is False:
        out.append("the true peak is outside the box")
    if s.ratio is not None and s.ratio > 4.0:
        out.append("box more than four times too large")
    if s.onset is not None and abs(s.onset) > 5:
        out.append("onset more than five snapshots off")
    return out


def told(runs: Sequence[Played]) -> str:
    """Lines "cause: how often (tuned half: cases)", most frequent first."""
    found: dict[str, list[Played]] = {}
    for run in runs:
        if not run.apart:
            for trouble in troubles(run):
                found.setdefault(trouble, []).append(run)
    lines = []
    for trouble, where in sorted(found.items(), key=lambda item: -len(item[1])):
        named = sorted({r.case for r in where if r.half == "tuned"})
        more = f" (tuned half: {', '.join(named)})" if named else ""
        lines.append(f"{len(where):4d}  {trouble}{more}")
    total = len(sick(runs)) + len(healthy(runs))
    return "\n".join([f"of {total} runs", *lines])


def apart(runs: Sequence[Played]) -> str:
    """Cases that are reported but not scored with the others."""
    lines = []
    for run in runs:
        if run.apart:
            said = (
                f"alarm at snapshot {run.score.alarm}"
                if run.score.alarm is not None
                else "no alarm"
            )
            lines.append(f"{run.case}, draw {run.draw}: {said}; {run.apart}")
    return "\n".join(lines)
