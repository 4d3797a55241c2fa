"""A user's step function, linearised around a state by differences, in a process of its own."""

from __future__ import annotations

import re
import subprocess
import sys
from contextlib import suppress
from pathlib import Path
from threading import Timer
from typing import Any, Self

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from monitor.limits.answer import LimitAnswer
from monitor.limits.judging import Wish
from monitor.limits.stepchild import receive, send
from monitor.limits.userstep import DENSE, answer_of_step
from probes.errors import SettingsError
from probes.limits.matrix import analyse
from probes.limits.stepping import FunctionStep, MatrixStep, Step, dense

Array = NDArray[np.float64]

# One step may take this long before it counts as hanging, seconds.
_SECONDS = 120.0
# Central differences err by the square of this share of the state: the cube root of rounding.
_SHARE = float(np.finfo(np.float64).eps) ** (1 / 3)
_STEPS = 200


class StepFunction:
    """`module:function` in a child process; the function takes a state and returns the next one.

    Raises SettingsError for what the function does wrong.
    """

    def __init__(self, name: str, folder: Path) -> None:
        if not re.fullmatch(r"[A-Za-z_][\w.]*:[A-Za-z_]\w*", name):
            raise SettingsError(f"is {name!r}", "--function", "write module:function")
        self.name = name
        self._child = subprocess.Popen(
            [sys.executable, "-P", "-m", "monitor.limits.stepchild", str(folder.resolve()), name],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
        )
        said = self._answer()
        if said != "ready":
            self.close()
            raise SettingsError(str(said), "--function")

    def step(self, state: Array) -> Array:
        """The next state, of the same shape."""
        assert self._child.stdin is not None  # made with a pipe
        try:
            send(self._child.stdin, state)
        except BrokenPipeError as error:
            raise SettingsError(f"{self.name} ended its process", "--function") from error
        stepped = self._answer()
        if not isinstance(stepped, np.ndarray):
            raise SettingsError(str(stepped), "--function")
        if stepped.shape != state.shape:
            what = f"{self.name} returned shape {stepped.shape} for a state of {state.shape}"
            raise SettingsError(what, "--function", "return the next state, of the same shape")
        if not np.isfinite(stepped).all():
            raise SettingsError(f"{self.name} returned numbers that are not finite", "--function")
        return np.asarray(stepped, dtype=np.float64)

    def _answer(self) -> Any:
        assert self._child.stdout is not None  # made with a pipe
        limit = Timer(_SECONDS, self._child.kill)
        limit.start()
        try:
            said = receive(self._child.stdout)
        finally:
            limit.cancel()
        if said is None:
            return f"{self.name} ended its process, or took over {_SECONDS:.0f} s for a step"
        return said

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """End the process."""
        self._child.kill()
        self._child.wait()
        for pipe in (self._child.stdin, self._child.stdout):
            # What was not taken any more before the end is lost with it.
            with suppress(BrokenPipeError):
                if pipe is not None:
                    pipe.close()


def judge_function(function: StepFunction, state: Array, wish: Wish) -> LimitAnswer:
    """The verdict on the step linearised around `state`."""
    base = function.step(state)
    notes = []
    repeated = float(np.abs(function.step(state) - base).max())
    scale = float(np.abs(state).max()) or 1.0
    if repeated > 0.0:
        notes.append(
            f"the function is not deterministic: twice the same state differs by {repeated:.1e}, "
            f"which hides whatever the differences make smaller than {repeated / _SHARE:.1e}"
        )
    step: Step = FunctionStep(state.size, lambda v: _difference(function, state, v, scale))
    bent = _bending(function, state, base, scale)
    if bent > 0.01:
        notes.append(
            f"the function is not linear here: a step of {_SHARE:.0e} of the state deviates by "
            f"{bent:.0%}, so that the verdict holds for this state and small errors only"
        )
    if state.size <= DENSE:
        step = MatrixStep(sp.csr_array(dense(step)))
    told = "root mean square of the state"
    found = analyse(step, told, wish.powers or _STEPS, wish.transient_max)
    title = f"{function.name}, {state.size} unknowns, linearised by differences"
    return answer_of_step(title, found, tuple(notes))


def _difference(function: StepFunction, state: Array, v: Array, scale: float) -> Array:
    """The derivative of the step in the direction of each column of v."""
    if v.ndim == 2:
        columns = [_difference(function, state, column, scale) for column in v.T]
        return np.array(columns).T
    size = float(np.abs(v).max())
    if size == 0.0:
        return np.zeros_like(v)
    reach = _SHARE * scale / size
    move = (reach * v).reshape(state.shape)
    both = function.step(state + move) - function.step(state - move)
    return np.asarray(both.ravel() / (2.0 * reach))


def _bending(function: StepFunction, state: Array, base: Array, scale: float) -> float:
    """How far from linear: the even part of a small change, as a share of the odd part."""
    v = np.random.default_rng(2_311).standard_normal(state.shape) * _SHARE * scale
    up, down = function.step(state + v) - base, function.step(state - v) - base
    odd = float(np.abs(up - down).max())
    return float(np.abs(up + down).max()) / odd if odd else 0.0
