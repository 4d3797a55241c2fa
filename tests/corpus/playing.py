"""Play cases: make each run, follow it with the detector and the two rules, score. In parallel."""

from __future__ import annotations

import multiprocessing
import os
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass, field, replace
from typing import Any, TextIO, TypeVar

from tests.corpus.case import Case, Half, Label
from tests.corpus.rules import maximum_rule, rising_rule
from tests.corpus.running import follow
from tests.corpus.scoring import Score, score

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Played:
    """A case in one draw: how the detector did, and at which snapshot the two rules fired.

    failed: what went wrong, where it could not be played.
    """

    case: str
    family: str
    label: Label
    half: Half
    draw: int
    dtype: str = "<f8"
    apart: str = ""
    linear: bool = True
    factor: float | None = None
    score: Score = field(default_factory=Score)
    maximum: int | None = None
    rising: int | None = None
    snapshots: int = 0
    seconds: tuple[float, float] = (0.0, 0.0)
    failed: str = ""


def play(case: Case, draw: int) -> Played:
    """Play one case. A fault in it, or in the detector, is told and does not end the rest."""
    base = Played(case.name, case.family, case.label, case.half, draw, apart=case.apart)
    began = time.perf_counter()
    try:
        run = case.run(draw)
        made = time.perf_counter()
        said = list(follow(run))
        done = time.perf_counter()
    except Exception as error:
        return replace(base, failed=f"{type(error).__name__}: {error}")
    return replace(
        base,
        dtype=run.truth.dtype,
        linear=run.truth.linear,
        factor=run.truth.factor,
        score=score(run, said),
        maximum=maximum_rule(run.snapshots),
        rising=rising_rule(run.snapshots),
        snapshots=len(run.snapshots),
        seconds=(made - began, done - made),
    )


def play_by_name(name: str, draw: int) -> Played:
    """For other processes: a case is found by its name there."""
    from tests.corpus.cases import BY_NAME

    return play(BY_NAME[name], draw)


def play_all(cases: Sequence[Case], draws: Sequence[int], jobs: int) -> list[Played]:
    """All cases in all draws, in the order of cases, then draws."""
    tasks = [(case.name, draw) for case in cases if not case.removed for draw in draws]
    played = spread_out(play_by_name, tasks, jobs, "runs")
    return [played[k] for k in range(len(tasks))]


def spread_out(
    work: Callable[..., T], tasks: Sequence[tuple[Any, ...]], jobs: int, what: str
) -> dict[int, T]:
    """work(*task) for all tasks in `jobs` processes; results by number of the task."""
    with Progress(len(tasks), what) as progress:
        out = {}
        for k, result in _results(work, tasks, jobs):
            out[k] = result
            progress.advance()
        return out


def _results(
    work: Callable[..., T], tasks: Sequence[tuple[Any, ...]], jobs: int
) -> Iterator[tuple[int, T]]:
    if jobs <= 1:
        for k, task in enumerate(tasks):
            yield k, work(*task)
        return
    # New interpreters: one library of linear algebra thread each, and no state of ours.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    fresh = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(jobs, mp_context=fresh) as pool:
        waiting = {pool.submit(work, *task): k for k, task in enumerate(tasks)}
        for future in as_completed(waiting):
            yield waiting[future], future.result()


class Progress:
    """A line on standard error that is written again and again; on a file now and then."""

    def __init__(self, total: int, what: str, stream: TextIO | None = None) -> None:
        self._total, self._what, self._done = total, what, 0
        self._stream = stream or sys.stderr
        self._began = time.monotonic()

    def __enter__(self) -> Progress:
        return self

    def advance(self) -> None:
        self._done += 1
        live = self._stream.isatty()
        if not live and self._done % max(1, self._total // 10) and self._done < self._total:
            return
        gone = time.monotonic() - self._began
        end = "\r" if live and self._done < self._total else "\n"
        text = f"{self._done} of {self._total} {self._what}, {gone:.0f} s"
        print(text, end=end, file=self._stream, flush=True)

    def __exit__(self, *failure: object) -> None:
        return None
