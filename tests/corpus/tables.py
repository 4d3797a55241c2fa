"""Tables of scored runs as plain text: per family, per half, in total. Pure."""

from __future__ import annotations

import math
import statistics
from collections.abc import Callable, Iterable, Sequence

from tests.corpus.playing import Played

Column = tuple[str, Callable[[Sequence[Played]], str]]

# Longest time at `swelling` that a healthy run may take, in snapshots.
CALM = 3
# Growth per step, in ln, below which an error of 10 % is allowed instead of 5 %.
_SLOW, _CLOSE, _CLOSE_SLOW = 0.002, 0.05, 0.10
_ONSET = 5


def of(part: Iterable[bool]) -> str:
    """ "3/5": how many of how many; "-" of none."""
    flags = list(part)
    return f"{sum(flags)}/{len(flags)}" if flags else "-"


def middle(values: Iterable[float | None], form: str = "{:.1e}") -> str:
    """Median of what there is."""
    known = [v for v in values if v is not None and not math.isnan(v)]
    return form.format(statistics.median(known)) if known else "-"


def healthy(runs: Sequence[Played]) -> list[Played]:
    return [r for r in runs if r.label == "healthy" and not r.failed and not r.apart]


def sick(runs: Sequence[Played]) -> list[Played]:
    return [r for r in runs if r.label == "sick" and not r.failed and not r.apart]


def sighted(runs: Sequence[Played], sight: str) -> list[Played]:
    return [r for r in sick(runs) if r.score.sight == sight]


def bounded(runs: Sequence[Played]) -> list[Played]:
    return [r for r in sick(runs) if r.score.at_once is not None]


def missed(run: Played) -> bool:
    """No alarm before values ceased to be finite."""
    return run.score.alarm is None or run.score.late


def close(run: Played) -> bool:
    """Whether the factor is as near to the truth as asked for."""
    slow = run.factor is not None and math.log(run.factor) < _SLOW
    return run.score.error is not None and run.score.error <= (_CLOSE_SLOW if slow else _CLOSE)


def _measured(runs: Sequence[Played]) -> list[Played]:
    return [r for r in sick(runs) if r.linear and r.score.error is not None]


def _ruins(runs: Sequence[Played]) -> list[tuple[bool, float]]:
    return [ruin for r in sick(runs) for ruin in r.score.ruins]


def _useful(runs: Sequence[Played], rule: str) -> str:
    """Sick runs in which a rule of ten lines fired after the cause and below a thousandth."""
    flags = []
    for r in sighted(runs, "enough"):
        number, early = getattr(r, rule), r.score.early
        flags.append(number is not None and early is not None and number < early)
    return of(flags)


HEALTHY: tuple[Column, ...] = (
    ("runs", lambda r: str(len(healthy(r)))),
    ("runaway", lambda r: str(sum(p.score.alarm is not None for p in healthy(r)))),
    (f"swelling>{CALM}", lambda r: str(sum(p.score.swollen > CALM for p in healthy(r)))),
    ("max rule", lambda r: str(sum(p.maximum is not None for p in healthy(r)))),
    ("rising rule", lambda r: str(sum(p.rising is not None for p in healthy(r)))),
)
WARNING: tuple[Column, ...] = (
    ("runs", lambda r: str(len(sick(r)))),
    (">=12: in time", lambda r: of(p.score.in_time for p in sighted(r, "enough"))),
    ("6-11: suspected", lambda r: of(p.score.suspected_in_time for p in sighted(r, "some"))),
    ("6-11: in time", lambda r: of(p.score.in_time for p in sighted(r, "some"))),
    ("sparse: alarm", lambda r: of(not missed(p) for p in sighted(r, "sparse"))),
    ("at bound", lambda r: of(bool(p.score.at_once) for p in bounded(r))),
    ("missed", lambda r: str(sum(missed(p) for p in sick(r) if p.score.at_once is None))),
    ("premature", lambda r: str(sum(p.score.premature for p in sick(r)))),
    ("max rule", lambda r: _useful(r, "maximum")),
    ("rising rule", lambda r: _useful(r, "rising")),
)
MEASURES: tuple[Column, ...] = (
    ("share f8", lambda r: middle(p.score.share for p in sick(r) if p.dtype == "<f8")),
    ("share f4", lambda r: middle(p.score.share for p in sick(r) if p.dtype == "<f4")),
    ("ln G error", lambda r: middle((p.score.error for p in _measured(r)), "{:.2%}")),
    ("at alarm", lambda r: middle((p.score.error_at_alarm for p in _measured(r)), "{:.2%}")),
    ("close", lambda r: of(close(p) for p in _measured(r))),
    ("covered", lambda r: of(bool(p.score.covered) for p in _measured(r))),
    ("region", lambda r: of(p.score.hit for p in sick(r) if p.score.hit is not None)),
    ("volume", lambda r: middle((p.score.ratio for p in sick(r)), "{:.2g}")),
    ("<=4", lambda r: of(p.score.ratio <= 4.0 for p in sick(r) if p.score.ratio is not None)),
    (
        "onset",
        lambda r: of(abs(p.score.onset) <= _ONSET for p in sick(r) if p.score.onset is not None),
    ),
    (
        "ruin",
        lambda r: middle(
            [statistics.mean(hit for hit, _ in _ruins(r))] if _ruins(r) else [], "{:.0%}"
        ),
    ),
    ("width", lambda r: middle((width for _, width in _ruins(r)), "{:.2g}")),
)


def rows(runs: Sequence[Played]) -> list[tuple[str, list[Played]]]:
    """Groups that get a line each: the families, the halves, all."""
    families = dict.fromkeys(r.family for r in runs)
    out = [(name, [r for r in runs if r.family == name]) for name in families]
    out += [(f"{half} half", [r for r in runs if r.half == half]) for half in ("tuned", "scored")]
    return [*out, ("all", list(runs))]


def table(title: str, columns: Sequence[Column], groups: Sequence[tuple[str, list[Played]]]) -> str:
    """One table; groups without anything in it are left out."""
    lines = [[title, *(name for name, _ in columns)]]
    for name, runs in groups:
        if any(not r.failed for r in runs):
            lines.append([name, *(tell(runs) for _, tell in columns)])
    widths = [max(len(line[k]) for line in lines) for k in range(len(lines[0]))]
    text = [
        "  ".join(
            cell.ljust(w) if k == 0 else cell.rjust(w)
            for k, (cell, w) in enumerate(zip(line, widths, strict=True))
        )
        for line in lines
    ]
    text.insert(1, "-" * len(text[0]))
    return "\n".join(text)


def tables(runs: Sequence[Played]) -> str:
    """The three tables of a set of runs."""
    groups = rows(runs)
    ill = [(name, part) for name, part in groups if sick(part)]
    well = [(name, part) for name, part in groups if healthy(part)]
    return "\n\n".join(
        (
            table("healthy", HEALTHY, well),
            table("sick: warning", WARNING, ill),
            table("sick: measures", MEASURES, ill),
        )
    )
