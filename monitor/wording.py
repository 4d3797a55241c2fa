"""Numbers, units and conditions as text, shared by the desk, the review and standard error.

Everything is pure and needs only the standard library. Values that may be unknown come with a
reason, and ranges are always shown as ranges: nothing here makes an estimate look surer than it is.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from datetime import datetime
from typing import Any

from monitor.growthlog.records import (
    Condition,
    Estimate,
    Evidence,
    History,
    Kind,
    Num,
    Snapshot,
    Verdict,
)

# A small picture of a level for each condition, three characters wide, so that a condition is told
# by its shape and its word as well as by its colour.
_SIGNS: dict[Condition, tuple[str, str]] = {
    "gathering": ("···", "..."),
    "quiet": ("▁▁▁", "---"),
    "swelling": ("▁▂▄", "--/"),
    "runaway": ("▂▅█", "-/!"),
    "overflowed": ("▅█╳", "/!X"),
}

_KINDS: dict[Kind, str] = {
    "none": "nothing grows",
    "resolved": "growth that the grid carries",
    "numerical": "numerical growth",
    "undetermined": "growth of undetermined kind",
}

_SUFFIXES = ((1e12, "T"), (1e9, "G"), (1e6, "M"), (1e3, "k"))
_SPELLED = {"nan": "NaN", "inf": "infinity", "-inf": "-infinity"}
# Beyond this nobody waits: a duration is then given in years and no finer.
_YEAR = 365.25 * 86400.0


def clean(text: str) -> str:
    """`text` with everything that could play with a terminal written as its escape.

    Control characters (C0, C1, newlines), direction overrides and other invisible format
    characters, lone surrogates and unassigned code points become ``\\x1b``, ``\\u202e`` and so on.
    Brackets stay as they are: whoever shows text must not have it parsed as markup.
    """
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else _escape(c) for c in text)


def _escape(character: str) -> str:
    return character.encode("unicode_escape").decode("ascii")


def number(value: Num | None, digits: int = 4) -> str:
    """A number in at most `digits` significant digits: "0.0125", "3.2e-9", "NaN"."""
    if value is None:
        return "unknown"
    if isinstance(value, str):
        return _SPELLED[value]
    if not math.isfinite(value):
        return _SPELLED[str(value)]
    text = f"{value:.{digits}g}"
    mantissa, e, exponent = text.partition("e")
    return f"{mantissa}e{int(exponent)}" if e else text


def count(value: float) -> str:
    """A count with a decimal suffix: "917", "1.2 k", "36 k", "4.1 M"."""
    if not math.isfinite(value):
        return number(value)
    return _scaled(value, _suffix_of(value))


def _suffix_of(value: float) -> tuple[float, str]:
    # What rounds to a thousand is written with the larger suffix.
    return next((s for s in _SUFFIXES if abs(value) >= 0.9995 * s[0]), (1.0, ""))


def _scaled(value: float, suffix: tuple[float, str]) -> str:
    size, letter = suffix
    return f"{_short(value / size)} {letter}" if letter else f"{value:.0f}"


def _short(value: float) -> str:
    """Two digits, or all digits before the point."""
    return f"{value:.1f}".removesuffix(".0") if abs(value) < 9.95 else f"{value:.0f}"


def exact(value: int) -> str:
    """A whole number in groups of three: "12,400"."""
    return f"{value:,}"


def factor_text(factor: float | Estimate | None) -> str:
    """A growth factor: from 0.5 to 2 its distance from one carries the digits ("1.0204",
    "0.99976"), with its interval where it has one ("1.0204 (1.0197 to 1.0211)")."""
    if factor is None:
        return "unknown"
    if isinstance(factor, Estimate):
        if factor.value is None or isinstance(factor.value, str):
            return estimate_text(factor)
        return f"{factor_text(factor.value)}{_interval(factor, factor_text)}"
    if not math.isfinite(factor) or not 0.5 <= factor < 2.0:
        return number(factor)
    away = abs(factor - 1.0)
    if away < 5e-8:
        return "1"
    decimals = min(7, max(2, 2 - math.floor(math.log10(away))))
    return f"{factor:.{decimals}f}".rstrip("0").rstrip(".")


def estimate_text(estimate: Estimate | None) -> str:
    """Value and interval, as many digits as the interval supports, or the reason for no value.

    "1.0204 (1.0197 to 1.0211)", "5210 (at least 5080)", "none: the growing part has no size yet".
    """
    if estimate is None:
        return "not estimated"
    if estimate.value is None:
        return f"none: {estimate.reason}" if estimate.reason else "none"
    digits = _digits(estimate)

    def told(value: Num) -> str:
        return number(value, digits)

    return f"{told(estimate.value)}{_interval(estimate, told)}"


def _digits(estimate: Estimate) -> int:
    """Significant digits that show the interval's width with two of its own."""
    if estimate.value is None or estimate.low is None or estimate.high is None:
        return 4
    value, width = float(estimate.value), float(estimate.high) - float(estimate.low)
    if not (math.isfinite(width) and math.isfinite(value)) or width <= 0.0 or value == 0.0:
        return 4
    return min(7, max(3, math.ceil(math.log10(abs(value) / width)) + 2))


