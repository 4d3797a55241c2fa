"""The answer as a table for a person."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator

from monitor.limits.answer import LimitAnswer
from monitor.wording import clean, exact, number
from probes.limits.matrix import MatrixAnswer
from probes.limits.records import Found, Wave

_LABEL = 20
_WIDTH = 98

Row = tuple[str, str]


def write_up(answer: LimitAnswer) -> str:
    """All lines, without a newline at the end."""
    lines = textwrap.wrap(clean(answer.title), _WIDTH)
    for label, text in _rows(answer):
        lines += textwrap.wrap(
            clean(text),
            _WIDTH,
            initial_indent=f"{label:{_LABEL}}",
            subsequent_indent=" " * _LABEL,
            break_on_hyphens=False,
        )
    return "\n".join(lines)


def _rows(answer: LimitAnswer) -> Iterator[Row]:
    yield "largest stable step", _step(answer.dt_max)
    symbol = answer.symbol
    if symbol is not None:
        if symbol.wave is not None:
            where = f" at cell {list(symbol.cell)}" if symbol.cell else ""
            yield "  first to grow", wave_text(symbol.wave) + where
        if answer.matrix_dt is not None:
            yield "  any grid", _step(symbol.dt)
    if answer.matrix_dt is not None:
        yield "  this grid", _step(answer.matrix_dt)
    if answer.budget is not None:
        budget = answer.budget
        told = f"growth up to {number(budget.growth)} in {exact(budget.steps)} steps"
        yield "  within a budget", f"{_step(budget.dt)} ({told})"
    if answer.judged_at is not None:
        label = f"at step {number(answer.judged_at, 6)}"
        if answer.step is not None:
            yield label, f"{answer.verdict.upper()}: {answer.why}"
            yield from _margin(answer)
        else:
            yield label, "the numbers of each term"
        for n in answer.numbers:
            alone = "" if n.alone is None else f" (alone at most {number(n.alone, 5)})"
            yield f"  {n.term}"[: _LABEL - 1], f"{n.name} {number(n.value, 5)}{alone}"
    if answer.matrix is not None:
        yield from _matrix(answer.matrix)
    for note in answer.notes:
        yield "note", note


def _margin(answer: LimitAnswer) -> Iterator[Row]:
    limit = answer.dt_max.value
    if limit and answer.step is not None:
        yield "  of the limit", f"{answer.step / limit:.2%}"
    if answer.symbol is not None and not answer.stable and answer.wave is not None:
        yield "  grows most", wave_text(answer.wave)


def _matrix(m: MatrixAnswer) -> Iterator[Row]:
    yield f"matrix, {exact(m.size)}", f"{m.word}: {m.why}"
    yield "  norm measures", m.weight
    yield "  two-norm", found_text(m.norm)
    condition = "" if m.radius.condition is None else f", condition {number(m.radius.condition, 3)}"
    yield "  spectral radius", f"{found_text(m.radius.value)} ({m.radius.how}{condition})"
    yield "  numerical radius", found_text(m.numerical_radius)
    largest = m.transient.largest
    told = found_text(largest) if m.transient.logarithm < 690.0 else _power(m.transient.logarithm)
    yield "  largest power", f"{told} at step {exact(m.transient.at)} of {exact(m.transient.steps)}"
    yield "  Kreiss constant", found_text(m.kreiss)
    if m.drift:
        yield "  drift", m.drift


def _power(logarithm: float) -> str:
    return f"1e{logarithm / math.log(10.0):.0f}"


def _step(found: Found) -> str:
    if found.value is None:
        return f"none: {found.reason}"
    if found.value == 0.0:
        return f"none: {found.reason}"
    doubt = ""
    if found.low is not None and found.high is not None:
        relative = (found.high - found.low) / found.value
        if relative > 1e-5:
            doubt = f" ({number(found.low, 6)} to {number(found.high, 6)})"
    return f"{number(found.value, 7)}{doubt}{f' ({found.reason})' if found.reason else ''}"


def found_text(found: Found) -> str:
    """A number with its interval, or why there is none."""
    if found.value is None:
        between = ""
        if found.low is not None and found.high is not None:
            between = f"between {number(found.low, 5)} and {number(found.high, 5)}: "
        return f"{between}{found.reason}"
    text = number(found.value, 7)
    width = 0.0 if found.low is None or found.high is None else found.high - found.low
    if width > 1e-6 * abs(found.value):
        text += f" ({number(found.low, 6)} to {number(found.high, 6)})"
    return f"{text}, {found.reason}" if found.reason else text


def wave_text(wave: Wave) -> str:
    """Cells per wavelength, along each axis where there are several."""
    if math.isinf(wave.cells):
        return "the uniform state"
    if wave.cells > 1000.0:
        return "the longest waves"
    text = f"a wave of {number(wave.cells, 4)} cells"
    if len(wave.angles) > 1:
        each = ", ".join("constant" if math.isinf(c) else number(c, 3) for c in wave.cells_per_axis)
        text += f" ({each} along the axes)"
    return text
