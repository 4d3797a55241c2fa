"""With which step to restart after a failure: the configured scheme's limit, else the growth."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import msgspec

from monitor.growthlog.read import LogContents
from monitor.growthlog.records import Estimate, Opened
from monitor.limits.coefficients import Coefficients
from monitor.wording import clean, number
from probes.errors import SettingsError
from probes.limits.building import build, integrator
from probes.limits.cells import CellAnalysis
from probes.limits.records import Found
from probes.limits.restart import RestartStep, from_growth, from_limit
from probes.limits.spec import SchemeSpec

# As the review's own lines (see monitor.reviewtext).
_LABEL, _WIDTH = 10, 98


@dataclass(frozen=True)
class Advice:
    """step: that failed, None if it is not known. found: the ratio to it. note: what kept the
    scheme's own limit from being used, "" if nothing did."""

    step: float | None
    found: RestartStep
    note: str = ""

    def text(self) -> str:
        """One sentence, with what it rests on."""
        ratio = self.found.ratio
        told = [self.note] if self.note else []
        if ratio.value is None:
            told.append(ratio.reason)
        else:
            of = "times the failed step"
            first = f"at most {number(ratio.value, 3)} {of}"
            if self.step is not None:
                first = f"a time step of at most {number(self.step * ratio.value, 4)} ({first})"
            if ratio.low is not None and ratio.high is not None and ratio.high > ratio.low:
                first += f"; the mode's own limit lies at {number(ratio.low, 3)} to "
                first += f"{number(ratio.high, 3)} of it"
            told.append(first)
            if ratio.reason:
                told.append(ratio.reason)
        return f"{'; '.join(told)}; assumes {self.found.assumes}"

    def write_up(self) -> str:
        """The same as lines for a terminal, below a review."""
        return "\n".join(
            textwrap.wrap(
                clean(self.text()),
                _WIDTH,
                initial_indent=f"{'Restart':{_LABEL}}",
                subsequent_indent=" " * _LABEL,
                break_on_hyphens=False,
            )
        )

    def json_object(self) -> dict[str, Any]:
        ratio = self.found.ratio
        new = None if ratio.value is None or self.step is None else self.step * ratio.value
        return {
            "ratio": ratio.value,
            "ratio_interval": [ratio.low, ratio.high],
            "step": new,
            "failed_step": self.step,
            "curable_by_step": self.found.curable,
            "reason": "; ".join(part for part in (self.note, ratio.reason) if part),
            "assumes": self.found.assumes,
        }


def settings_of(contents: LogContents) -> Mapping[str, Any]:
    """The settings of the guard that wrote the log last."""
    opened = [record for record in contents.records if isinstance(record, Opened)]
    return opened[-1].settings if opened else {}


def advise(settings: Mapping[str, Any], folder: Path, growth: Estimate) -> Advice | None:
    """Advice for a run that failed with `growth` per step; None where the settings in its log name
    no scheme. folder: that the files in them start from."""
    table = settings.get("scheme")
    if not isinstance(table, Mapping):
        return None
    try:
        spec = msgspec.convert(table, SchemeSpec)
        method = integrator(spec.integrator, spec)
    except (msgspec.ValidationError, SettingsError):
        return None
    step = spec.step or None
    note = "the scheme names no step" if step is None else ""
    if step is not None:
        try:
            limit = CellAnalysis(build(spec, Coefficients(folder, spec.snapshot))).limit().limit
        except SettingsError as error:
            note = f"the scheme's own limit is not known ({error.what})"
        else:
            found = from_limit(limit, step)
            if found.ratio.value is not None or limit.dt.value == 0.0:
                return Advice(step, found)
            note = found.ratio.reason
    low, high = _interval(growth)
    if low is None or high is None:
        unknown = Found.none("no growth factor over 1 is known")
        return Advice(step, RestartStep(unknown, False, "nothing"), note)
    return Advice(step, from_growth(method, low, high), note)


def _interval(growth: Estimate) -> tuple[float | None, float | None]:
    """The factor's interval above one; its value where there is no interval."""
    value = growth.value if isinstance(growth.value, float) else None
    if value is None or value <= 1.0:
        return None, None
    low = growth.low if isinstance(growth.low, float) else value
    high = growth.high if isinstance(growth.high, float) else value
    return max(low, 1.0 + 1e-9), max(high, value)