def _interval(estimate: Estimate, told: Callable[[Any], str]) -> str:
    """ " (low to high)", open ends in words, "" where there is none."""
    low, high = estimate.low, estimate.high
    if low is None and high is None:
        return ""
    if high is None or float(high) == math.inf:
        return "" if low is None else f" (at least {told(low)})"
    if low is None or float(low) == -math.inf:
        return f" (at most {told(high)})"
    return f" ({told(low)} to {told(high)})"


def steps_text(steps: Estimate | None, per: str = "step") -> str:
    """A number of steps, always as a range or with the reason why there is none.

    "890 to 948 steps", "1.2 to 1.4 k steps", "at least 5.1 k steps", "now", "about 900 steps" (a
    value that came without an interval).
    """
    if steps is None:
        return "not estimated"
    if steps.value is None:
        return clean(steps.reason) or "not estimated"
    value, low, high = _bounds(steps)
    if high <= 0.0:
        return "now"
    if math.isinf(high):
        return f"at least {count(low)} {per}s" if math.isfinite(low) else "never at this rate"
    if low >= high:
        return f"about {count(value)} {per}s"
    suffix = _suffix_of(high)
    if low < 0.1 * suffix[0]:
        return f"{count(low)} to {count(high)} {per}s"
    first = f"{low / suffix[0]:.0f}" if not suffix[1] else _short(low / suffix[0])
    return f"{first} to {_scaled(high, suffix)} {per}s"


def _bounds(estimate: Estimate) -> tuple[float, float, float]:
    assert estimate.value is not None  # the caller looked
    value = float(estimate.value)
    low = value if estimate.low is None else float(estimate.low)
    high = value if estimate.high is None else float(estimate.high)
    return max(0.0, value), max(0.0, low), max(0.0, high)


def duration_text(seconds: float) -> str:
    """A length of time in the two largest units that matter: "12 s", "41 min", "2 h 5 min",
    "3 d 4 h", "1.2 k years"."""
    if not math.isfinite(seconds):
        return number(seconds)
    seconds = max(0.0, seconds)
    if seconds < 99.5:
        return f"{_short(seconds) if 0.05 <= seconds < 9.95 else f'{seconds:.0f}'} s"
    minutes = round(seconds / 60.0)
    if minutes < 100:
        return f"{minutes} min"
    hours, minutes = divmod(minutes, 60)
    if hours < 10:
        return f"{hours} h {minutes} min" if minutes else f"{hours} h"
    hours = round(seconds / 3600.0)
    if hours < 48:
        return f"{hours} h"
    days, hours = divmod(hours, 24)
    if days < 10:
        return f"{days} d {hours} h" if hours else f"{days} d"
    days = round(seconds / 86400.0)
    return f"{days} d" if seconds < 2 * _YEAR else f"{count(seconds / _YEAR)} years"


def age_text(seconds: float) -> str:
    """An age that changes seldom, so that a screen that shows it is not sent every second."""
    if seconds < 5.0:
        return "just now"
    if seconds < 60.0:
        return f"{5 * int(seconds / 5.0)} s ago"
    minutes = int(seconds / 60.0)
    return f"{duration_text(60.0 * minutes) if minutes > 1 else '1 min'} ago"


