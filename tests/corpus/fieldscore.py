"""Score answers about real runs against their truth. Pure.

An alarm is useful if it comes after the onset and before the overflow, while the garbage is below a
stated share of the field but not below what the stored numbers can show, and if the clean twin does
not raise one as early.
"""

from __future__ import annotations

import math
import statistics
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from monitor.growthlog.records import Box
from tests.corpus.case import volume
from tests.corpus.scoring import log_error

Truth = Mapping[str, Any]

LIMITS = (1.0, 0.1, 0.01)
# A fit of the error is a straight line where its residuals (rms, in ln) are below this.
_STRAIGHT = 0.35
# Rounding of a computation in double and in single precision, with room.
_TINY, _TINY_SINGLE = 1e-16, 1e-8
# A run that grows exponentially by its physics: healthy by its label, told apart.
APART = {"pp_exp_growth": "grows exponentially by its physics"}


@dataclass(frozen=True, slots=True)
class Answer:
    """What a detector says of a run: step of its alarm (None: none), factor per step, region."""

    step: int | None = None
    factor: float | None = None
    region: Box | None = None
    why: str = ""


def share_at(truth: Truth, step: int) -> float | None:
    """Garbage over field at a step: as measured, or, where that is hidden by the twin's own error,
    on the straight line of the error traced back. None where it is not known."""
    found = None
    for at, value in truth.get("contamination") or []:
        if at > step:
            break
        found = math.inf if value == "inf" else float(value)
    back = traced_back(truth, step)
    fit = truth.get("growth_fit_to_contamination") or {}
    if found is not None and back is not None and fit["rms_ln"] < _STRAIGHT:
        return min(found, back)
    return found


def traced_back(truth: Truth, step: int) -> float | None:
    """Garbage on the line fitted to its logarithm, None without one."""
    fit = truth.get("growth_fit_to_contamination")
    if not fit:
        return None
    return math.exp(min(300.0, fit["ln_at_step0"] + step * math.log(fit["G"])))


def after_cause(truth: Truth, answer: Answer) -> bool:
    """Whether an alarm lies between onset and overflow."""
    end = truth["first_nonfinite_or_1e30_step"]
    if answer.step is None or (end is not None and answer.step >= end):
        return False
    return answer.step >= (truth.get("onset_step") or 0)


def by_luck(truth: Truth, answer: Answer) -> bool:
    """Whether the garbage was still below what the numbers can hold at the alarm."""
    single = truth["dtype"] != "float64" or "32" in truth["dtype_compute"]
    back = traced_back(truth, answer.step) if answer.step is not None else None
    return back is not None and back < (_TINY_SINGLE if single else _TINY)


def useful(truth: Truth, answer: Answer, twin: Answer | None, limit: float) -> bool:
    """Whether an alarm about a sick run is useful with the garbage below `limit` of the field."""
    if answer.step is None or not after_cause(truth, answer) or by_luck(truth, answer):
        return False
    if twin is not None and twin.step is not None and twin.step <= answer.step:
        return False
    share = share_at(truth, answer.step)
    return share is not None and share < limit


def hit(truth: Truth, box: Box | None) -> bool | None:
    """Whether a region is the true one: its middle within a cell of it, or half of it inside.
    None where either is not known."""
    true = [truth["unstable_region"]] if truth.get("unstable_region") else []
    true += truth.get("unstable_region_alt") or []
    true = [region for region in true if box is not None and len(region) == len(box)]
    if not true or box is None:
        return None
    for region in true:
        pairs = list(zip(box, region, strict=True))
        middle = all(lo - 1 <= (a + b - 1) / 2 <= hi for (a, b), (lo, hi) in pairs)
        shared = math.prod(max(0, min(b, hi) - max(a, lo)) for (a, b), (lo, hi) in pairs)
        if middle or 2 * shared >= volume(box):
            return True
    return False


def factor_error(truth: Truth, answer: Answer) -> float | None:
    """|ln told / ln true - 1| for the nearest true factor, None where that is not reliable."""
    if answer.factor is None or not truth.get("growth_reliable"):
        return None
    true = [truth["growth_per_step_true"], *(truth.get("growth_alt") or [])]
    return min(log_error(answer.factor, g) for g in true if g and g > 1.0)


def table(truths: Mapping[str, Truth], columns: Mapping[str, Mapping[str, Answer]]) -> str:
    """Program and rules side by side, then what the program missed or alarmed for nothing."""
    lines: dict[str, list[str]] = {}
    for answers in columns.values():
        for name, value in summary(truths, answers):
            lines.setdefault(name, []).append(value)
    width = max(map(len, lines))
    head = " " * width + "".join(f"  {name:>12s}" for name in columns)
    text = [head] + [
        f"{name:{width}s}" + "".join(f"  {v:>12s}" for v in values)
        for name, values in lines.items()
    ]
    return "\n".join([*text, "", *details(truths, next(iter(columns.values())))])


def summary(truths: Mapping[str, Truth], answers: Mapping[str, Answer]) -> list[tuple[str, str]]:
    """Rows of the table for one detector."""
    well = [n for n, t in truths.items() if t["label"] == "stable" and n not in APART]
    plain = [n for n in well if not truths[n].get("control_of")]
    twins = [n for n in well if truths[n].get("control_of")]
    ill = [n for n, t in truths.items() if t["label"] == "unstable"]
    out = [
        (f"false alarms on {len(plain)} healthy runs", str(_alarmed(answers, plain))),
        (f"false alarms on {len(twins)} clean twins", str(_alarmed(answers, twins))),
    ]
    for limit in LIMITS:
        good = [n for n in ill if useful(truths[n], answers[n], answers.get(f"{n}__clean"), limit)]
        out.append((f"useful of {len(ill)}, garbage below {limit:g}", str(len(good))))
    seen = [n for n in ill if after_cause(truths[n], answers[n])]
    hits = [h for n in seen if (h := hit(truths[n], answers[n].region)) is not None]
    known = sum(bool(truths[n].get("unstable_region")) for n in ill)
    errors = [e for n in seen if (e := factor_error(truths[n], answers[n])) is not None]
    out.append((f"regions hit of {known}", str(sum(hits))))
    out.append(("median error of ln G", f"{statistics.median(errors):.2%}" if errors else "-"))
    return out


def details(truths: Mapping[str, Truth], answers: Mapping[str, Answer]) -> list[str]:
    """A line for every run on which the program falls short."""
    out = []
    for name, truth in truths.items():
        told = answers[name]
        if truth["label"] == "stable":
            if told.step is not None:
                apart = f" (apart: {APART[name]})" if name in APART else ""
                out.append(f"{name}: false alarm at step {told.step}{apart}: {told.why}")
            continue
        if not useful(truth, told, answers.get(f"{name}__clean"), LIMITS[-1]):
            share = share_at(truth, told.step) if told.step is not None else None
            what = "no alarm" if told.step is None else f"alarm at step {told.step}"
            size = f", garbage {share:.1e}" if share is not None else ""
            end = truth["first_nonfinite_or_1e30_step"]
            out.append(f"{name}: {what}{size}, onset {truth['onset_step']}, overflow {end}")
        if hit(truth, told.region) is False:
            out.append(f"{name}: region {told.region} for {truth['unstable_region']}")
    return out


def _alarmed(answers: Mapping[str, Answer], names: list[str]) -> int:
    return sum(answers[n].step is not None for n in names)