def headroom_text(
    steps: Estimate | None, seconds_per_step: float | None = None, per: str = "step"
) -> str:
    """Steps left and, where the run's pace is known, the time they take.

    "1.2 to 1.4 k steps (about 40 to 47 min)"; a reason where there is no estimate.
    """
    told = steps_text(steps, per)
    if steps is None or steps.value is None or not seconds_per_step or seconds_per_step <= 0.0:
        return told
    _, low, high = _bounds(steps)
    if high <= 0.0 or not math.isfinite(low):
        return told
    first, last = duration_text(low * seconds_per_step), duration_text(high * seconds_per_step)
    if math.isinf(high):
        return f"{told} ({first} or more)"
    if first == last:
        return f"{told} (about {first})"
    unit = last.rpartition(" ")[2]
    if first.count(" ") == last.count(" ") == 1 and first.endswith(f" {unit}"):
        first = first.removesuffix(f" {unit}")
    return f"{told} (about {first} to {last})"


def condition_sign(condition: Condition, ascii: bool = False) -> str:
    """Three characters that show a condition without colour; plain ones with `ascii`."""
    return _SIGNS[condition][1 if ascii else 0]


def kind_text(kind: Kind) -> str:
    """What kind of growth, in words."""
    return _KINDS[kind]


def drift_text(evidence: Evidence) -> str:
    """How far the totals of conserved fields have drifted, "" where none is conserved:
    "total of h +1.2e-6, of u -3.1e-4"."""
    told = [
        f"of {clean(c.f)} {'+' if float(c.drift) > 0.0 else ''}{number(c.drift, 2)}"
        for c in evidence.channels
        if c.drift is not None
    ]
    return f"total {', '.join(told)}" if told else ""


def history_text(record: History) -> str:
    """Where a history stands: "energy 1.2e3 at step 1,203, swelling: its changes grew ...; ruin in
    210 to 260 steps"."""
    per = "line" if record.step is None else "step"
    at = f"step {exact(record.step)}" if record.step is not None else f"line {record.sample + 1:,}"
    value = clean(record.print) or number(record.value)
    verdict = record.verdict
    told = f"{clean(record.name)} {value} at {at}, {verdict.condition}"
    if verdict.why:
        told += f": {clean(verdict.why.removeprefix(f'{record.name}: '))}"
    for name, left in (("ruin", verdict.ruin), ("overflow", verdict.overflow)):
        if left is not None and left.value is not None:
            told += f"; {name} in {steps_text(left, per)}"
    return told


def box_text(box: tuple[tuple[int, int], ...]) -> str:
    """An index box, ends excluded: "[88, 96) x [40, 56)"."""
    return " x ".join(f"[{lo}, {hi})" for lo, hi in box)


def place_text(snapshot: Snapshot) -> str:
    """Where in the run a snapshot stands: its step, or its number where the step is unknown."""
    if snapshot.step is None:
        return f"snapshot {exact(snapshot.index)}"
    return f"step {exact(snapshot.step)}"


def moment_text(at: float, now: float) -> str:
    """Local wall-clock time: "14:05:12", with its date if that is not today's."""
    when, today = datetime.fromtimestamp(at), datetime.fromtimestamp(now)
    if when.date() == today.date():
        return when.strftime("%H:%M:%S")
    return when.strftime("%Y-%m-%d %H:%M")


def verdict_text(verdict: Verdict, per: str = "step") -> str:
    """One sentence about a verdict: its evidence, or what can be said without any."""
    if verdict.why:
        return clean(verdict.why)
    if verdict.condition == "gathering":
        return "too few snapshots yet to judge"
    if verdict.kind == "resolved" and verdict.factor is not None:
        return (
            f"{clean(verdict.field)} grows {factor_text(verdict.factor)} per {per}, "
            "at a wavelength that the grid carries"
        )
    return "nothing grows that the grid does not carry"


def snapshot_line(snapshot: Snapshot, run_name: str) -> str:
    """One line of plain text about a snapshot, for standard error and plain listings.

    The sign is ASCII so that the line survives every terminal and can be searched for.
    """
    verdict = snapshot.verdict
    per = "step" if snapshot.step is not None else "snapshot"
    parts = [
        f"{clean(run_name)}  {place_text(snapshot)}  "
        f"{condition_sign(verdict.condition, ascii=True)} {verdict.condition}"
    ]
    if verdict.kind != "none" or verdict.condition != "quiet":
        parts.append(verdict_text(verdict, per))
    if verdict.ruin is not None and verdict.ruin.value is not None:
        parts.append(f"ruin in {steps_text(verdict.ruin, per)}")
    return "; ".join(parts)
